package survey

import (
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

func TestWriteResults(t *testing.T) {
	dir := copyOf(t, "space.good")
	report := filepath.Join(dir, "results", "report.html")
	if err := os.MkdirAll(filepath.Dir(report), 0o755); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(report, []byte("kept"), 0o644); err != nil {
		t.Fatal(err)
	}
	withCov := ResultPose{Robot: "s-2", Session: 7, ID: 5, StampNS: 12, HasStamp: true, Pose: Identity(), HasCov: true}
	for i := range withCov.Cov {
		withCov.Cov[i] = float64(i)
	}
	poses := []ResultPose{{Robot: "carrier_1", Session: 1, ID: -1, Pose: Identity()}, withCov}
	nan := math.NaN()
	verdicts := []ResultVerdict{
		{Tie: "a.1", Verdict: "held", ChiSquare: 2.5, Threshold: 16.8, Redundancy: 0.75, Detectable: 0.3},
		{Tie: "a.2", Verdict: "open", Reason: "no loop, so nothing to check it", ChiSquare: nan, Threshold: nan, Redundancy: 0, Detectable: inf},
	}
	datum := []ResultDatum{
		{Robot: "carrier_1", Session: 1, Joined: true, Pose: Identity()},
		{Robot: "s-2", Session: 1, Island: 1, Pose: Identity()},
	}
	for range 2 { // the second time over the first
		if err := WriteResults(dir, poses, verdicts, datum, "epoch 4, datum adit"); err != nil {
			t.Fatal(err)
		}
	}
	want := map[string]string{
		"report.html": "kept",
		"poses.csv": `# epoch 4, datum adit; pose datum_from_keyframe; covariance of x y z rx ry rz (m, rad), right perturbation in the frame of the keyframe, upper triangle row by row
robot,session,id,stamp_ns,x_m,y_m,z_m,qx,qy,qz,qw,cov_x_x,cov_x_y,cov_x_z,cov_x_rx,cov_x_ry,cov_x_rz,cov_y_y,cov_y_z,cov_y_rx,cov_y_ry,cov_y_rz,cov_z_z,cov_z_rx,cov_z_ry,cov_z_rz,cov_rx_rx,cov_rx_ry,cov_rx_rz,cov_ry_ry,cov_ry_rz,cov_rz_rz
carrier_1,1,-1,,0,0,0,0,0,0,1,,,,,,,,,,,,,,,,,,,,,
s-2,7,5,12,0,0,0,0,0,0,1,0,1,2,3,4,5,6,7,8,9,10,11,12,13,14,15,16,17,18,19,20
`,
		"verdicts.csv": `# epoch 4, datum adit
tie,verdict,reason,chi_square,threshold,redundancy,detectable
a.1,held,,2.5,16.8,0.75,0.3
a.2,open,"no loop, so nothing to check it",,,0,inf
`,
		"datum_from_session.csv": `# epoch 4, datum adit; pose datum_from_session, of its island where joined is false
robot,session,joined,island,x_m,y_m,z_m,qx,qy,qz,qw
carrier_1,1,true,0,0,0,0,0,0,0,1
s-2,1,false,1,0,0,0,0,0,0,1
`,
	}
	if diff := cmp.Diff(want, tree(t, filepath.Join(dir, "results"))); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	got, err := Read(dir) // results are none of its business
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(spaceSurvey(), got); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
}

func TestWriteResultsRefusals(t *testing.T) {
	for _, c := range []struct {
		poses    []ResultPose
		verdicts []ResultVerdict
		note     string
		want     string
	}{
		{note: "two\nlines", want: "expected one line of printable text"},
		{verdicts: []ResultVerdict{{Tie: "a", Verdict: "maybe"}}, want: `verdict "maybe" on tie "a", expected held, refused or open`},
		{verdicts: []ResultVerdict{{Tie: "a", Verdict: "open", Reason: "\x00"}}, want: "expected a tie id and one line"},
		{poses: []ResultPose{{Robot: "r1", Pose: Pose{T: [3]float64{math.NaN()}}}}, want: "pose of robot r1, session 0 is not finite"},
		{poses: []ResultPose{{Robot: "r,1", Pose: Identity()}}, want: `robot "r,1", expected 1 to 32 letters`},
	} {
		dir := t.TempDir()
		err := WriteResults(dir, c.poses, c.verdicts, nil, c.note)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("got %v, want %s", err, c.want)
		}
		if files := tree(t, dir); len(files) > 0 {
			t.Errorf("%d files written", len(files))
		}
	}
}
