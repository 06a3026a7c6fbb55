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
	}
	w.Keys = w.Keys[:min(len(w.Keys), maxKeys)]
	unknown := r.heard && r.incarnation < c.cfg.Incarnation // to the robot: it may think that what it sent before is here
	busy := len(w.Keys) > 0 || len(w.Gaps) > 0 || unknown
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
	r.want, r.wantNS, r.wantBusy = payload, c.now, len(w.Keys) > 0 || len(w.Gaps) > 0
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
