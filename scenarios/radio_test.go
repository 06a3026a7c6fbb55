package scenarios

import (
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// still is a radio whose robots stand at fixed distances from the base.
func still(spec RadioSpec, seed uint64, at map[string]float64) *Radio {
	r := NewRadio(&Scenario{Radio: spec}, &World{}, seed)
	r.position = func(robot string, _ int64) [3]float64 { return [3]float64{at[robot], 0, 0} }
	return r
}

const ms = int64(1e6)

func TestRadioShares(t *testing.T) {
	const n = 20000
	spec := RadioSpec{Loss: 0.2, Delay: 0.02, Jitter: 0.03, Duplicates: 0.1, Reordered: 0.05, ReorderHold: 10}
	r := still(spec, 7, nil)
	var lost, twice, held int
	var wait float64
	for i := range int64(n) {
		now := i * 1000 * ms
		at := r.Send(now, "r01", Base, 100)
		switch {
		case len(at) == 0:
			lost++
			continue
		case len(at) == 2:
			twice++
			if at[1] <= at[0] {
				t.Fatal("the second copy comes first")
			}
		}
		d := float64(at[0]-now) / 1e9
		if d < spec.Delay {
			t.Fatalf("a message took %g s, less than the least delay", d)
		}
		if d > 0.5 { // jitter alone would need 16 times its mean
			held++
		} else {
			wait += d
		}
	}
	arrived := float64(n - lost)
	inBand(t, "lost", float64(lost), n, 0.2)
	inBand(t, "twice", float64(twice), arrived, 0.1)
	inBand(t, "held", float64(held), arrived, 0.05*0.95) // 1 of 20 holds is below half a second
	mean := wait / (arrived - float64(held))
	if math.Abs(mean-0.05) > 0.002 {
		t.Errorf("mean delay %g s, want 0.05", mean)
	}
}

// inBand checks a count of n independent draws of probability p, at four standard deviations.
func inBand(t *testing.T, what string, count, n, p float64) {
	t.Helper()
	if s := math.Sqrt(n * p * (1 - p)); math.Abs(count-n*p) > 4*s {
		t.Errorf("%s: %g of %g, want %g +- %g", what, count, n, n*p, 4*s)
	}
}

func TestRadioBandwidth(t *testing.T) {
	r := still(RadioSpec{Bandwidth: 10000, Delay: 0.1, Queue: 60}, 1, nil)
	for i := range int64(100) {
		at := r.Send(0, "r01", Base, 1000)
		if want := (i+1)*100*ms + 100*ms; len(at) != 1 || at[0] != want {
			t.Fatalf("message %d arrives at %v, want %d", i, at, want)
		}
	}
	// The other direction and other robots have queues of their own.
	for _, l := range [][2]string{{Base, "r01"}, {"r02", Base}, {"r01", "r02"}} {
		if at := r.Send(0, l[0], l[1], 1000); at[0] != 200*ms {
			t.Errorf("%v: arrives at %d, want %d", l, at[0], 200*ms)
		}
	}
	// An idle link starts afresh.
	if at := r.Send(20000*ms, "r01", Base, 1000); at[0] != 20200*ms {
		t.Errorf("after a pause: %d", at[0])
	}
}

func TestRadioQueueIsBounded(t *testing.T) {
	r := still(RadioSpec{Bandwidth: 1000, Queue: 5}, 1, nil)
	through := 0
	for range 20 {
		through += len(r.Send(0, "r01", Base, 1000))
	}
	if through != 6 { // those that wait 0, 1 ... 5 s
		t.Errorf("%d of 20 messages came through, want 6", through)
	}
	if len(r.Send(1000*ms, "r01", Base, 1000)) != 1 {
		t.Error("a message is lost though a place is free again")
	}
}

func TestRadioRangeAndOutages(t *testing.T) {
	r := still(RadioSpec{Range: 100, Outages: []OutageSpec{{"r01", 10, 20}, {allRobots, 30, 31}}}, 1, map[string]float64{"r01": 99, "r02": 101, "r03": 150})
	for _, c := range []struct {
		s    int64
		a, b string
		up   bool
	}{
		{0, "r01", Base, true}, {0, Base, "r01", true}, {0, "r02", Base, false}, {0, "r02", "r03", true}, {0, "r02", "r01", true},
		{10, "r01", Base, false}, {19, "r02", "r01", false}, {20, "r01", Base, true}, {15, "r02", "r03", true},
		{30, "r01", Base, false}, {30, "r02", "r03", false}, {31, "r01", Base, true},
	} {
		if got := r.Up(c.s*1000*ms, c.a, c.b); got != c.up {
			t.Errorf("at %d s %s to %s: up %v", c.s, c.a, c.b, got)
		}
		if got := len(r.Send(c.s*1000*ms, c.a, c.b, 10)) == 1; got != c.up {
			t.Errorf("at %d s %s to %s: arrives %v", c.s, c.a, c.b, got)
		}
	}
}

func TestRadioLinksAreIndependent(t *testing.T) {
	spec := RadioSpec{Loss: 0.3, Jitter: 1, Duplicates: 0.3}
	alone, shared := still(spec, 5, nil), still(spec, 5, nil)
	other := still(spec, 6, nil)
	same := 0
	for i := range int64(200) {
		now := i * 1000 * ms
		a := alone.Send(now, "r01", Base, 10)
		shared.Send(now, "r02", Base, 10)
		if b := shared.Send(now, "r01", Base, 10); !slices.Equal(a, b) {
			t.Fatalf("message %d: %v alone, %v with another robot on the air", i, a, b)
		}
		if slices.Equal(a, other.Send(now, "r01", Base, 10)) {
			same++
		}
	}
	if same > 60 { // both lost: 0.09 of them
		t.Errorf("another seed gives the same fate to %d of 200 messages", same)
	}
}

func TestRadioProperties(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		share := rapid.Float64Range(0, 1)
		spec := RadioSpec{
			Loss: share.Draw(t, "loss"), Delay: share.Draw(t, "delay"), Jitter: share.Draw(t, "jitter"),
			Bandwidth: rapid.SampledFrom([]float64{0, 100, 1e4}).Draw(t, "bandwidth"), Queue: 10 * share.Draw(t, "queue"),
			Duplicates: share.Draw(t, "duplicates"), Reordered: share.Draw(t, "reordered"), ReorderHold: share.Draw(t, "hold"),
		}
		r, twin := still(spec, 3, nil), still(spec, 3, nil)
		now, carried := int64(0), 0.0
		for i := range rapid.IntRange(1, 50).Draw(t, "messages") {
			now += rapid.Int64Range(0, 3000*ms).Draw(t, "gap")
			bytes := rapid.IntRange(1, 5000).Draw(t, "bytes")
			at := r.Send(now, "r01", Base, bytes)
			if !slices.Equal(at, twin.Send(now, "r01", Base, bytes)) {
				t.Fatalf("message %d has two fates from one seed", i)
			}
			if len(at) > 2 {
				t.Fatalf("%d copies", len(at))
			}
			for _, a := range at {
				least := seconds(spec.Delay)
				if spec.Bandwidth > 0 {
					least += seconds(float64(bytes)/spec.Bandwidth) - 1
				}
				if a < now+least {
					t.Fatalf("sent at %d, %d bytes, arrives at %d", now, bytes, a)
				}
			}
			if len(at) > 0 {
				carried += float64(bytes)
				if s := float64(at[0]) / 1e9; spec.Bandwidth > 0 && carried > spec.Bandwidth*s+1 {
					// Jitter only delays: what has arrived by then had to pass the link before.
					late := spec.Jitter * 60
					if carried > spec.Bandwidth*(s+late)+1 {
						t.Fatalf("%g bytes carried in %g s", carried, s)
					}
				}
			}
		}
	})
}
