package coordinator

import (
	"bytes"
	"cmp"
	"slices"

	"selvage/msgs"
)

// maxKeys bounds a want; the rest is asked for when these have come.
const maxKeys = 1 << 12

// want returns the message that tells a robot what the base lacks, when it is due: at once when it changed, again while
// something is missing, nil otherwise.
func (c *Coordinator) want(r *robot) ([]byte, error) {
	w := msgs.Want{
		Fleet: c.cfg.Fleet, Robot: r.name, Epoch: msgs.Epoch{Incarnation: c.cfg.Incarnation}, Term: c.cfg.Term,
		Keys: c.missing(r), Gaps: r.current.gaps(), Safe: r.current.safe, Journal: r.current.id,
		Marks: c.wantedMarks(r),
	}
	w.Keys = w.Keys[:min(len(w.Keys), maxKeys)]
	unknown := r.heard && r.incarnation < c.cfg.Incarnation // to the robot: it may think that what it sent before is here
	lacking := len(w.Keys) > 0 || c.markless(r)
	busy := lacking || len(w.Gaps) > 0 || unknown
	if !busy && w.Safe == 0 {
		r.wantBusy = false
		return nil, nil
	}
	payload, err := w.Marshal()
	if err != nil {
		return nil, err
	}
	changed := !bytes.Equal(payload, r.want)
	if changed {
		r.wantTry = 0
	}
	wait := c.cfg.RetryNS / 2
	if !changed {
		if !busy && !r.wantBusy {
			return nil, nil
		}
		wait = c.cfg.RetryNS << min(r.wantTry, 4)
	}
	if r.want != nil && c.now-r.wantNS < wait {
		r.wantBusy = r.wantBusy || busy || changed
		return nil, nil
	}
	r.want, r.wantNS, r.wantBusy = payload, c.now, lacking || len(w.Gaps) > 0
	r.wantTry++
	return payload, nil
}

// missing lists the keyframes of r that ties touch and its summary does not contain.
func (c *Coordinator) missing(r *robot) []msgs.KeyRef {
	if r.missingAt == c.revision {
		return r.missing
	}
	r.missingAt = c.revision
	var keys []msgs.KeyRef
	for _, t := range c.order {
		for _, k := range [2]msgs.KeyRef{t.msg.From, t.msg.To} {
			if k.Robot != r.name {
				continue
			}
			if _, _, ok := r.junction(&k); !ok {
				keys = append(keys, k)
			}
		}
	}
	slices.SortFunc(keys, func(a, b msgs.KeyRef) int {
		return cmp.Or(cmp.Compare(a.Session, b.Session), cmp.Compare(a.ID, b.ID), cmp.Compare(a.StampNS, b.StampNS))
	})
	r.missing = slices.Compact(keys)
	return r.missing
}

// junction finds the junction that a reference to a keyframe of r means.
func (r *robot) junction(k *msgs.KeyRef) (part, junction int, ok bool) {
	if r.summary == nil {
		return 0, 0, false
	}
	for p := range r.summary.Parts {
		if r.summary.Parts[p].Session != k.Session {
			continue
		}
		if !k.ByStamp {
			j, ok := r.index[p][k.ID]
			return p, j, ok
		}
		j, ok := r.stamps[p][k.StampNS]
		return p, j, ok
	}
	return 0, 0, false
}

// wantedMarks lists the marks that must be points of r: those it has seen that other sessions have seen too, or whose coordinates the
// base knows.
func (c *Coordinator) wantedMarks(r *robot) []string {
	if r.marksAt == c.revision && c.revision != 0 {
		return r.marks
	}
	seen := map[string]int{}
	for _, o := range c.sorted() {
		o.eachSeen(func(mark string, _ bool) { seen[mark]++ })
	}
	for _, o := range c.robots {
		o.marks, o.unplaced, o.marksAt = nil, 0, c.revision
		o.eachSeen(func(mark string, isPoint bool) {
			if seen[mark] < 2 && c.marks[mark] == nil {
				return
			}
			o.marks = append(o.marks, mark)
			if !isPoint {
				o.unplaced++
			}
		})
		slices.Sort(o.marks)
		o.marks = slices.Compact(o.marks)
		o.marks = o.marks[:min(len(o.marks), msgs.MaxPoints)]
	}
	return r.marks
}

// markless tells whether a mark of r is wanted that is no point of its summary yet.
func (c *Coordinator) markless(r *robot) bool {
	c.wantedMarks(r)
	return r.unplaced > 0
}

// eachSeen calls f for the marks of all sessions of r, session by session.
func (r *robot) eachSeen(f func(mark string, isPoint bool)) {
	if r.summary == nil {
		return
	}
	for i := range r.summary.Parts {
		p := &r.summary.Parts[i]
		for k := range p.Points {
			f(p.Points[k].Mark, true)
		}
		for _, mark := range p.Seen {
			f(mark, false)
		}
	}
}
