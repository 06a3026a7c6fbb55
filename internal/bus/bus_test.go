package bus

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"go.uber.org/goleak"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

const longest = 20 * time.Second

func start(t *testing.T, o Options) *Server {
	t.Helper()
	if o.StoreDir == "" {
		o.StoreDir = t.TempDir()
	}
	o.Warn = func(text string) { t.Log("server:", text) }
	s, err := Start(o)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { s.Close() })
	return s
}

func join(t *testing.T, s *Server, name string) *Client {
	t.Helper()
	c, err := s.Connect(ClientOptions{Name: name, Warn: func(err error) { t.Log(name+":", err) }})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(c.Close)
	return c
}

func deadline(t *testing.T) context.Context {
	ctx, cancel := context.WithTimeout(context.Background(), longest)
	t.Cleanup(cancel)
	return ctx
}

type message struct{ subject, payload string }

// inbox collects what a handler is given.
func inbox() (chan message, Handler) {
	c := make(chan message, 1000)
	return c, func(subject string, payload []byte) { c <- message{subject, string(payload)} }
}

func timed(h Handler) Stored {
	return func(subject string, storedNS int64, payload []byte) {
		if ago := time.Since(time.Unix(0, storedNS)); ago < 0 || ago > longest {
			panic(fmt.Sprintf("%s was stored %v ago", subject, ago))
		}
		h(subject, payload)
	}
}

func expect(t *testing.T, from <-chan message, want ...message) {
	t.Helper()
	for _, w := range want {
		select {
		case got := <-from:
			if got != w {
				t.Fatalf("got %v, want %v", got, w)
			}
		case <-time.After(longest):
			t.Fatalf("nothing came, want %v", w)
		}
	}
}

func TestTiesAreKeptOncePerRobot(t *testing.T) {
	s, ctx := start(t, Options{}), deadline(t)
	base, r1, r2 := join(t, s, "base"), join(t, s, "r1"), join(t, s, "r2")
	if err := base.Prepare(ctx, "f", "r1", "r2"); err != nil {
		t.Fatal(err)
	}
	if err := base.Prepare(ctx, "f", "r1", "r2"); err != nil {
		t.Fatal("a second time:", err)
	}
	publish := func(c *Client, robot, id, text string, want bool) {
		t.Helper()
		duplicate, err := c.Publish(ctx, "up.f."+robot+".tie", id, []byte(text))
		if err != nil || duplicate != want {
			t.Fatalf("%s: duplicate %v, %v", text, duplicate, err)
		}
	}
	publish(r1, "r1", "1", "first", false)
	publish(r1, "r1", "1", "first again", true)
	publish(r1, "r1", "2", "second", false)
	publish(r2, "r2", "1", "the same id of another robot", false)

	got, h := inbox()
	for _, r := range []string{"r1", "r2"} {
		stop, _, err := base.Replay(ctx, TieStream("f", r), timed(h))
		if err != nil {
			t.Fatal(err)
		}
		defer stop()
		if r == "r1" {
			expect(t, got, message{"up.f.r1.tie", "first"}, message{"up.f.r1.tie", "second"})
		}
	}
	expect(t, got, message{"up.f.r2.tie", "the same id of another robot"})
	publish(r1, "r1", "3", "third", false)
	expect(t, got, message{"up.f.r1.tie", "third"})
}

// A stream of ties that is full refuses the next one, and drops none.
func TestFullStreamRefuses(t *testing.T) {
	s, ctx := start(t, Options{}), deadline(t)
	base := join(t, s, "base")
	if err := base.Prepare(ctx, "f", "r1", "r2"); err != nil {
		t.Fatal(err)
	}
	const subject, size = "up.f.r1.tie", 1 << 20
	stored := 0
	for ; stored <= tieQuota/size; stored++ {
		if _, err := base.Publish(ctx, subject, fmt.Sprint(stored), make([]byte, size)); err != nil {
			break
		}
	}
	if stored < tieQuota/size-1 || stored > tieQuota/size {
		t.Fatalf("%d ties of 1 MiB were stored in %d MiB", stored, tieQuota>>20)
	}
	if _, err := base.Publish(ctx, "up.f.r2.tie", "0", make([]byte, size)); err != nil {
		t.Fatal("another robot is kept out:", err)
	}
	got, h := inbox()
	stop, _, err := base.Replay(ctx, TieStream("f", "r1"), timed(h))
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	for range stored {
		expect(t, got, message{subject, string(make([]byte, size))})
	}
}

