package agent

import (
	"slices"

	"selvage/internal/evidence"
	"selvage/msgs"
)

// odometry tells the chain of a measurement from variable i to variable j.
func (s *session) odometry(i, j int32, r *Relative) {
	from, to := int(s.place[i]), int(s.place[j])
	if from < 0 || to < 0 {
		return
	}
	s.chain.Odometry(from, to, r.Z, &r.Info)
	if max(from, to) < s.chain.Len()-1 { // it came late: what was found may have rested on less
		s.findings = nil
	}
}

// doubt notes a factor as a closure to be judged; until then it has no weight.
func (s *session) doubt(factor int32) {
	s.closures = append(s.closures, factor)
	s.factors.W[factor] = 0
}

// judges tells whether the factor is a closure that is judged.
func (s *session) judges(factor int32) bool {
	_, found := slices.BinarySearch(s.closures, factor)
	return found
}

// judge decides anew which closures are believed, if there are new ones, and weights them: what is not held has no weight.
func (s *session) judge() {
	if len(s.findings) == len(s.closures) {
		return
	}
	closures := make([]evidence.Closure, len(s.closures))
	for c, k := range s.closures {
		closures[c] = evidence.Closure{
			From: int(s.place[s.factors.I[k]]), To: int(s.place[s.factors.J[k]]), Z: s.factors.Z[k], Info: s.information(int(k)),
		}
	}
	s.findings = s.chain.Judge(closures, evidence.DefaultOptions(s.dim))
	for c, k := range s.closures {
		s.factors.W[k] = 0
		if s.findings[c].Verdict == evidence.Held {
			s.factors.W[k] = 1
		}
	}
}

// information returns the information of a factor as a 6 x 6 matrix.
func (s *session) information(k int) (m [36]float64) {
	info := s.factors.Info(k)
	if s.dim == 3 {
		copy(m[:], info)
		return m
	}
	planar := [3]int{0, 1, 5}
	for i, r := range planar {
		for j, c := range planar {
			m[6*r+c] = info[3*i+j]
		}
	}
	return m
}

// Closure is what the agent found of one loop closure.
type Closure struct {
	Session  uint32
	From, To int64
	Verdict  msgs.VerdictKind
	Reason   string
	// Statistic is the squared Mahalanobis distance from the shortest way round, chi-square with DoF degrees of freedom when the closure
	// is true, and Limit the bound it was held against; all are 0 when there is no way round or nobody has looked yet.
	Statistic float64
	DoF       int
	Limit     float64
}

// Closures returns the loop closures that the agent judges, sessions ascending, in the order they came. Those that came after the map
// was last brought up to date are open. With [Config].HoldAll there are none.
func (a *Agent) Closures() []Closure {
	var out []Closure
	for _, s := range a.sessions {
		for c, k := range s.closures {
			x := Closure{
				Session: s.id, From: s.keys[s.factors.I[k]], To: s.keys[s.factors.J[k]], Verdict: msgs.Open, Reason: "not looked at yet",
			}
			if c < len(s.findings) {
				f := &s.findings[c]
				x.Reason, x.Statistic, x.DoF, x.Limit = f.Reason, f.Statistic, f.DoF, f.Limit
				switch f.Verdict {
				case evidence.Held:
					x.Verdict = msgs.Held
				case evidence.Refused:
					x.Verdict = msgs.Refused
				}
			}
			out = append(out, x)
		}
	}
	return out
}
