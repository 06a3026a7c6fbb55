package evidence

import (
	"math"
	"testing"
)

// A mean of numbers, two of which are far off, found by alternating as a caller does.
func TestScheduleFindsTheOutliers(t *testing.T) {
	x := []float64{1, 1.1, .9, 1.05, .95, 9, 10}
	w := []float64{1, 1, 1, 1, 1, 1, 1}
	r := make([]float64, len(x))
	fit := func() {
		num, den := 0.0, 0.0
		for i := range x {
			num += w[i] * x[i]
			den += w[i]
		}
		for i := range x {
			r[i] = (x[i] - num/den) * (x[i] - num/den) / .01
		}
	}
	fit()
	s, ok := NewSchedule(6.63, r)
	if !ok {
		t.Fatal("nothing to do")
	}
	for stage := 0; !s.Next(w, r); stage++ {
		if stage > 100 {
			t.Fatal("does not end")
		}
		fit()
	}
	for i, v := range w {
		want := 1.0
		if i >= 5 {
			want = Floor
		}
		if v != want {
			t.Errorf("weight %d is %g, want %g", i, v, want)
		}
	}
}

func TestScheduleStage(t *testing.T) {
	if _, ok := NewSchedule(4, []float64{1, 2}); ok {
		t.Error("a worst square of half the bound needs no schedule")
	}
	s, ok := NewSchedule(4, []float64{1, 6}) // mu = 4/(12-4) = 1/2: 1 up to 4/3, Floor from 12 on
	if !ok {
		t.Fatal("nothing to do")
	}
	w := make([]float64, 6)
	if s.Next(w, []float64{4. / 3, 12, 3, math.Inf(1), math.NaN(), 12 - 1e-12}) {
		t.Error("decided while a weight is not")
	}
	// In between: sqrt(bound mu (mu+1)/r^2) - mu = sqrt(3/3) - 1/2.
	for i, want := range []float64{1, Floor, .5, Floor, Floor, Floor} {
		if math.Abs(w[i]-want) > 1e-12 {
			t.Errorf("weight %d is %g, want %g", i, w[i], want)
		}
	}
	if math.Abs(s.mu-.7) > 1e-15 {
		t.Errorf("mu is %g, want .7", s.mu)
	}
}
