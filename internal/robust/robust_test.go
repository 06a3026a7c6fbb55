package robust

import (
	"math"
	"math/rand/v2"
	"reflect"
	"testing"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
)

// walk is a robot that drives round among marks and sees them, by range and bearing and by position; the true poses and which
// sightings are wrong.
type walk struct {
	g     *posegraph.Graph
	truth []lie.SE3
	wrong map[Finding]bool // by Set and K alone
}

func (w *walk) isWrong(f *Finding) bool { return w.wrong[Finding{Set: f.Set, K: f.K}] }

func newWalk(seed uint64, dim int, share float64) *walk {
	r := rand.New(rand.NewPCG(seed, 3))
	w := &walk{wrong: map[Finding]bool{}}
	noise := func(m, rad float64) (t lie.Tangent) {
		for i := range t {
			t[i] = m * r.NormFloat64()
			if i > 2 {
				t[i] = rad * r.NormFloat64()
			}
			if dim == 3 && i > 1 && i < 5 {
				t[i] = 0
			}
		}
		return t
	}
	const keyframes, marks = 60, 8
	x, own := lie.Identity(), lie.Identity()
	var poses, steps []lie.SE3
	for range keyframes {
		w.truth, poses = append(w.truth, x), append(poses, own)
		step := lie.Exp(lie.Tangent{0: 1, 5: 2 * math.Pi / 40})
		x = x.Mul(step)
		steps = append(steps, step.Plus(noise(0.03, 0.01)))
		own = own.Mul(steps[len(steps)-1])
	}
	w.g = posegraph.New(dim, poses)
	b := w.g.AddBetween()
	var info [36]float64
	for i := range 6 {
		info[7*i] = 1 / (0.03 * 0.03)
		if i > 2 {
			info[7*i] = 1 / (0.01 * 0.01)
		}
	}
	for k := range keyframes - 1 {
		b.Add(int32(k), int32(k+1), steps[k], &info)
	}
	var places [marks][3]float64
	for m := range places {
		places[m] = [3]float64{12 * (2*r.Float64() - 1), 6 + 12*(2*r.Float64()-1), 0}
		if dim == 6 {
			places[m][2] = 4 * r.Float64()
		}
		w.g.Values.Points = append(w.g.Values.Points, places[m])
	}
	polar, position := w.g.AddSightings(posegraph.RangeBearing), w.g.AddSightings(posegraph.Position)
	for k := range keyframes {
		for n := range 3 {
			m := (k + 3*n) % marks
			set, seen := polar, m
			if k%4 == 3 {
				set = position
			}
			if r.Float64() < share {
				seen = (m + 1 + r.IntN(marks-1)) % marks
				w.wrong[Finding{Set: set, K: set.Len()}] = true
			}
			q := w.truth[k].Inv().Apply(places[seen])
			z, s := q, [3]float64{0.1, 0.1, 0.1}
			if set == polar {
				flat := math.Hypot(q[0], q[1])
				z, s = [3]float64{math.Hypot(flat, q[2]), math.Atan2(q[1], q[0]), math.Atan2(q[2], flat)}, [3]float64{0.1, 0.03, 0.03}
			}
			var own lie.Mat3
			for i := range z {
				if dim == 3 && i == 2 {
					z[i] = 0
					continue
				}
				z[i] += s[i] * r.NormFloat64()
				own[4*i] = 1 / (s[i] * s[i])
			}
			set.Add(int32(k), int32(m), lie.Identity(), [3]float64{}, z, &own)
		}
	}
	posegraph.PlacePoints(w.g)
	return w
}

