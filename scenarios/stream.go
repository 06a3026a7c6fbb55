package scenarios

import (
	"hash/fnv"
	"math"
	"math/rand/v2"

	"selvage/internal/lie"
)

// stream returns the random stream of one part of a simulation. Streams of different names or seeds are unrelated, and the
// numbers of one never depend on which others exist.
func stream(seed uint64, name string) *rand.Rand {
	h := fnv.New64a()
	h.Write([]byte(name))
	n := h.Sum64()
	return rand.New(rand.NewPCG(mix(seed^n), mix(mix(seed)+n)))
}

// mix is the output function of SplitMix64 (Steele, Lea, Flood, "Fast Splittable Pseudorandom Number Generators", OOPSLA 2014).
// It spreads neighbouring seeds over the whole range.
func mix(z uint64) uint64 {
	z += 0x9e3779b97f4a7c15
	z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
	z = (z ^ z>>27) * 0x94d049bb133111eb
	return z ^ z>>31
}

// uniform draws from [lo, hi).
func uniform(rng *rand.Rand, lo, hi float64) float64 { return lo + (hi-lo)*rng.Float64() }

// noise draws a tangent vector with the given standard deviations; a component whose deviation is infinite stays zero.
func noise(rng *rand.Rand, sigma *[6]float64) (xi lie.Tangent) {
	for i, s := range sigma {
		if n := rng.NormFloat64(); !math.IsInf(s, 1) {
			xi[i] = s * n
		}
	}
	return xi
}

// ripple is a smooth random function of a length, within [-1, 1]: a sum of sines.
type ripple struct{ freq, phase, amp [4]float64 }

// newRipple draws a ripple whose wavelengths lie around the given one.
func newRipple(rng *rand.Rand, wavelength float64) (r ripple) {
	sum := 0.0
	for i := range r.freq {
		r.freq[i] = 2 * math.Pi / (wavelength * uniform(rng, 0.6, 1.8))
		r.phase[i] = uniform(rng, 0, 2*math.Pi)
		r.amp[i] = uniform(rng, 0.5, 1)
		sum += r.amp[i]
	}
	for i := range r.amp {
		r.amp[i] /= sum
	}
	return r
}

func (r *ripple) at(s float64) (v float64) {
	for i := range r.freq {
		v += r.amp[i] * math.Sin(r.freq[i]*s+r.phase[i])
	}
	return v
}
