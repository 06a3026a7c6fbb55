package agent

import "selvage/internal/lie"

// Place is where one session stands, without its map.
type Place struct {
	Session             uint32
	Joined              bool
	Island              string // names the datum; empty when not joined
	DatumFromSession    lie.SE3
	Keyframe            int64   // the newest by its stamp
	SessionFromKeyframe lie.SE3 // of that one, as the map has it now
}

// Places returns where the sessions stand that have a keyframe, ascending.
func (a *Agent) Places() []Place {
	var out []Place
	for _, s := range a.sessions {
		if len(s.keys) == 0 {
			continue
		}
		newest := 0
		for i := range s.stamps {
			if s.stamps[i] >= s.stamps[newest] {
				newest = i
			}
		}
		out = append(out, Place{s.id, s.joined, s.island, s.datum, s.keys[newest], s.graph.Values.Poses[newest]})
	}
	return out
}
