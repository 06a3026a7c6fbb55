package main

import (
	"fmt"
	"math"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"selvage/internal/audit"
	"selvage/internal/survey"
)

// A control point that is two metres wrong is named, with what was seen of it, though no tie is there to audit.
func TestAuditNamesWrongControlPoint(t *testing.T) {
	dir := t.TempDir()
	yard(t, dir, [][2]float64{{}, {}, {}, {2, 0}, {}, {}, {}})
	a := selvage(t, dir, "audit", "yard")
	a.want(t, 0)
	if says := "Control point k3 is not where its coordinates say: 10 sightings put it 2.00 m away. Its coordinates are left out."; !strings.Contains(a.stdout, says) {
		t.Errorf("no %q in\n%s", says, a.stdout)
	}
	got := auditOf(t, filepath.Join(dir, "yard"))
	for k := range got.Marks {
		m := &got.Marks[k]
		if want := map[bool]audit.Status{true: audit.Contradicts, false: audit.Passed}[m.Mark == "k3"]; m.Control == nil || m.Control.Status != want {
			t.Errorf("%s: %+v, want %s", m.Mark, m.Control, want)
		}
	}
	if len(got.Marks) != 7 || got.Islands[0].Gauge != nil {
		t.Errorf("%d marks, held by %+v", len(got.Marks), got.Islands[0])
	}
}

// passing writes a survey to dir: two robots that pass each other on two lanes and see each other by range and bearing, without error
// but for the last time, which is three metres too long.
func passing(t *testing.T, dir string) {
	t.Helper()
	unmeasured := math.Inf(1)
	s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "passing", Dimension: 2, Datum: survey.Datum{Name: "yard"}}}
	for i, id := range []string{"r1", "r2"} {
		s.Meta.Robots = append(s.Meta.Robots, survey.RobotMeta{ID: id, Sessions: []uint32{1}})
		r := survey.Robot{ID: id}
		for k := range int64(31) {
			pose, step := survey.Identity(), survey.Identity()
			step.T[0] = float64(1 - 2*i)
			pose.T[0] = step.T[0] * float64(k)
			r.Keyframes = append(r.Keyframes, survey.Keyframe{Session: 1, ID: k, Pose: pose})
			if k > 0 {
				r.Relatives = append(r.Relatives, survey.Relative{Session: 1, From: k - 1, To: k, Pose: step,
					Cov: survey.Cov{Sigma: [6]float64{0.02, 0.02, unmeasured, unmeasured, unmeasured, 0.005}}})
			}
		}
		s.Robots = append(s.Robots, r)
	}
	for n := range 7 {
		k := int64(4*n + 2)
		along, across := 30-2*float64(k), 5.0 // of r2 seen from r1, which drives the other way on the next lane
		e := survey.Sight{Value: [3]float64{math.Hypot(along, across), math.Atan2(across, along)}, Sigma: [3]float64{0.05, 0.01, unmeasured}}
		if n == 6 {
			e.Value[0] += 3
		}
		s.Ties = append(s.Ties, survey.Tie{ID: fmt.Sprint("t", n), FromRobot: "r1", FromSession: 1, FromKey: k, ToRobot: "r2", ToSession: 1, ToKey: k, Kind: survey.RangeBearing, Sight: e})
	}
	if err := survey.Write(filepath.Join(dir, "passing"), s); err != nil {
		t.Fatal(err)
	}
}

// Ties that are less than a pose are held if they fit, unless verdicts or rulings say otherwise.
func TestAuditDecidesOnSights(t *testing.T) {
	dir := t.TempDir()
	passing(t, dir)
	verdicts := func() (all []string) {
		for _, x := range auditOf(t, filepath.Join(dir, "passing")).Ties {
			all = append(all, x.Verdict+" "+string(x.Status))
		}
		return all
	}
	a := selvage(t, dir, "audit", "passing")
	a.want(t, 0)
	if !strings.Contains(a.stdout, "6 ties hold the map together: 6 checked and sound") || !strings.Contains(a.stdout, "range and bearing, passed") {
		t.Errorf("it said:\n%s", a.stdout)
	}
	want := slices.Concat(slices.Repeat([]string{"held passed"}, 6), []string{"refused contradicts"})
	if got := verdicts(); !slices.Equal(got, want) {
		t.Errorf("%v, want %v", got, want)
	}
	got := auditOf(t, filepath.Join(dir, "passing"))
	if x := &got.Ties[6]; !strings.Contains(x.Reason, "contradicts what the others predict") || math.Abs(*x.ApartM-3) > 0.05 || got.Decided != "the robust fit, for all else that was seen at once" {
		t.Errorf("%s, %g m apart, decided by %s", x.Reason, *x.ApartM, got.Decided)
	}

	// A person's ruling comes first.
	selvage(t, dir, "rule", "passing", "--tie", "t0", "refused", "--by", "lead", "--note", "seen through a fence").want(t, 0)
	selvage(t, dir, "rule", "passing", "--tie", "t5", "held", "--by", "lead", "--note", "taped").want(t, 0)
	selvage(t, dir, "audit", "passing").want(t, 0)
	got = auditOf(t, filepath.Join(dir, "passing"))
	if x := got.Ties; x[0].Verdict != "refused" || x[0].Status != audit.Fits || x[5].Status != audit.Passed || !strings.Contains(x[5].Reason, "taped") || x[6].Verdict != "refused" {
		t.Errorf("with rulings %v", verdicts())
	}

	// Verdicts of the folder are taken; ties that have none there are open.
	dir = t.TempDir()
	passing(t, dir)
	write(t, dir, "passing/results/verdicts.csv", "tie,verdict,reason,chi_square,threshold,redundancy,detectable\nt0,held,a,,,,\nt1,held,b,,,,\nt2,held,c,,,,\nt3,refused,d,,,,\nt4,held,e,,,,\nt5,held,f,,,,\n")
	selvage(t, dir, "audit", "passing").want(t, 0)
	if got := verdicts(); got[0] != "held passed" || got[3] != "refused fits" || got[6] != "open contradicts" {
		t.Errorf("with verdicts %v", got)
	}
}