func TestReaderComesBackToWhatItRefused(t *testing.T) {
	dir := t.TempDir()
	s, ctx := start(t, Options{StoreDir: dir}), deadline(t)
	base := join(t, s, "base")
	if err := base.Prepare(ctx, "f", "r1"); err != nil {
		t.Fatal(err)
	}
	for _, text := range []string{"a", "b"} {
		if _, err := base.Publish(ctx, "down.f.r1.verdict", text, []byte(text)); err != nil {
			t.Fatal(err)
		}
	}
	r1 := join(t, s, "r1")
	seen := make(chan message, 10)
	refused := false
	stop, err := r1.Consume(ctx, VerdictStream("f"), "r1", func(subject string, payload []byte) error {
		seen <- message{subject, string(payload)}
		if string(payload) == "a" && !refused {
			refused = true
			return errors.New("not now")
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	a, b := message{"down.f.r1.verdict", "a"}, message{"down.f.r1.verdict", "b"}
	expect(t, seen, a, b, a)
	stop()

	// The reader goes on where it was, also after the server.
	r1.Close()
	base.Close()
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	s = start(t, Options{StoreDir: dir})
	base, r1 = join(t, s, "base"), join(t, s, "r1")
	if _, err := base.Publish(ctx, "down.f.r1.verdict", "c", []byte("c")); err != nil {
		t.Fatal(err)
	}
	stop, err = r1.Consume(ctx, VerdictStream("f"), "r1", func(subject string, payload []byte) error {
		seen <- message{subject, string(payload)}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	expect(t, seen, message{"down.f.r1.verdict", "c"})
}

func TestOnlyTheNewestSummaryIsKept(t *testing.T) {
	s, ctx := start(t, Options{}), deadline(t)
	base, r1 := join(t, s, "base"), join(t, s, "r1")
	if err := base.Prepare(ctx, "f", "r1"); err != nil {
		t.Fatal(err)
	}
	const subject = "up.f.r1.summary"
	if payload, _, err := base.Newest(ctx, SummaryStream("f"), subject); payload != nil || err != nil {
		t.Fatalf("%q, %v", payload, err)
	}
	for i := range 5 {
		if err := r1.PublishNewest(ctx, subject, fmt.Append(nil, i)); err != nil {
			t.Fatal(err)
		}
	}
	if err := r1.PublishNewest(ctx, subject+".a.0", []byte("chunk")); err != nil {
		t.Fatal(err)
	}
	payload, sequence, err := base.Newest(ctx, SummaryStream("f"), subject)
	if err != nil || string(payload) != "4" || sequence != 5 {
		t.Fatalf("%q at %d, %v", payload, sequence, err)
	}
	got, h := inbox()
	stop, _, err := base.Replay(ctx, SummaryStream("f"), timed(h))
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	expect(t, got, message{subject, "4"}, message{subject + ".a.0", "chunk"})
	large := make([]byte, 127<<16)
	if err := r1.PublishNewest(ctx, subject, large); err != nil {
		t.Fatal("nearly 8 MiB:", err)
	}
	expect(t, got, message{subject, string(large)})
}

func TestFollowHandsOverTheNewest(t *testing.T) {
	s, ctx := start(t, Options{}), deadline(t)
	base, r1 := join(t, s, "base"), join(t, s, "r1")
	if err := base.Prepare(ctx, "f", "r1"); err != nil {
		t.Fatal(err)
	}
	const subject = "down.f.r1.corr"
	if err := base.PublishNewest(ctx, subject, []byte("before")); err != nil {
		t.Fatal(err)
	}
	got, h := inbox()
	stop, err := r1.Follow(CorrectionStream("f"), subject, h)
	if err != nil {
		t.Fatal(err)
	}
	expect(t, got, message{subject, "before"})
	if err := base.PublishNewest(ctx, subject, []byte("after")); err != nil {
		t.Fatal(err)
	}
	expect(t, got, message{subject, "after"})
	stop()
	if err := base.PublishNewest(ctx, subject, []byte("too late")); err != nil {
		t.Fatal(err)
	}
	if len(got) != 0 {
		t.Fatalf("%v after the end", <-got)
	}
}

func TestHeartbeatsAreHeardAndNotKept(t *testing.T) {
	s, ctx := start(t, Options{}), deadline(t)
	base, r1 := join(t, s, "base"), join(t, s, "r1")
	if err := base.Prepare(ctx, "f", "r1"); err != nil {
		t.Fatal(err)
	}
	got, h := inbox()
	stop, err := base.Subscribe("up.f.*.hb", h)
	if err != nil {
		t.Fatal(err)
	}
	if err := r1.PublishHeartbeat("up.f.r1.hb", []byte("alive")); err != nil {
		t.Fatal(err)
	}
	expect(t, got, message{"up.f.r1.hb", "alive"})
	stop()
	if err := base.flush(); err != nil {
		t.Fatal(err)
	}
	if err := r1.PublishNewest(ctx, "up.f.r1.hb", []byte("alive")); err == nil {
		t.Fatal("a heartbeat was stored")
	}
}

// A server on a port goes and comes back on its store. Meanwhile publishing fails at once and nothing is sent later; a
// follower and a reader go on by themselves.
func TestLinkGoesAndComes(t *testing.T) {
	dir, ctx := t.TempDir(), deadline(t)
	s := start(t, Options{StoreDir: dir, Listen: "127.0.0.1:0"})
	url := s.URL()
	link := make(chan bool, 10)
	r1, err := Dial(url, ClientOptions{Name: "r1", Connected: func(up bool) { link <- up }})
	if err != nil {
		t.Fatal(err)
	}
	defer r1.Close()
	if err := r1.Prepare(ctx, "f", "r1"); err != nil {
		t.Fatal(err)
	}
	awaitLink(t, link, true)
	const subject = "down.f.r1.corr"
	got, h := inbox()
	stop, err := r1.Follow(CorrectionStream("f"), subject, h)
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	ties, h := inbox()
	stopTies, err := r1.Consume(ctx, TieStream("f", "r1"), BaseReader, func(subject string, payload []byte) error {
		h(subject, payload)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	defer stopTies()

	s.Close()
	awaitLink(t, link, false)
	if _, err := r1.Publish(ctx, "up.f.r1.tie", "1", []byte("lost")); !errors.Is(err, nats.ErrDisconnected) {
		t.Fatal("published without a link:", err)
	}
	if err := r1.PublishHeartbeat("up.f.r1.hb", nil); err == nil {
		t.Fatal("heartbeat without a link")
	}

	s = start(t, Options{StoreDir: dir, Listen: url[len("nats://"):]})
	base := join(t, s, "base")
	if err := base.PublishNewest(ctx, subject, []byte("meanwhile")); err != nil {
		t.Fatal(err)
	}
	if _, err := base.Publish(ctx, "up.f.r1.tie", "2", []byte("kept")); err != nil {
		t.Fatal(err)
	}
	awaitLink(t, link, true)
	expect(t, got, message{subject, "meanwhile"})
	expect(t, ties, message{"up.f.r1.tie", "kept"})
}

// A robot that was switched on first finds the base when it comes, and a base that lost its store.
func TestBaseComesLaterAndAnew(t *testing.T) {
	ctx := deadline(t)
	s := start(t, Options{Listen: "127.0.0.1:0"})
	url := s.URL()
	s.Close()

	r1, err := Dial(url, ClientOptions{Name: "r1", Warn: func(err error) { t.Log("r1:", err) }})
	if err != nil {
		t.Fatal(err)
	}
	defer r1.Close()
	const corr, verdict = "down.f.r1.corr", "down.f.r1.verdict"
	got, h := inbox()
	stop, err := r1.Follow(CorrectionStream("f"), corr, h)
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	verdicts, h := inbox()
	var stopVerdicts func()
	for _, text := range []string{"first base", "second base"} {
		s := start(t, Options{Listen: url[len("nats://"):]})
		base := join(t, s, "base")
		if err := base.Prepare(ctx, "f", "r1"); err != nil {
			t.Fatal(err)
		}
		if err := base.PublishNewest(ctx, corr, []byte(text)); err != nil {
			t.Fatal(err)
		}
		if _, err := base.Publish(ctx, verdict, text, []byte(text)); err != nil {
			t.Fatal(err)
		}
		expect(t, got, message{corr, text})
		if stopVerdicts == nil {
			stopVerdicts, err = r1.Consume(ctx, VerdictStream("f"), "r1", func(subject string, payload []byte) error {
				h(subject, payload)
				return nil
			})
			if err != nil {
				t.Fatal(err)
			}
			defer stopVerdicts()
		}
		expect(t, verdicts, message{verdict, text})
		base.Close()
		s.Close()
	}
}

func awaitLink(t *testing.T, link <-chan bool, want bool) {
	t.Helper()
	select {
	case got := <-link:
		if got != want {
			t.Fatalf("link %v, want %v", got, want)
		}
	case <-time.After(longest):
		t.Fatalf("no news of the link, want %v", want)
	}
}

func TestStoreIsLocked(t *testing.T) {
	dir := t.TempDir()
	s := start(t, Options{StoreDir: dir})
	if s.URL() != "" {
		t.Fatal("listens on", s.URL())
	}
	if _, err := Start(Options{StoreDir: dir}); !errors.Is(err, ErrStoreInUse) {
		t.Fatal("a second server on the store:", err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	start(t, Options{StoreDir: dir})
}

func TestStartRefuses(t *testing.T) {
	for _, o := range []Options{
		{}, {StoreDir: t.TempDir(), Listen: "nonsense"}, {StoreDir: t.TempDir(), Listen: "localhost:70000"}, {StoreDir: t.TempDir(), Listen: "localhost:-1"}, {StoreDir: "/dev/null/x"},
	} {
		if s, err := Start(o); err == nil {
			s.Close()
			t.Errorf("%+v: started", o)
		}
	}
	s := start(t, Options{})
	for _, name := range []string{"", "a.b", "*", "a b"} {
		if c, err := s.Connect(ClientOptions{Name: name}); err == nil {
			c.Close()
			t.Errorf("a client called %q", name)
		}
	}
}

func TestLease(t *testing.T) {
	s, ctx := start(t, Options{}), deadline(t)
	one, two := join(t, s, "one"), join(t, s, "two")
	if err := one.Prepare(ctx, "f", "r1"); err != nil {
		t.Fatal(err)
	}
	const lease, corr = "down.f._lease", "down.f.r1.corr"
	valid := func(b []byte) bool { return !bytes.HasPrefix(b, []byte("rubbish")) }
	if err := two.PublishNewest(ctx, lease, []byte("rubbish before anybody has it")); err != nil {
		t.Fatal(err)
	}
	first, err := one.TakeLease(ctx, "f", lease, []byte("one"), time.Second, valid)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := two.TakeLease(ctx, "f", lease, []byte("two"), time.Second, valid); !errors.Is(err, ErrLeaseHeld) {
		t.Fatal("taken twice:", err)
	}
	for range 3 {
		if err := first.Renew(ctx, []byte("one")); err != nil {
			t.Fatal(err)
		}
		if err := first.PublishNewest(ctx, corr, []byte("from one")); err != nil {
			t.Fatal(err)
		}
	}

	// What somebody else has put there does not take it away.
	for _, what := range []func() error{
		func() error { return first.Renew(ctx, []byte("one")) },
		func() error { return first.PublishNewest(ctx, corr, []byte("from one")) },
	} {
		if err := two.PublishNewest(ctx, lease, []byte("rubbish")); err != nil {
			t.Fatal(err)
		}
		if _, err := two.TakeLease(ctx, "f", lease, []byte("one"), time.Second, func([]byte) bool { return true }); !errors.Is(err, ErrLeaseHeld) {
			t.Fatal("taken from under a message that counts:", err)
		}
		if err := what(); err != nil {
			t.Fatal("rubbish in the way:", err)
		}
	}

	// An acknowledgement that got lost: the message is stored, its sequence not known.
	if err := first.Renew(ctx, []byte("one, once more")); err != nil {
		t.Fatal(err)
	}
	first.sequence, first.unsure = first.sequence-2, true
	if err := first.PublishNewest(ctx, corr, []byte("from one")); err != nil {
		t.Fatal("after a lost acknowledgement:", err)
	}

	// The first holder pauses, the second has it once it has run out.
	var second *Lease
	for second == nil {
		second, err = two.TakeLease(ctx, "f", lease, []byte("two"), time.Second, valid)
		if err != nil && !errors.Is(err, ErrLeaseHeld) {
			t.Fatal(err)
		}
	}
	if err := second.PublishNewest(ctx, corr, []byte("from two")); err != nil {
		t.Fatal(err)
	}
	if err := first.PublishNewest(ctx, corr, []byte("from one, late")); !errors.Is(err, ErrLeaseLost) {
		t.Fatal("a lost lease published:", err)
	}
	if err := first.Renew(ctx, []byte("one")); !errors.Is(err, ErrLeaseLost) {
		t.Fatal("a lost lease renewed:", err)
	}
	if payload, _, err := one.Newest(ctx, CorrectionStream("f"), corr); err != nil || string(payload) != "from two" {
		t.Fatalf("newest is %q, %v", payload, err)
	}
}

func BenchmarkPublish(b *testing.B) {
	s, err := Start(Options{StoreDir: b.TempDir()})
	if err != nil {
		b.Fatal(err)
	}
	defer s.Close()
	c, err := s.Connect(ClientOptions{Name: "r1"})
	if err != nil {
		b.Fatal(err)
	}
	defer c.Close()
	ctx := context.Background()
	if err := c.Prepare(ctx, "f", "r1"); err != nil {
		b.Fatal(err)
	}
	payload := make([]byte, 300)
	b.Run("300 B, stored", func(b *testing.B) {
		for b.Loop() {
			if err := c.PublishNewest(ctx, "up.f.r1.summary", payload); err != nil {
				b.Fatal(err)
			}
		}
	})
}
