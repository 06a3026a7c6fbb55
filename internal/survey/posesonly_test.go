package survey

import "testing"

func TestPosesOnly(t *testing.T) {
	if err := spaceSurvey().PosesOnly(); err != nil {
		t.Error(err)
	}
	const want = "a fleet works with ties of kind pose; 1 tie is of kind position, 1 tie is of kind range_bearing, 1 tie is of kind range, 1 tie is of kind bearing and 4 rows are sightings of marks"
	if err := sightsSurvey().PosesOnly(); err == nil || err.Error() != want {
		t.Errorf("got %v, want %s", err, want)
	}
	s := sightsInThePlane()
	s.Ties = append(s.Ties, s.Ties[0])
	s.Robots[0].Sightings = nil
	if err := s.PosesOnly(); err == nil || err.Error() != "a fleet works with ties of kind pose; 2 ties are of kind position" {
		t.Errorf("got %v", err)
	}
}
