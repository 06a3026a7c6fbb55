package record

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"

	"selvage/internal/lie"
)

// writer appends to b.
type writer struct{ b []byte }

func (w *writer) byte(v byte)     { w.b = append(w.b, v) }
func (w *writer) uint32(v uint32) { w.b = binary.LittleEndian.AppendUint32(w.b, v) }
func (w *writer) uint64(v uint64) { w.b = binary.LittleEndian.AppendUint64(w.b, v) }
func (w *writer) int64(v int64)   { w.uint64(uint64(v)) }

func (w *writer) bool(v bool) {
	if v {
		w.byte(1)
	} else {
		w.byte(0)
	}
}

// text writes a text that the agent has taken; none of those is long.
func (w *writer) text(s string) {
	if len(s) > math.MaxUint16 {
		panic("record: a text of more than 65535 bytes")
	}
	w.b = binary.LittleEndian.AppendUint16(w.b, uint16(len(s)))
	w.b = append(w.b, s...)
}

// sparse writes numbers of which many are zero.
func (w *writer) sparse(v []float64) {
	at := len(w.b)
	w.b = append(w.b, make([]byte, (len(v)+7)/8)...)
	for i, x := range v {
		if bits := math.Float64bits(x); bits != 0 {
			w.b[at+i/8] |= 1 << (i % 8)
			w.uint64(bits)
		}
	}
}

func (w *writer) pose(x *lie.SE3) {
	var v [12]float64
	copy(v[:], x.R[:])
	copy(v[9:], x.T[:])
	w.sparse(v[:])
}

// matrix writes a matrix n x n.
func (w *writer) matrix(m []float64, n int) {
	symmetric := isSymmetric(m, n)
	w.bool(symmetric)
	if !symmetric {
		w.sparse(m)
		return
	}
	var upper [21]float64
	k := 0
	for i := range n {
		k += copy(upper[k:], m[n*i+i:n*(i+1)])
	}
	w.sparse(upper[:k])
}

func isSymmetric(m []float64, n int) bool {
	for i := range n {
		for j := range i {
			if math.Float64bits(m[n*i+j]) != math.Float64bits(m[n*j+i]) {
				return false
			}
		}
	}
	return true
}

var (
	errShort = errors.New("it ends too early")
	errForm  = errors.New("it is not written in the one way that there is")
)

// reader takes from b. After an error it takes zeros.
type reader struct {
	b   []byte
	err error
}

// take returns the next n bytes, nil when there are not as many.
func (r *reader) take(n int) []byte {
	if r.err != nil || len(r.b) < n {
		r.fail(errShort)
		return nil
	}
	b := r.b[:n]
	r.b = r.b[n:]
	return b
}

func (r *reader) fail(err error) {
	if r.err == nil {
		r.err = err
	}
}

func (r *reader) byte() byte {
	if b := r.take(1); b != nil {
		return b[0]
	}
	return 0
}

func (r *reader) uint32() uint32 {
	if b := r.take(4); b != nil {
		return binary.LittleEndian.Uint32(b)
	}
	return 0
}

func (r *reader) uint64() uint64 {
	if b := r.take(8); b != nil {
		return binary.LittleEndian.Uint64(b)
	}
	return 0
}

func (r *reader) int64() int64 { return int64(r.uint64()) }

func (r *reader) bool() bool {
	v := r.byte()
	if v > 1 {
		r.fail(errForm)
	}
	return v == 1
}

func (r *reader) text() string {
	b := r.take(2)
	if b == nil {
		return ""
	}
	return string(r.take(int(binary.LittleEndian.Uint16(b))))
}

func (r *reader) sparse(v []float64) {
	mask := r.take((len(v) + 7) / 8)
	if mask == nil {
		return
	}
	for i := range v {
		if mask[i/8]>>(i%8)&1 == 0 {
			v[i] = 0
			continue
		}
		bits := r.uint64()
		if bits == 0 {
			r.fail(errForm)
		}
		v[i] = math.Float64frombits(bits)
	}
	if n := len(v); n%8 != 0 && mask[n/8]>>(n%8) != 0 {
		r.fail(errForm)
	}
}

func (r *reader) pose(x *lie.SE3) {
	var v [12]float64
	r.sparse(v[:])
	copy(x.R[:], v[:])
	copy(x.T[:], v[9:])
}

func (r *reader) matrix(m []float64, n int) {
	if !r.bool() {
		if r.sparse(m); isSymmetric(m, n) {
			r.fail(errForm)
		}
		return
	}
	var upper [21]float64
	r.sparse(upper[:n*(n+1)/2])
	k := 0
	for i := range n {
		for j := i; j < n; j++ {
			m[n*i+j], m[n*j+i] = upper[k], upper[k]
			k++
		}
	}
}

// version takes the version of a kind.
func (r *reader) version(want byte) {
	if v := r.byte(); r.err == nil && v != want {
		r.fail(fmt.Errorf("version %d of its kind, expected %d", v, want))
	}
}
