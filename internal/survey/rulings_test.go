package survey

import (
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
)

func TestTieRulings(t *testing.T) {
	tie := func(id, from string, fs uint32, to string, ts uint32) Tie {
		return Tie{ID: id, FromRobot: from, FromSession: fs, ToRobot: to, ToSession: ts}
	}
	s := Survey{Ties: []Tie{tie("ab", "a", 1, "b", 1), tie("ba", "b", 1, "a", 1), tie("ac", "a", 1, "c", 1), tie("a2c", "a", 2, "c", 1), tie("cd", "c", 1, "d", 1)}}
	check := func(want string) {
		t.Helper()
		var got []string
		for _, r := range s.TieRulings() {
			if r == nil {
				got = append(got, "-")
			} else {
				got = append(got, r.Verdict.String()+"/"+strings.ReplaceAll(r.On(), " ", "_"))
			}
		}
		if text := strings.Join(got, " "); text != want {
			t.Errorf("after %d rulings %s, want %s", len(s.Rulings), text, want)
		}
	}
	check("- - - - -")
	for _, c := range []struct {
		target  Target
		name    string
		session uint32
		verdict RulingVerdict
		want    string
	}{
		{OnTie, "ab", 0, RuledHeld, "held/tie_ab - - - -"},
		{OnRobot, "a", 0, RuledRefused, "held/tie_ab refused/robot_a refused/robot_a refused/robot_a -"},
		{OnSession, "a", 2, RuledHeld, "held/tie_ab refused/robot_a refused/robot_a held/session_2_of_robot_a -"},
		{OnRobot, "c", 0, RuledHeld, "held/tie_ab refused/robot_a refused/robot_a held/session_2_of_robot_a held/robot_c"},
		{OnRobot, "c", 0, RuledRefused, "held/tie_ab refused/robot_a refused/robot_c refused/robot_c refused/robot_c"},
		{OnTie, "ab", 0, RuledRefused, "refused/tie_ab refused/robot_a refused/robot_c refused/robot_c refused/robot_c"},
		{OnTie, "ab", 0, RuledFree, "refused/robot_a refused/robot_a refused/robot_c refused/robot_c refused/robot_c"},
		{OnSession, "a", 2, RuledFree, "refused/robot_a refused/robot_a refused/robot_c refused/robot_c refused/robot_c"},
		{OnRobot, "c", 0, RuledFree, "refused/robot_a refused/robot_a refused/robot_a refused/robot_a -"},
		{OnRobot, "a", 0, RuledFree, "- - - - -"},
	} {
		s.Rulings = append(s.Rulings, Ruling{Target: c.target, Name: c.name, Session: c.session, Verdict: c.verdict})
		check(c.want)
	}
}

func TestAppendRuling(t *testing.T) {
	dir := copyOf(t, "sights.good")
	edit(t, dir, "rulings.csv", nil)
	want := sightsSurvey().Rulings
	for _, m := range want {
		if err := AppendRuling(dir, m); err != nil {
			t.Fatal(err)
		}
	}
	sameFiles(t, dir, filepath.Join("testdata", "sights.good"))

	// Columns in another order, one that nobody here knows, and no line end: all of it stays.
	before := "note,time,my colour,by,verdict,session,name,target\r\n\"a, b\",2026-03-31T14:05:00Z,red,lead,held,,pose,tie"
	for _, zipped := range []bool{false, true} {
		dir := copyOf(t, "sights.good")
		edit(t, dir, "rulings.csv", nil)
		name, text := filepath.Join(dir, "rulings.csv"), []byte(before)
		if zipped {
			name, text = name+".gz", gzipped(t, before)
		}
		if err := os.WriteFile(name, text, 0o644); err != nil {
			t.Fatal(err)
		}
		if err := AppendRuling(dir, want[2]); err != nil {
			t.Fatal(err)
		}
		got, err := readTable(name)
		if err != nil {
			t.Fatal(err)
		}
		if diff := cmp.Diff(before+"\nwheel slip,2026-03-31T14:05:01Z,,second,refused,2,r2,session\n", string(got)); diff != "" {
			t.Errorf("(-want +got):\n%s", diff)
		}
		s, err := Read(dir)
		if err != nil || len(s.Rulings) != 2 || s.Rulings[1] != want[2] {
			t.Errorf("rulings %v, %v", s.Rulings, err)
		}
	}
}

