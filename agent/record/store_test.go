package record

import (
	"bytes"
	"errors"
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"

	"selvage/agent"
	"selvage/internal/journal"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

const second = int64(1e9)

func config(dim int) agent.Config {
	c := agent.DefaultConfig("f", "r1", dim)
	c.Journal = msgs.JournalID{9, 8, 7}
	c.PublishNS, c.SettleNS, c.RetryNS = second, second, 5*second
	return c
}

// told is an event of a front end and when it came.
type told struct {
	atNS  int64
	event agent.Event
}

// track is what a front end tells of a walk of so many keyframes: odometry, closures of which some are false, ties by id and by
// moment, whole and of less than a pose, sightings of marks; in two sessions.
func track(seed uint64, dim, keyframes int) []told {
	rng := rand.New(rand.NewPCG(seed, 77))
	var out []told
	now := 1_000 * second
	say := func(e agent.Event) {
		now += int64(rng.IntN(int(second)))
		out = append(out, told{now, e})
	}
	noisy := func(x lie.SE3, s float64) lie.SE3 {
		var d [6]float64
		for _, i := range [3]int{0, 1, 5} {
			d[i] = s * rng.NormFloat64()
		}
		if dim == 3 {
			d[2], d[3], d[4] = s*rng.NormFloat64(), 0.1*s*rng.NormFloat64(), 0.1*s*rng.NormFloat64()
		}
		return x.Mul(lie.Exp(d))
	}
	var info [36]float64
	for i := range 6 {
		info[7*i] = 400
	}
	var truth, front []lie.SE3
	session := uint32(1)
	for k := range keyframes {
		if k == 2*keyframes/3 { // the front end restarts
			session, truth, front = 2, nil, nil
		}
		n := len(truth)
		key := func(i int) int64 { return int64(keyframes)*int64(session) + int64(i) }
		if n == 0 {
			truth, front = append(truth, lie.Identity()), append(front, lie.Identity())
		} else {
			step := lie.Exp([6]float64{1, 0, 0, 0, 0, 0.3})
			z := noisy(step, 0.05)
			truth, front = append(truth, truth[n-1].Mul(step)), append(front, front[n-1].Mul(z))
		}
		say(agent.Keyframe{Session: session, ID: key(n), StampNS: now, Pose: front[n]})
		if n > 0 {
			say(agent.Relative{Session: session, From: key(n - 1), To: key(n), Z: front[n-1].Between(front[n]), Info: info})
		}
		if n > 15 && rng.IntN(3) == 0 {
			j := rng.IntN(n - 10)
			z := noisy(truth[j].Between(truth[n]), 0.05)
			if rng.IntN(5) == 0 {
				z = noisy(z, 3)
			}
			say(agent.Relative{Session: session, From: key(j), To: key(n), Z: z, Info: info, Closure: true})
		}
		from := msgs.KeyRef{Robot: "r1", Session: session, ID: key(n)}
		to := msgs.KeyRef{Robot: "r2", Session: 4, ByStamp: true, StampNS: now}
		sight := agent.Sight{Sense: posegraph.Range, Value: [3]float64{3, 0, 0}, Info: lie.Mat3{0: 100}, Mount: lie.Identity()}
		moment := now - second/3 + rng.Int64N(second) // of this robot, also one that is still to come
		switch rng.IntN(8) {
		case 6:
			say(agent.Tie{From: msgs.KeyRef{Robot: "r1", Session: session, ByStamp: true, StampNS: moment}, To: to, Sight: &sight})
		case 7:
			s := sight
			s.Sense, s.Info, s.Value = posegraph.RangeBearing, lie.Mat3{0: 100, 4: 1000, 8: 1000}, [3]float64{3, rng.Float64(), 0}
			say(agent.Sighting{Session: session, ByStamp: true, StampNS: moment, Mark: "n", Sight: s})
		case 0:
			say(agent.Tie{From: from, To: to, Z: noisy(lie.Identity(), 1), Info: info, Source: "lidar", StampNS: now})
		case 1:
			say(agent.Tie{ID: fmt.Sprint("named.", k), From: from, To: to, Sight: &sight})
		case 2:
			say(agent.Sighting{Session: session, ID: key(n), Mark: "m", Sight: sight})
		}
	}
	return out
}

// ties returns what an agent says when it is asked for every tie, by number.
func ties(t *testing.T, a *agent.Agent, cfg agent.Config, nowNS int64) map[uint64][]byte {
	t.Helper()
	w := msgs.Want{Fleet: "f", Robot: "r1", Epoch: msgs.Epoch{Incarnation: 1}, Term: 1, Journal: cfg.Journal, Gaps: [][2]uint64{{1, 1 << 40}}}
	b, err := w.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	out, err := a.Handle(nowNS, agent.Message{Kind: msgs.KindWant, Payload: b})
	if err != nil {
		t.Fatal(err)
	}
	all := map[uint64][]byte{}
	for _, p := range out {
		if p.Kind == msgs.KindTie {
			all[p.Number] = p.Payload
		}
	}
	return all
}

// summary lets time pass and returns the summary that the agent then makes.
func summary(t *testing.T, a *agent.Agent, nowNS int64) *msgs.Summary {
	t.Helper()
	out, err := a.Handle(nowNS, agent.Tick{})
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range out {
		if p.Kind == msgs.KindSummary {
			s, err := msgs.DecodeSummary(p.Payload)
			if err != nil {
				t.Fatal(err)
			}
			if s.Version != p.Number {
				t.Errorf("summary %d is published as %d", s.Version, p.Number)
			}
			return s
		}
	}
	t.Fatal("no summary")
	return nil
}

// sameBytes tells whether two summaries are the same but for their versions.
func sameBytes(t *testing.T, a, b *msgs.Summary) bool {
	t.Helper()
	x := *a
	x.Version = b.Version
	p, err := x.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	q, err := b.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	return bytes.Equal(p, q)
}

// life is an agent that lives through crashes, as its shell would keep it.
type life struct {
	disk      *journal.Memory
	cfg       agent.Config
	store     *Store
	core      *agent.Agent
	published map[uint64][]byte // ties, when they were durable
	version   uint64            // of the newest summary published
	waiting   []agent.Publish
}

func (l *life) open(t *testing.T) {
	t.Helper()
	store, core, err := Open(l.disk, l.cfg)
	if err != nil {
		t.Fatal(err)
	}
	l.store, l.core, l.waiting = store, core, nil
}

func (l *life) handle(t *testing.T, nowNS int64, e agent.Event) {
	t.Helper()
	out, _, err := l.store.Handle(nowNS, e)
	if err != nil {
		t.Fatalf("%+v: %v", e, err)
	}
	l.waiting = append(l.waiting, out...)
}

// commit publishes what is durable.
func (l *life) commit(t *testing.T) {
	t.Helper()
	if _, err := l.store.Commit(l.store.State()); err != nil {
		return // it is tried again
	}
	for _, p := range l.waiting {
		switch p.Kind {
		case msgs.KindTie:
			if was, again := l.published[p.Number]; again && !bytes.Equal(was, p.Payload) {
				t.Fatalf("tie %d was published with other bytes", p.Number)
			}
			l.published[p.Number] = p.Payload
		case msgs.KindSummary:
			if p.Number <= l.version {
				t.Fatalf("summary %d after %d", p.Number, l.version)
			}
			l.version = p.Number
		}
	}
	l.waiting = nil
}

// TestCrashAndReplay lets an agent crash again and again on a disk that fails. Its front end tells again what was not durable. In the
// end it has the ties, with numbers, ids and bytes, of an agent that was told the same at once and never crashed, no tie was
// ever published in two ways, and no version twice; and the next summary is that of the other agent, byte for byte.
func TestCrashAndReplay(t *testing.T) {
	for seed := range uint64(40) {
		dim := 2 + int(seed%2)
		rng := rand.New(rand.NewPCG(seed, 5))
		all := track(seed, dim, 60)
		l := life{disk: journal.NewMemory(seed), cfg: config(dim), published: map[uint64][]byte{}}
		l.open(t)
		for i, crashes := 0, 0; i < len(all); {
			l.handle(t, all[i].atNS, all[i].event)
			i++
			if rng.IntN(3) == 0 {
				l.handle(t, all[i-1].atNS, agent.Tick{})
			}
			if rng.IntN(10) == 0 { // the base asks for a moment, which makes a keyframe that no journal knows of
				w := msgs.Want{Fleet: "f", Robot: "r1", Epoch: msgs.Epoch{Incarnation: 1}, Term: 1, Journal: l.cfg.Journal,
					Keys: []msgs.KeyRef{{Robot: "r1", Session: 1, ByStamp: true, StampNS: all[i-1].atNS - int64(rng.IntN(int(20*second)))}}}
				b, err := w.Marshal()
				if err != nil {
					t.Fatal(err)
				}
				l.handle(t, all[i-1].atNS, agent.Message{Kind: msgs.KindWant, Payload: b})
			}
			if rng.IntN(4) == 0 {
				l.commit(t)
			}
			if rng.IntN(25) > 0 {
				continue
			}
			crashes++
			if rng.IntN(2) == 0 {
				l.disk = l.disk.PowerCut()
			}
			l.disk.Restart()
			l.disk.SetFaults(journal.Faults{})
			l.open(t)
			if int(l.store.log.Last())-1 > i {
				t.Fatalf("seed %d: %d records of %d events", seed, l.store.log.Last(), i)
			}
			i = int(l.store.log.Last()) - 1 // the first is the beginning
			l.disk.SetFaults(journal.Faults{Write: 0.1, Sync: 0.1, Names: 0.1})
		}
		l.disk.SetFaults(journal.Faults{})
		l.commit(t)
		l.disk = l.disk.PowerCut()
		l.open(t)
		other := agent.New(l.cfg)
		for _, e := range all {
			if _, err := other.Handle(e.atNS, e.event); err != nil {
				t.Fatal(err)
			}
		}
		late := all[len(all)-1].atNS + 100*second
		if next, want := summary(t, l.core, late), summary(t, other, late); next.Version != l.version+1 || !sameBytes(t, next, want) {
			t.Fatalf("seed %d: summary %d after %d differs from that of an agent that did not crash", seed, next.Version, l.version)
		}
		mine, want := ties(t, l.core, l.cfg, late+10*second), ties(t, other, l.cfg, late+10*second)
		if len(want) < 5 || len(mine) != len(want) {
			t.Fatalf("seed %d: %d ties, want %d", seed, len(mine), len(want))
		}
		for n, b := range want {
			if !bytes.Equal(mine[n], b) {
				t.Fatalf("seed %d: tie %d differs", seed, n)
			}
			if was, ok := l.published[n]; ok && !bytes.Equal(was, b) {
				t.Fatalf("seed %d: tie %d was published with other bytes", seed, n)
			}
		}
	}
}

// TestStateIsRemembered: after a restart an older base, a lower term and an older correction are refused, the newest correction is
// applied again, what is safe stays so, and the clock does not go back.
func TestStateIsRemembered(t *testing.T) {
	l := life{disk: journal.NewMemory(1), cfg: config(2), published: map[uint64][]byte{}}
	l.open(t)
	all := track(1, 2, 40)
	for _, e := range all {
		l.handle(t, e.atNS, e.event)
	}
	now := all[len(all)-1].atNS + 100*second
	sum := summary(t, l.core, now)
	correction := func(epoch msgs.Epoch, term uint64) agent.Message {
		c := msgs.Correction{Fleet: "f", Robot: "r1", Epoch: epoch, Term: term, SummaryVersion: sum.Version, Dim: 3}
		for _, p := range sum.Parts {
			part := msgs.CorrectedPart{Session: p.Session, Joined: true, Island: "a", DatumFromSession: msgs.Pose{T: [3]float64{5, 0, 0}, Q: [4]float64{0, 0, 0, 1}}}
			for _, j := range p.Junctions {
				pose := j.Pose
				pose.T[0] += 5
				part.IDs, part.Poses = append(part.IDs, j.ID), append(part.Poses, pose)
			}
			c.Parts = append(c.Parts, part)
		}
		b, err := c.Marshal()
		if err != nil {
			t.Fatal(err)
		}
		return agent.Message{Kind: msgs.KindCorrection, Payload: b}
	}
	want := msgs.Want{Fleet: "f", Robot: "r1", Epoch: msgs.Epoch{Incarnation: 6, Number: 3}, Term: 4, Journal: l.cfg.Journal, Safe: 3}
	b, err := want.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	l.handle(t, now, agent.Message{Kind: msgs.KindWant, Payload: b})
	l.handle(t, now, correction(msgs.Epoch{Incarnation: 6, Number: 3}, 4))
	before := l.store.State()
	if before != (agent.State{Incarnation: 6, Term: 4, Applied: msgs.Epoch{Incarnation: 6, Number: 3}, Version: sum.Version, Safe: 3}) {
		t.Fatalf("state %+v", before)
	}
	l.commit(t)
	l.disk = l.disk.PowerCut()
	l.open(t)
	if got := l.store.State(); got != before {
		t.Fatalf("state %+v, want %+v", got, before)
	}
	if l.core.Applied() != (msgs.Epoch{}) || l.core.Tracks()[0].Joined {
		t.Error("a correction is said to be applied that is not")
	}
	if _, _, err := l.store.Handle(0, correction(msgs.Epoch{Incarnation: 6, Number: 4}, 3)); err == nil {
		t.Error("a lower term is heard")
	}
	l.handle(t, 0, correction(msgs.Epoch{Incarnation: 6, Number: 2}, 4))
	if l.core.Applied() != (msgs.Epoch{}) {
		t.Error("an older correction is applied")
	}
	l.handle(t, 0, correction(msgs.Epoch{Incarnation: 6, Number: 3}, 4))
	if l.core.Applied() != before.Applied || !l.core.Tracks()[0].Joined {
		t.Error("the newest correction is not applied again")
	}
	resent := map[uint64]bool{}
	out, _, err := l.store.Handle(now+1000*second, agent.Tick{})
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range out {
		if p.Kind == msgs.KindTie {
			resent[p.Number] = true
		}
	}
	if resent[1] || resent[3] || !resent[4] {
		t.Errorf("sent again: %v, safe are 3", resent)
	}
}

// TestClockGoesOn: what an agent has done it did when it did it, and after a restart with the clock at zero it is not earlier.
func TestClockGoesOn(t *testing.T) {
	l := life{disk: journal.NewMemory(1), cfg: config(2), published: map[uint64][]byte{}}
	l.open(t)
	at := 100 * second
	l.handle(t, at, agent.Keyframe{Session: 1, ID: 1, Pose: lie.Identity()})
	l.handle(t, at+second, agent.Tie{From: msgs.KeyRef{Robot: "r1", Session: 1, ID: 1}, To: msgs.KeyRef{Robot: "r2", Session: 1}, Z: lie.Identity(), Info: [36]float64{0: 1, 7: 1, 35: 1}})
	l.commit(t)
	l.disk.Restart()
	l.open(t)
	resent := func(nowNS int64) (again bool) {
		out, _, err := l.store.Handle(nowNS, agent.Tick{})
		if err != nil {
			t.Fatal(err)
		}
		for _, p := range out {
			again = again || p.Kind == msgs.KindTie
		}
		return again
	}
	for _, c := range []struct {
		nowNS int64
		want  bool
	}{{0, false}, {at + second + l.cfg.RetryNS - 1, false}, {at + second + l.cfg.RetryNS, true}} {
		if got := resent(c.nowNS); got != c.want {
			t.Errorf("at %d: tie sent again: %v, want %v", c.nowNS, got, c.want)
		}
	}
	l.disk.Restart()
	l.open(t)
	l.handle(t, 0, agent.Keyframe{Session: 1, ID: 2, Pose: lie.Identity()}) // recorded at the time that it is
	if l.store.last != at+second {
		t.Errorf("the clock stands at %d, want %d", l.store.last, at+second)
	}
}

// TestOpenRefuses opens journals that are not those of this agent.
func TestOpenRefuses(t *testing.T) {
	write := func(records ...entry) *journal.Memory {
		d := journal.NewMemory(1)
		log, err := journal.Open(d, journal.Owner{ID: config(2).Journal, Fleet: "f", Robot: "r1"})
		if err != nil {
			t.Fatal(err)
		}
		if _, err = log.Append(kindBegin, []byte{version, 2}); err != nil {
			t.Fatal(err)
		}
		for _, e := range records {
			kind, b := e.append(nil)
			if _, err := log.Append(kind, b); err != nil {
				t.Fatal(err)
			}
		}
		if err := log.Close(); err != nil {
			t.Fatal(err)
		}
		return d
	}
	key := entry{5, 0, agent.Keyframe{Session: 1, ID: 1, Pose: lie.Identity()}}
	tie := entry{6, 1, agent.Tie{From: msgs.KeyRef{Robot: "r1", Session: 1, ID: 1}, To: msgs.KeyRef{Robot: "r2", Session: 1}, Z: lie.Identity(), Info: [36]float64{0: 1, 7: 1, 35: 1}}}
	second := tie
	second.number = 3
	if _, _, err := Open(write(key, tie), config(2)); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		disk *journal.Memory
		dim  int
		want string
	}{
		{write(key, tie), 3, "record 1 of the journal: a survey of dimension 2, expected 3"},
		{write(key, key), 2, "record 3 of the journal: it was taken once, now: keyframe 1 of session 1 came twice"},
		{write(key, second), 2, "record 3 of the journal: a tie of number 3, now 1"},
		{write(key, tie, tie), 2, "record 4 of the journal: a tie of number 1, now 2"},
	} {
		if _, _, err := Open(c.disk, config(c.dim)); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%v, want %s", err, c.want)
		}
		if _, err := c.disk.Lock(); err != nil {
			t.Errorf("after %s: %v", c.want, err)
		}
	}
}

