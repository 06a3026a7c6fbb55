package posegraph

import "math"

// Innovation returns r' (J Sigma J' + C)^-1 r of factor k at v: how far the measurement lies from what the others predict, chi-square
// with Dim degrees of freedom when it is true. The factor must not be part of the solution (weight zero); sigma is the covariance
// of that solution and c the covariance of the measurement, 6 x 6 in the order of the tangent.
func (b *Between) Innovation(k int, v *Values, sigma Covariance, c *[36]float64) float64 {
	d := b.dim
	r := b.Residual(k, v)
	var s [36]float64
	b.Predicted(k, v, sigma, s[:])
	var e [6]float64
	if d == 3 {
		for i, p := range planar {
			e[i] = r[p]
			for j, q := range planar {
				s[3*i+j] += c[6*p+q]
			}
		}
	} else {
		e = r
		for i := range s {
			s[i] += c[i]
		}
	}
	return inverseForm(s[:d*d], e[:d])
}

// inverseForm returns e' S^-1 e for a positive definite S, which is overwritten; +Inf when it is not.
func inverseForm(s, e []float64) float64 {
	d := len(e)
	sum := 0.0
	for i := 0; i < d; i++ {
		for j := 0; j <= i; j++ {
			v := s[i*d+j]
			for k := 0; k < j; k++ {
				v -= s[i*d+k] * s[j*d+k]
			}
			if i != j {
				s[i*d+j] = v / s[j*d+j]
				continue
			}
			if !(v > 0) {
				return math.Inf(1)
			}
			s[i*d+i] = math.Sqrt(v)
		}
		v := e[i]
		for k := 0; k < i; k++ {
			v -= s[i*d+k] * e[k]
		}
		e[i] = v / s[i*d+i]
		sum += e[i] * e[i]
	}
	return sum
}

func multiply(c, a, b *[36]float64, d int) {
	var m [36]float64
	for i := 0; i < d; i++ {
		for j := 0; j < d; j++ {
			for k := 0; k < d; k++ {
				m[i*d+j] += a[i*d+k] * b[k*d+j]
			}
		}
	}
	*c = m
}

func multiplyT(c, a, b *[36]float64, d int) {
	var m [36]float64
	for i := 0; i < d; i++ {
		for j := 0; j < d; j++ {
			for k := 0; k < d; k++ {
				m[i*d+j] += a[i*d+k] * b[j*d+k]
			}
		}
	}
	*c = m
}
