package bus

import (
	"cmp"
	"fmt"
	"maps"
	"regexp"
	"slices"
	"strings"
	"sync"
	"time"
)

// Refusal is how often the server has refused something to somebody.
type Refusal struct {
	Robot string // by its key; empty for whoever has none that is known
	What  string // publish, subscribe or connect
	N     uint64
}

// quiet is the least time between two warnings of the same refusal.
const quiet = time.Minute

// doorkeeper is the logger of the server: it counts refusals and hands on warnings, those of refusals once a minute at most for
// each robot and kind, so that nobody can fill a log.
type doorkeeper struct {
	warn func(string)

	mu     sync.Mutex
	robots map[string]string // names by public key
	count  map[Refusal]uint64
	told   map[Refusal]time.Time
}

// setRobots takes the public keys by name.
func (d *doorkeeper) setRobots(keys map[string]string) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.robots = make(map[string]string, len(keys))
	for name, key := range keys {
		d.robots[key] = name
	}
}

// The texts of the server. What comes before the last match, or within quotes behind it, is the client's own.
var (
	violation = regexp.MustCompile(`.*" - "\$G/nkey:(U[A-Z2-7]{55})" - (Publish|Subscription) Violation - `)
	wrongKey  = regexp.MustCompile(`- authentication error( - |$)|TLS handshake error`)
)

// refusal reads a warning; ok is false when it is of something else.
func (d *doorkeeper) refusal(text string) (r Refusal, ok bool) {
	if m := violation.FindStringSubmatch(text); m != nil {
		r.What = "publish"
		if m[2] == "Subscription" {
			r.What = "subscribe"
		}
		r.Robot = d.robots[m[1]]
		return r, true
	}
	return Refusal{What: "connect"}, wrongKey.MatchString(text)
}

func (d *doorkeeper) take(format string, v ...any) {
	text := fmt.Sprintf(format, v...)
	d.mu.Lock()
	r, refused := d.refusal(text)
	tell := true
	if refused {
		d.count[r]++
		last, before := d.told[r]
		if tell = !before || time.Since(last) >= quiet; tell {
			d.told[r] = time.Now()
			text += fmt.Sprintf(" (%d so far)", d.count[r])
		}
	}
	d.mu.Unlock()
	if tell && d.warn != nil {
		d.warn(text)
	}
}

func (d *doorkeeper) Warnf(format string, v ...any)  { d.take(format, v...) }
func (d *doorkeeper) Errorf(format string, v ...any) { d.take(format, v...) }
func (d *doorkeeper) Fatalf(format string, v ...any) { d.take(format, v...) }
func (d *doorkeeper) Noticef(string, ...any)         {}
func (d *doorkeeper) Debugf(string, ...any)          {}
func (d *doorkeeper) Tracef(string, ...any)          {}

// Refused returns what was refused so far, in the order of robot and what.
func (s *Server) Refused() []Refusal {
	d := s.door
	d.mu.Lock()
	defer d.mu.Unlock()
	all := slices.SortedFunc(maps.Keys(d.count), func(a, b Refusal) int {
		return cmp.Or(strings.Compare(a.Robot, b.Robot), strings.Compare(a.What, b.What))
	})
	for i := range all {
		all[i].N = d.count[all[i]]
	}
	return all
}
