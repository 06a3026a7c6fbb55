package lie

import (
	"encoding/csv"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"testing"
)

// The tables were computed with 60 digits for this project; see testdata/README.md.

func eachCase(t *testing.T, file string, check func(t *testing.T, v []float64)) {
	t.Helper()
	f, err := os.Open(filepath.Join("testdata", file))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	records, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(records) != 11 {
		t.Fatalf("%s: %d lines, expected a header and ten cases", file, len(records))
	}
	for _, record := range records[1:] {
		v := make([]float64, len(record)-1)
		for i, s := range record[1:] {
			if v[i], err = strconv.ParseFloat(s, 64); err != nil {
				t.Fatal(err)
			}
		}
		t.Run(record[0], func(t *testing.T) { check(t, v) })
	}
}

// near checks entries to tol relative to the largest expected one.
func near(t interface {
	Helper()
	Errorf(string, ...any)
}, what string, got, expected []float64, tol float64) {
	t.Helper()
	if len(got) != len(expected) {
		t.Errorf("%s: %d entries, expected %d", what, len(got), len(expected))
		return
	}
	scale := 0.0
	for _, v := range expected {
		scale = math.Max(scale, math.Abs(v))
	}
	if scale == 0 {
		scale = 1
	}
	for i := range expected {
		if d := math.Abs(got[i]-expected[i]) / scale; !(d <= tol) {
			t.Errorf("%s: entry %d is %.17g, expected %.17g, off by %.2g of the largest", what, i, got[i], expected[i], d)
		}
	}
}

func TestTableSO3(t *testing.T) {
	eachCase(t, "lie_so3.csv", func(t *testing.T, v []float64) {
		phi, rotation, quaternion, jacobian := [3]float64(v[:3]), Mat3(v[3:12]), v[12:16], v[16:25]
		r := ExpSO3(phi)
		near(t, "exp", r[:], rotation[:], 1e-14)
		q := QuatOf(&rotation)
		near(t, "quaternion", q[:], quaternion, 1e-14)
		back := LogSO3(&rotation)
		near(t, "log", back[:], phi[:], 1e-14)
		again := RotationOf(Quat(quaternion))
		near(t, "rotation of the quaternion", again[:], rotation[:], 1e-14)
		j := Jr(Tangent{3: phi[0], 4: phi[1], 5: phi[2]})
		near(t, "right Jacobian", corner(&j), jacobian, 1e-14)
	})
}

// corner returns the upper left 3 x 3 block.
func corner(j *[36]float64) (c []float64) {
	for i := 0; i < 3; i++ {
		c = append(c, j[6*i:6*i+3]...)
	}
	return c
}

func TestTableSE3(t *testing.T) {
	eachCase(t, "lie_se3.csv", func(t *testing.T, v []float64) {
		xi, top, jacobian, adjoint := Tangent(v[:6]), v[6:18], [36]float64(v[18:54]), v[54:90]
		x := Exp(xi)
		var got []float64
		for i := 0; i < 3; i++ {
			got = append(got, x.R[3*i:3*i+3]...)
			got = append(got, x.T[i])
		}
		near(t, "exp", got, top, 1e-14)
		j := Jr(xi)
		near(t, "right Jacobian", j[:], jacobian[:], 1e-14)
		inverse := JrInv(xi)
		identity := mul6(&inverse, &jacobian)
		scale := largestOf(inverse[:]) * largestOf(jacobian[:])
		for i := range identity {
			one := 0.0
			if i%7 == 0 {
				one = 1
			}
			if e := math.Abs(identity[i]-one) / scale; !(e <= 1e-14) {
				t.Errorf("inverse right Jacobian times the Jacobian: entry %d is off by %.2g", i, e)
			}
		}
		tabled := SE3{Mat3{top[0], top[1], top[2], top[4], top[5], top[6], top[8], top[9], top[10]}, [3]float64{top[3], top[7], top[11]}}
		a := tabled.Adjoint()
		near(t, "adjoint", a[:], adjoint, 1e-14)
		back := tabled.Log()
		near(t, "log", back[:], xi[:], 1e-14)
	})
}

func largestOf(v []float64) (m float64) {
	for _, x := range v {
		m = math.Max(m, math.Abs(x))
	}
	return m
}

func TestTableSE2(t *testing.T) {
	eachCase(t, "lie_se2.csv", func(t *testing.T, v []float64) {
		xi, motion, jacobian, adjoint := [3]float64(v[:3]), v[3:7], Mat3(v[7:16]), v[16:25]
		x := Exp2(xi)
		near(t, "exp", []float64{x.X, x.Y, x.C, x.S}, motion, 1e-14)
		j := Jr2(xi)
		near(t, "right Jacobian", j[:], jacobian[:], 1e-14)
		tabled := SE2{motion[0], motion[1], motion[2], motion[3]}
		a := tabled.Adjoint()
		near(t, "adjoint", a[:], adjoint, 1e-14)
		back := tabled.Log()
		near(t, "log", back[:], xi[:], 1e-14)
		identity := JrInv2(xi).Mul(jacobian)
		for i, want := range []float64{1, 0, 0, 0, 1, 0, 0, 0, 1} {
			inverse := JrInv2(xi)
			if e := math.Abs(identity[i]-want) / (largestOf(inverse[:]) * largestOf(jacobian[:])); !(e <= 1e-14) {
				t.Errorf("inverse right Jacobian times the Jacobian: entry %d is off by %.2g", i, e)
			}
		}
	})
}