// A journal that takes no more keeps the agent from taking what it would forget.
func TestFinished(t *testing.T) {
	l := life{disk: journal.NewMemory(1), cfg: config(2)}
	l.open(t)
	all := track(2, 2, 10)
	l.handle(t, all[0].atNS, all[0].event)
	if err := l.store.Finish(); err != nil {
		t.Fatal(err)
	}
	if _, _, err := l.store.Handle(all[1].atNS, all[1].event); !errors.Is(err, journal.ErrFinished) {
		t.Errorf("an event after the end: %v", err)
	}
	if n := len(l.core.Tracks()[0].IDs); n != 1 {
		t.Errorf("%d keyframes, want 1", n)
	}
	l.handle(t, all[1].atNS, agent.Tick{}) // the base may still be answered
	if err := l.store.Close(); err != nil {
		t.Fatal(err)
	}
	l.open(t)
	if n := len(l.core.Tracks()[0].IDs); n != 1 {
		t.Errorf("opened again: %d keyframes, want 1", n)
	}
}

// Handling an odometry step of a long walk, with the journal and without.
func BenchmarkHandle(b *testing.B) {
	for _, kept := range []bool{false, true} {
		b.Run(fmt.Sprintf("kept=%v", kept), func(b *testing.B) {
			d, err := journal.OS(b.TempDir())
			if err != nil {
				b.Fatal(err)
			}
			store, core, err := Open(d, config(3))
			if err != nil {
				b.Fatal(err)
			}
			defer store.Close()
			b.ReportAllocs()
			pose, step := lie.Identity(), lie.Exp([6]float64{0.1, 0, 0, 0, 0, 0.01})
			info := [36]float64{0: 1, 7: 1, 14: 1, 21: 1, 28: 1, 35: 1}
			handle := func(at int64, e agent.Event) {
				if kept {
					_, _, err = store.Handle(at, e)
				} else {
					_, err = core.Handle(at, e)
				}
				if err != nil {
					b.Fatal(err)
				}
			}
			for k := int64(0); b.Loop(); k++ {
				handle(k, agent.Keyframe{Session: 1, ID: k, StampNS: k, Pose: pose})
				if k > 0 {
					handle(k, agent.Relative{Session: 1, From: k - 1, To: k, Z: step, Info: info})
				}
				if pose = pose.Mul(step); k%1000 == 999 && kept {
					if _, err := store.Commit(store.State()); err != nil {
						b.Fatal(err)
					}
				}
			}
		})
	}
}

