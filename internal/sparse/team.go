package sparse

import (
	"math"
	"sync"
	"sync/atomic"
)

// worker is the memory of one goroutine.
type worker struct {
	id     int
	pivots []float64 // the pivots' part of a vector, padded
	rows   []float64 // the rows' part
	corner []float64 // a diagonal block, see shared.go
	inv    *inverter // allocated by the first SelectedInverse
	failed int       // pivot that was not positive, or none
}

const none = math.MaxInt

// job says what a call does; the parts run in the order given here.
type job struct {
	eliminate bool
	carry     bool // a right-hand side along with it
	finish    bool // factor the front of the last ones, not only assemble it
	matrix    *Matrix

	forward   bool
	backward  bool
	lastGiven bool // the front of the last ones is solved already
	inverse   *Matrix
}

// run does a job with all workers. Each has subtrees of its own; the fronts above
// them come after (towards the root) or before (from the root) and are either
// shared or done by the first worker alone.
func (f *Factor) run(j job) {
	f.job = j
	if f.s.workers > 1 {
		go f.work(&f.team[1])
	}
	f.work(&f.team[0])
}

func (f *Factor) work(w *worker) {
	s, j := f.s, &f.job
	own, top := s.tasks[w.id], s.top
	if w.id > 0 {
		top = nil
	}
	if j.eliminate && !f.eliminate(w) {
		f.meet()
		return
	}
	if j.forward {
		f.forward(own, w)
		f.meet()
		f.forward(top, w)
	}
	if j.backward {
		f.backward(top, w)
		f.meet()
		f.backward(own, w)
	}
	if j.inverse != nil {
		f.invert(top, w)
		f.meet()
		f.invert(own, w)
	}
	f.meet()
}

// eliminate does the part of worker w. All workers return the same.
func (f *Factor) eliminate(w *worker) bool {
	s := f.s
	w.failed = none
	for _, i := range s.tasks[w.id] {
		if !f.eliminateFront(i, w) {
			break
		}
	}
	failed := f.firstFailureTogether()
	if failed < none {
		// Fronts above may come before the failed one in the order of a single
		// worker: try those, so that the error is the same.
		for _, i := range s.top {
			if w.id == 0 && s.fronts[i].pivot < failed && !f.eliminateFront(i, w) {
				break
			}
		}
		return false
	}
	for top := s.top; len(top) > 0; {
		if i := top[0]; s.fronts[i].shared {
			ok := f.eliminateShared(i, w)
			f.meet()
			if !ok {
				return false
			}
			top = top[1:]
			continue
		}
		n := 1
		for n < len(top) && !s.fronts[top[n]].shared {
			n++
		}
		for _, i := range top[:n] {
			if w.id > 0 || !f.eliminateFront(i, w) {
				break
			}
		}
		if f.firstFailureTogether() < none {
			return false
		}
		top = top[n:]
	}
	return true
}

// firstFailureTogether returns the first failed pivot so far, the same for all
// workers.
func (f *Factor) firstFailureTogether() int {
	f.meet()
	at := f.firstFailure()
	f.meet()
	return at
}

func (f *Factor) firstFailure() int {
	at := none
	for i := range f.s.workers {
		at = min(at, f.team[i].failed)
	}
	return at
}

func (f *Factor) forward(fronts []int32, w *worker) {
	for _, i := range fronts {
		t := &f.s.fronts[i]
		f.gatherVector(t)
		f.eliminateVector(t, w)
	}
}

func (f *Factor) backward(fronts []int32, w *worker) {
	for k := len(fronts) - 1; k >= 0; k-- {
		if i := fronts[k]; !f.job.lastGiven || !f.s.isLast(i) {
			f.backwardFront(&f.s.fronts[i], w)
		}
	}
}

// meet waits for the other worker.
func (f *Factor) meet() {
	if f.s.workers > 1 {
		f.barrier.wait()
	}
}

// barrier lets two goroutines wait for each other. The wait is microseconds when
// each has a processor, so they spin first, and sleep when it lasts.
type barrier struct {
	arrived atomic.Uint64
	lock    sync.Mutex
	both    sync.Cond
}

func (b *barrier) wait() {
	n := b.arrived.Add(1)
	if n%2 == 0 {
		b.lock.Lock()
		b.both.Broadcast()
		b.lock.Unlock()
		return
	}
	for range 10000 {
		if b.arrived.Load() > n {
			return
		}
	}
	b.lock.Lock()
	for b.arrived.Load() == n {
		b.both.Wait()
	}
	b.lock.Unlock()
}
