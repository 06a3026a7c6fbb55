package bus

import (
	"context"
	"errors"
	"maps"
	"slices"
	"sync"
	"testing"
	"testing/synctest"
	"time"
)

// flakyLink records what is sent; while down it refuses.
type flakyLink struct {
	mu   sync.Mutex
	down bool
	slow time.Duration
	sent []string
	busy map[string]bool
	fail func(string)
}

func (l *flakyLink) send(_ context.Context, key, value string) error {
	l.mu.Lock()
	if l.busy[key] {
		l.fail("two messages of key " + key + " on their way")
	}
	l.busy[key] = true
	l.mu.Unlock()
	pass(l.slow)
	l.mu.Lock()
	defer l.mu.Unlock()
	l.busy[key] = false
	if l.down {
		return errors.New("no link")
	}
	l.sent = append(l.sent, key+value)
	return nil
}

// pass lets time pass on the clock of the test, which costs none.
func pass(d time.Duration) { <-time.After(d) }

// runOutbox lets play an outbox with workers on a clock of its own, and returns what was sent and how often it warned.
func runOutbox(t *testing.T, workers int, l *flakyLink, play func(o *Outbox[string, string])) (sent []string, warnings int) {
	synctest.Test(t, func(t *testing.T) {
		l.busy, l.fail = map[string]bool{}, func(s string) { t.Error(s) }
		o := NewOutbox(l.send, func(error) { warnings++ })
		ctx, cancel := context.WithCancel(t.Context())
		ended := make(chan struct{})
		go func() { o.Run(ctx, workers); close(ended) }()
		play(o)
		cancel()
		<-ended
	})
	return l.sent, warnings
}

func TestOneWorkerKeepsTheOrder(t *testing.T) {
	sent, _ := runOutbox(t, 1, &flakyLink{}, func(o *Outbox[string, string]) {
		for _, k := range []string{"a", "b", "c"} {
			o.Put(k, "1")
		}
		synctest.Wait()
		if !o.Empty() {
			t.Error("not empty after all was sent")
		}
	})
	if want := []string{"a1", "b1", "c1"}; !slices.Equal(sent, want) {
		t.Errorf("sent %v, want %v", sent, want)
	}
}

func TestTheNewestOfAKeyIsSent(t *testing.T) {
	sent, _ := runOutbox(t, 3, &flakyLink{slow: time.Second}, func(o *Outbox[string, string]) {
		o.Put("a", "1")
		synctest.Wait() // on its way
		for _, v := range []string{"2", "3", "4"} {
			o.Put("a", v)
		}
		pass(5 * time.Second)
	})
	if want := []string{"a1", "a4"}; !slices.Equal(sent, want) {
		t.Errorf("sent %v, want %v", sent, want)
	}
}

func TestNothingIsLostWhileTheLinkIsDown(t *testing.T) {
	l := &flakyLink{down: true}
	sent, warnings := runOutbox(t, 2, l, func(o *Outbox[string, string]) {
		o.Put("a", "1")
		o.Put("b", "1")
		pass(10*outboxRest + outboxRest/2) // between two attempts
		o.Put("a", "2")
		o.Put("c", "1")
		l.mu.Lock()
		l.down = false
		l.mu.Unlock()
		pass(3 * outboxRest)
		if !o.Empty() {
			t.Error("not empty after the link came back")
		}
	})
	slices.Sort(sent)
	if want := []string{"a2", "b1", "c1"}; !slices.Equal(sent, want) {
		t.Errorf("sent %v, want %v", sent, want)
	}
	if warnings != 1 {
		t.Errorf("%d warnings of one failure of the link", warnings)
	}
}

func TestManyPutTheirLastValueArrives(t *testing.T) {
	const keys, values = "abcdefgh", 200
	sent, _ := runOutbox(t, 4, &flakyLink{slow: time.Millisecond}, func(o *Outbox[string, string]) {
		var wait sync.WaitGroup
		for _, k := range keys {
			wait.Go(func() {
				for v := range values {
					o.Put(string(k), string(rune('A'+v)))
					if v%7 == 0 {
						pass(time.Duration(v) * time.Microsecond)
					}
				}
			})
		}
		wait.Wait()
		pass(time.Second)
	})
	last := map[string]string{}
	for _, s := range sent {
		if last[s[:1]] >= s[1:] {
			t.Fatalf("%s sent after %s", s, last[s[:1]])
		}
		last[s[:1]] = s[1:]
	}
	for k, v := range last {
		if v != string(rune('A'+values-1)) {
			t.Errorf("the last of %s is %s", k, v)
		}
	}
	if n := len(slices.Collect(maps.Keys(last))); n != len(keys) {
		t.Errorf("%d keys were sent, want %d", n, len(keys))
	}
}