// What cannot be appended leaves the folder as it was.
func TestAppendRulingRefuses(t *testing.T) {
	now := time.Date(2026, 3, 31, 14, 0, 0, 0, time.UTC)
	for _, c := range []struct {
		name   string
		change func(m *Ruling)
		want   string
	}{
		{"no such tie", func(m *Ruling) { m.Name = "poses" }, `rulings.csv:6: column name: found "poses", expected a tie that ties.csv lists`},
		{"no such robot", func(m *Ruling) { m.Target = OnRobot }, `rulings.csv:6: column name: found "pose", expected a robot that survey.yaml lists`},
		{"no such session", func(m *Ruling) { m.Target, m.Name, m.Session = OnSession, "r1", 2 }, `rulings.csv:6: column session: found 2, expected a session of robot r1 that survey.yaml lists`},
		{"nobody, for no reason", func(m *Ruling) { m.By, m.Note = "", strings.Repeat("x", maxNote+1) },
			"rulings.csv:6: column by: found \"\", expected one line of printable text, at most 128 bytes, no blank at either end, not empty\n" +
				"rulings.csv:6: column note: found \"" + strings.Repeat("x", 48) + "\" and 209 bytes more, expected one line of printable text, at most 256 bytes, not empty"},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := copyOf(t, "sights.good")
			m := Ruling{Target: OnTie, Name: "pose", Verdict: RuledHeld, By: "lead", Note: "why", Time: now}
			c.change(&m)
			err := AppendRuling(dir, m)
			var bad *Violations
			if !errors.As(err, &bad) || err.Error() != c.want {
				t.Errorf("got %v, want %s", err, c.want)
			}
			sameFiles(t, dir, filepath.Join("testdata", "sights.good"))
		})
	}
	sound := Ruling{Target: OnTie, Name: "pose", Verdict: RuledHeld, By: "lead", Note: "why", Time: now}
	t.Run("survey that is not sound", func(t *testing.T) {
		dir := copyOf(t, "sights.good")
		edit(t, dir, "marks.csv", swap("p1,control", "p1,datum"))
		before := tree(t, dir)
		if err := AppendRuling(dir, sound); err == nil || !strings.HasPrefix(err.Error(), "marks.csv:3: column role") {
			t.Errorf("got %v", err)
		}
		if diff := cmp.Diff(before, tree(t, dir)); diff != "" {
			t.Errorf("(-before +after):\n%s", diff)
		}
	})
	t.Run("somebody else is at it", func(t *testing.T) {
		dir := copyOf(t, "sights.good")
		if err := os.WriteFile(filepath.Join(dir, newRulings), []byte("theirs"), 0o644); err != nil {
			t.Fatal(err)
		}
		before := tree(t, dir)
		if err := AppendRuling(dir, sound); err == nil || !strings.Contains(err.Error(), "somebody else is writing rulings") {
			t.Errorf("got %v", err)
		}
		if diff := cmp.Diff(before, tree(t, dir)); diff != "" {
			t.Errorf("(-before +after):\n%s", diff)
		}
	})
}

// Of many who append at once each has its ruling in the table, or is told that it has not.
func TestAppendRulingsAtOnce(t *testing.T) {
	dir := copyOf(t, "sights.good")
	const n = 16
	errs := make(chan error, n)
	for i := range n {
		go func() {
			errs <- AppendRuling(dir, Ruling{Target: OnTie, Name: "pose", Verdict: RuledHeld, By: "lead", Note: strings.Repeat("x", i+1), Time: time.Unix(0, 0)})
		}()
	}
	done := 0
	for range n {
		if err := <-errs; err == nil {
			done++
		} else if !strings.Contains(err.Error(), "somebody else") {
			t.Error(err)
		}
	}
	s, err := Read(dir)
	if err != nil {
		t.Fatal(err)
	}
	if got := len(s.Rulings) - len(sightsSurvey().Rulings); got != done || done == 0 {
		t.Errorf("%d rulings appended, %d in the table", done, got)
	}
}

func TestKeepsRulings(t *testing.T) {
	dir := copyOf(t, "sights.good")
	s := sightsSurvey()
	if err := KeepsRulings(dir, s); err != nil {
		t.Error(err)
	}
	if err := KeepsRulings(filepath.Join("testdata", "space.good"), nil); err != nil {
		t.Error(err)
	}
	s.Rulings = s.Rulings[1:]
	for _, s := range []*Survey{s, nil} {
		if err := KeepsRulings(dir, s); err == nil || !strings.Contains(err.Error(), "would be lost") {
			t.Errorf("got %v", err)
		}
	}
	if err := Write(dir, s); err == nil || !strings.Contains(err.Error(), "would be lost") {
		t.Errorf("got %v", err)
	}
}

func TestVerdictBehindARuling(t *testing.T) {
	dir := copyOf(t, "space.good")
	s := spaceSurvey()
	v := []ResultVerdict{{Tie: "a.1", Verdict: "held", Reason: "ruled", Evidence: "refused"}, {Tie: "a.2", Verdict: "open"}}
	if err := WriteResults(dir, nil, v, nil, "epoch 1"); err != nil {
		t.Fatal(err)
	}
	got, err := ReadVerdicts(dir, s)
	if err != nil || len(got) != 2 || got[0].Evidence != "refused" || got[1].Evidence != "" {
		t.Errorf("%+v, %v", got, err)
	}
	edit(t, dir, "results/verdicts.csv", swap("refused", "maybe"))
	if _, err := ReadVerdicts(dir, s); err == nil || err.Error() != `results/verdicts.csv:3: column evidence: found "maybe", expected held, refused, open or nothing` {
		t.Errorf("got %v", err)
	}
	v[0].Evidence = "maybe"
	if err := WriteResults(dir, nil, v, nil, "epoch 1"); err == nil {
		t.Error("it was written")
	}
}