// Opening the journal of a walk of 100000 keyframes.
func BenchmarkOpen(b *testing.B) {
	d, err := journal.OS(b.TempDir())
	if err != nil {
		b.Fatal(err)
	}
	store, _, err := Open(d, config(3))
	if err != nil {
		b.Fatal(err)
	}
	pose, step := lie.Identity(), lie.Exp([6]float64{0.1, 0, 0, 0, 0, 0.01})
	info := [36]float64{0: 1, 7: 1, 14: 1, 21: 1, 28: 1, 35: 1}
	for k := range int64(100_000) {
		_, _, err = store.Handle(k, agent.Keyframe{Session: 1, ID: k, StampNS: k, Pose: pose})
		if err == nil && k > 0 {
			_, _, err = store.Handle(k, agent.Relative{Session: 1, From: k - 1, To: k, Z: step, Info: info})
		}
		if err == nil && k%1000 == 0 {
			_, err = store.Commit(store.State())
		}
		if err != nil {
			b.Fatal(err)
		}
		pose = pose.Mul(step)
	}
	if err := store.Close(); err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		store, core, err := Open(d, config(3))
		if err != nil {
			b.Fatal(err)
		}
		if n := len(core.Tracks()[0].IDs); n != 100_000 {
			b.Fatalf("%d keyframes", n)
		}
		if err := store.Close(); err != nil {
			b.Fatal(err)
		}
	}
}
