package scenarios

import (
	"context"
	"testing"

	"selvage/internal/report"
)

// Ties that name their far end by a moment between two keyframes: the robot that was seen makes a keyframe there, and the fleet
// still ends where the one-piece adjustment does.
func TestTiesByMoment(t *testing.T) {
	sc := smallFleet(3)
	sc.Radio = RadioSpec{}
	w, err := Simulate(sc, 3)
	if err != nil {
		t.Fatal(err)
	}
	stamp := map[string]map[int64]int64{}
	for i := range w.Survey.Robots {
		r := &w.Survey.Robots[i]
		stamp[r.ID] = map[int64]int64{}
		for k := range r.Keyframes {
			stamp[r.ID][r.Keyframes[k].ID] = r.Keyframes[k].StampNS
		}
	}
	for i := range w.Survey.Ties {
		tie := &w.Survey.Ties[i]
		at := stamp[tie.ToRobot][tie.ToKey]
		next, ok := stamp[tie.ToRobot][tie.ToKey+1]
		if !ok {
			continue
		}
		tie.ToByStamp, tie.ToKey = true, 0
		switch i % 3 { // at a keyframe, and just after one: 2 mm of walking
		case 0:
			tie.ToStampNS = at
		default:
			tie.ToStampNS = at + (next-at)/int64(400*(i%3))
		}
	}
	r, err := Virtual(context.Background(), w.Outing(sc, 3), Settings{})
	if err != nil {
		t.Fatal(err)
	}
	inserted := 0
	for _, tracks := range r.tracks() {
		for _, id := range tracks[0].IDs {
			if id < 0 {
				inserted++
			}
		}
	}
	if inserted < 5 {
		t.Errorf("%d keyframes were made for a moment", inserted)
	}
	if last := r.Samples[len(r.Samples)-1]; last.Joined < 2 {
		t.Errorf("%d robots joined", last.Joined)
	}
	checkHealed(t, r)

	// The plan draws every held tie; a far end is known by its moment only.
	places := r.places()
	poses, err := r.resultPoses(places)
	if err != nil {
		t.Fatal(err)
	}
	drawn, held := 0, score(t, r).Ties.All.Held
	for _, x := range r.plan(places, poses, newTruthIndex(w.Survey), nil).Ties {
		if x.Verdict == report.Held {
			drawn++
		}
	}
	if held == 0 || drawn != held {
		t.Errorf("%d ties drawn as held, %d are", drawn, held)
	}
}