func (w *walk) solver(t *testing.T) *posegraph.Solver {
	t.Helper()
	s, err := posegraph.NewSolver(w.g, []int32{0}, sparse.Options{})
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// A sixth of the sightings name another mark than they saw. Those are found, few others are refused, the map is as good as without
// them, and every finding is what the statistic says.
func TestDecide(t *testing.T) {
	for _, dim := range []int{3, 6} {
		wrong, found, good, refused, sum, n := 0, 0, 0, 0, 0.0, 0
		for seed := range uint64(6) {
			w := newWalk(seed, dim, 1.0/6)
			res := Decide(w.g, w.solver(t), Options{Adjust: posegraph.DefaultOptions(), FromAll: true})
			if res.Stop != posegraph.Converged {
				t.Errorf("dimension %d, seed %d: %v after %d", dim, seed, res.Stop, res.Iterations)
			}
			count := 0
			for i := range res.Findings {
				f := &res.Findings[i]
				out := f.Verdict == evidence.Refused
				if out {
					count++
				}
				if weight := f.Set.W[f.K]; out != (weight == evidence.Floor) || !out && weight != 1 {
					t.Errorf("weight %g of a sighting that is %v", weight, f.Verdict)
				}
				if f.DoF != f.Set.Freedoms(f.K) || f.Limit != Limit(f.DoF) || !out && f.Statistic > f.Limit || f.Reason() == "" {
					t.Errorf("%v with %.1f of %d, limit %.1f, %q", f.Verdict, f.Statistic, f.DoF, f.Limit, f.Reason())
				}
				if w.isWrong(f) {
					wrong++
					if out {
						found++
					}
					continue
				}
				good++
				if out {
					refused++
				}
				sum, n = sum+f.Statistic, n+f.DoF
			}
			if count != res.Refused {
				t.Errorf("%d refused, said to be %d", count, res.Refused)
			}
			for k, x := range w.truth {
				if d := math.Hypot(x.T[0]-w.g.Values.Poses[k].T[0], x.T[1]-w.g.Values.Poses[k].T[1]); d > 0.4 {
					t.Errorf("dimension %d, seed %d: keyframe %d is off by %.2f m", dim, seed, k, d)
					break
				}
			}
		}
		t.Logf("dimension %d: %d of %d wrong found, %d of %d good refused, chi-square of the good %.3f", dim, found, wrong, refused, good, sum/float64(n))
		// A wrong mark may stand where the right one would, a good sighting fails once in a thousand. The statistic of the good is
		// chi-square: its mean of some thousand is 1 +- 0.05.
		if wrong < 100 || float64(found) < 0.95*float64(wrong) || float64(refused) > 0.005*float64(good) || math.Abs(sum/float64(n)-1) > 0.15 {
			t.Errorf("dimension %d: %d of %d wrong found, %d of %d good refused, chi-square of the good %.3f", dim, found, wrong, refused, good, sum/float64(n))
		}
	}
}

// A review goes on from the weights that stand: it finds what came in new, lets in what was refused for nothing, and leaves alone what
// takes no part or is to be kept.
func TestReview(t *testing.T) {
	w := newWalk(9, 3, 0)
	s, o := w.solver(t), Options{Adjust: posegraph.DefaultOptions()}
	set := w.g.Sets[1].(*posegraph.Sightings)
	set.Z[5][0] += 3   // wrong
	set.Z[6][0] += 0.8 // wrong, and kept
	set.Z[7][0] += 3   // wrong, and takes no part
	set.W[7], set.W[20] = 0, evidence.Floor
	o.Keep = func(of *posegraph.Sightings, k int) bool { return of == set && k == 6 }
	res := Review(w.g, s, o)
	for k, want := range map[int]evidence.Verdict{5: evidence.Refused, 6: evidence.Held, 7: evidence.Open, 20: evidence.Held, 21: evidence.Held} {
		if f := &res.Findings[k]; f.Set != set || f.K != k || f.Verdict != want || f.Kept != (k == 6) {
			t.Errorf("sighting %d: %+v, want %v", k, f, want)
		}
	}
	if res.Stop != posegraph.Converged || res.Refused != 1 || set.W[7] != 0 || set.W[20] != 1 || set.W[5] != evidence.Floor {
		t.Errorf("%v, %d refused, weights %g %g %g", res.Stop, res.Refused, set.W[7], set.W[20], set.W[5])
	}
	if again := Review(w.g, s, o); again.Refused != 1 || again.Iterations > 2 {
		t.Errorf("again: %d refused after %d steps", again.Refused, again.Iterations)
	}
}

// Same graph, same decisions, to the last bit.
func TestDecideIsDeterministic(t *testing.T) {
	run := func() ([]float64, posegraph.Values) {
		w := newWalk(4, 3, 0.2)
		res := Decide(w.g, w.solver(t), Options{Adjust: posegraph.DefaultOptions(), FromAll: true})
		var all []float64
		for _, f := range res.Findings {
			all = append(all, f.Statistic, f.Limit, float64(f.Verdict))
		}
		return all, w.g.Values
	}
	a, x := run()
	b, y := run()
	if !reflect.DeepEqual(a, b) || !reflect.DeepEqual(x, y) {
		t.Error("two runs differ")
	}
}
