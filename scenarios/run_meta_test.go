package scenarios

import (
	"context"
	"math"
	"slices"
	"testing"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/msgs"
)

// The metamorphic relations of a rehearsal: what may change about an outing without a change of the final map, but for the datum,
// and of the verdicts. Each change takes a fresh outing and a faultless link; ids are what the changed robots are called.
var relations = []struct {
	name   string
	change func(sc *Scenario, w *World, o *Outing, seed uint64) (ids map[string]string)
}{
	{"robots are called otherwise", func(_ *Scenario, _ *World, o *Outing, _ uint64) map[string]string {
		ids := map[string]string{"r01": "zulu", "r02": "alpha", "r03": "r02"}
		for i := range o.Survey.Robots {
			o.Survey.Robots[i].ID = ids[o.Survey.Robots[i].ID]
		}
		for i := range o.Survey.Ties {
			t := &o.Survey.Ties[i]
			t.FromRobot, t.ToRobot = ids[t.FromRobot], ids[t.ToRobot]
		}
		for i := range o.Survey.Truth {
			o.Survey.Truth[i].Robot = ids[o.Survey.Truth[i].Robot]
		}
		return ids
	}},
	{"messages come late, twice and out of order", func(sc *Scenario, w *World, o *Outing, seed uint64) map[string]string {
		sc.Radio.Loss, sc.Radio.Outages = 0, nil
		sc.Radio.Delay, sc.Radio.Jitter, sc.Radio.Duplicates, sc.Radio.Reordered, sc.Radio.ReorderHold = 2, 5, 0.5, 0.5, 30
		o.Link = healing{NewRadio(sc, w, seed), w.EndNS}
		return nil
	}},
	{"messages are lost and links are cut", func(sc *Scenario, w *World, o *Outing, seed uint64) map[string]string {
		o.Link = healing{NewRadio(sc, w, seed), w.EndNS}
		return nil
	}},
	{"front ends start in other frames", func(_ *Scenario, _ *World, o *Outing, _ uint64) map[string]string {
		for i := range o.Survey.Robots {
			twist := lie.Tangent{1000 * float64(i+1), -300, 0, 0, 0, 2 * float64(i)}
			if o.Survey.Meta.Dimension == 3 {
				twist[2], twist[3] = 40, 0.7
			}
			move := lie.Exp(twist)
			for k := range o.Survey.Robots[i].Keyframes {
				p := &o.Survey.Robots[i].Keyframes[k].Pose
				x := move.Mul(adjust.Pose(*p))
				*p = adjust.Folder(&x)
			}
		}
		return nil
	}},
	{"ties come last, the newest first", func(_ *Scenario, w *World, o *Outing, _ uint64) map[string]string {
		for i, feed := range o.Feed {
			var ties []Event
			rest := slices.DeleteFunc(slices.Clone(feed), func(e Event) bool {
				if e.Kind == TieEvent {
					ties = append(ties, e)
				}
				return e.Kind == TieEvent
			})
			slices.Reverse(ties)
			for _, e := range ties {
				e.AtNS = w.EndNS
				rest = append(rest, e)
			}
			o.Feed[i] = rest
		}
		return nil
	}},
}

// TestRelations runs a small fleet plainly and under every relation. The rounds end where the cost has a share of 3e-12 left to gain,
// so maps agree to a small share of their sigmas: micrometres and tenths of a microradian over some hundred metres.
func TestRelations(t *testing.T) {
	for seed := uint64(1); seed <= 3; seed++ {
		plain := outing(t, seed)
		want := final(t, plain, nil)
		joined := 0
		for _, m := range want.island {
			if m != "" {
				joined++
			}
		}
		if joined == 0 {
			t.Fatalf("seed %d: nothing is joined, so nothing is compared", seed)
		}
		for _, relation := range relations {
			t.Run(relation.name, func(t *testing.T) {
				sc := smallFleet(seed)
				w, err := Simulate(sc, seed)
				if err != nil {
					t.Fatal(err)
				}
				o := w.Outing(sc, seed)
				o.Link = nil
				ids := relation.change(sc, w, o, seed)
				r, err := Virtual(context.Background(), o, Settings{})
				if err != nil {
					t.Fatal(err)
				}
				got := final(t, r, ids)
				for id, v := range want.verdict {
					if got.verdict[id] != v {
						t.Errorf("seed %d, tie %s: %v, plainly %v", seed, id, got.verdict[id], v)
					}
				}
				sameMaps(t, got, want)
			})
		}
	}
}

func outing(t *testing.T, seed uint64) *Run {
	sc := smallFleet(seed)
	w, err := Simulate(sc, seed)
	if err != nil {
		t.Fatal(err)
	}
	o := w.Outing(sc, seed)
	o.Link = nil
	r, err := Virtual(context.Background(), o, Settings{})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// fleetMap is what is left of a run, under the plain names of its robots.
type fleetMap struct {
	verdict map[string]msgs.VerdictKind
	pose    map[adjust.Key]lie.SE3 // in the datum of its island
	island  map[adjust.Key]string
	keys    []adjust.Key
}

func final(t *testing.T, r *Run, ids map[string]string) *fleetMap {
	t.Helper()
	if !r.Settled || len(r.Refusals) > 0 {
		t.Errorf("settled %v, refusals %v", r.Settled, r.Refusals)
	}
	plain := map[string]string{}
	for was, is := range ids {
		plain[is] = was
	}
	m := &fleetMap{map[string]msgs.VerdictKind{}, map[adjust.Key]lie.SE3{}, map[adjust.Key]string{}, nil}
	for _, f := range r.Coordinator.Findings() {
		m.verdict[f.Tie] = f.Verdict
	}
	for i, tracks := range r.tracks() {
		robot := r.Outing.Survey.Robots[i].ID
		if ids != nil {
			robot = plain[robot]
		}
		for _, track := range tracks {
			for k, id := range track.IDs {
				key := adjust.Key{Robot: robot, Session: track.Session, ID: id}
				m.keys = append(m.keys, key)
				m.pose[key] = track.DatumFromSession.Mul(track.Poses[k])
				m.island[key] = track.Island
				if !track.Joined {
					m.island[key] = ""
				}
			}
		}
	}
	return m
}

// sameMaps compares two maps island by island, each seen from its first keyframe.
func sameMaps(t *testing.T, got, want *fleetMap) {
	t.Helper()
	first := map[string]adjust.Key{}
	metres, radians := 0.0, 0.0
	for _, key := range want.keys {
		name := want.island[key]
		if name == "" {
			if got.island[key] != "" {
				t.Fatalf("%v is joined, plainly it is not", key)
			}
			continue
		}
		origin, known := first[name]
		if !known {
			first[name], origin = key, key
		}
		if got.island[key] == "" || got.island[key] != got.island[origin] {
			t.Fatalf("%v is in %q, %v in %q, plainly they are together", key, got.island[key], origin, got.island[origin])
		}
		a, b := got.pose[origin].Inv().Mul(got.pose[key]), want.pose[origin].Inv().Mul(want.pose[key])
		d := a.Between(b)
		xi := d.Log()
		metres = max(metres, math.Hypot(math.Hypot(xi[0], xi[1]), xi[2]))
		radians = max(radians, math.Hypot(math.Hypot(xi[3], xi[4]), xi[5]))
	}
	if !(metres < 1e-6 && radians < 1e-7) {
		t.Errorf("maps differ by %.3g m, %.3g rad", metres, radians)
	}
}
