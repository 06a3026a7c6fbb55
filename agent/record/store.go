package record

import (
	"errors"
	"fmt"
	"sync"

	"selvage/agent"
	"selvage/internal/journal"
)

// Store is the journal of one agent.
type Store struct {
	core *agent.Agent
	log  *journal.Journal
	last int64 // time of the newest event, or of a later tick
	buf  []byte

	mu    sync.Mutex // of Commit
	saved agent.State
}

// Open opens the journal in a folder and makes the agent again that kept it, or begins one with the id in the configuration. The
// agent is used through the store alone, until that is closed.
//
// The errors are those of [journal.Open], or name the record that the agent does not take as it did.
func Open(d journal.Folder, cfg agent.Config) (*Store, *agent.Agent, error) {
	log, err := journal.Open(d, journal.Owner{ID: cfg.Journal, Fleet: cfg.Fleet, Robot: cfg.Robot})
	if err != nil {
		return nil, nil, err
	}
	cfg.Journal = log.Owner().ID
	s := &Store{core: agent.New(cfg), log: log}
	if err := s.replay(cfg.Dim); err != nil {
		return nil, nil, errors.Join(err, log.Close())
	}
	return s, s.core, nil
}

// replay tells the agent what the journal has.
func (s *Store) replay(dim int) error {
	if s.log.Last() == 0 {
		_, err := s.log.Append(kindBegin, []byte{version, byte(dim)})
		return err
	}
	for r, err := range s.log.From(1) {
		if err == nil && r.Number == 1 {
			err = checkBegin(&r, dim)
		} else if err == nil {
			err = s.again(&r)
		}
		if err != nil {
			return fmt.Errorf("record %d of the journal: %w", r.Number, err)
		}
	}
	b, err := s.log.State()
	if err != nil || b == nil {
		return err
	}
	if s.saved, err = decodeState(b); err != nil {
		return fmt.Errorf("state of the journal: %w", err)
	}
	s.core.Resume(s.saved)
	return nil
}

func checkBegin(r *journal.Record, dim int) error {
	if r.Kind != kindBegin || len(r.Payload) != 2 || r.Payload[0] != version {
		return fmt.Errorf("kind %d with %d bytes, expected the beginning of the journal of an agent", r.Kind, len(r.Payload))
	}
	if int(r.Payload[1]) != dim {
		return fmt.Errorf("a survey of dimension %d, expected %d", r.Payload[1], dim)
	}
	return nil
}

// again tells the agent what it was told once.
func (s *Store) again(r *journal.Record) error {
	e, err := decode(r.Kind, r.Payload)
	if err != nil {
		return err
	}
	out, err := s.core.Handle(max(e.atNS, s.last), e.event)
	if err != nil {
		return fmt.Errorf("it was taken once, now: %w", err)
	}
	if _, tie := e.event.(agent.Tie); tie && numberOf(out) != e.number {
		return fmt.Errorf("a tie of number %d, now %d", e.number, numberOf(out))
	}
	s.last = max(s.last, e.atNS)
	return nil
}

// numberOf returns the number of the tie among what an event of the front end has led to, 0 for none.
func numberOf(out []agent.Publish) uint64 {
	for i := range out {
		if out[i].Number > 0 {
			return out[i].Number
		}
	}
	return 0
}

// Handle gives the agent an event, as [agent.Agent.Handle] does, at a time that is not before that of the newest event ever. What
// comes of it is to be published when Commit has made the record durable that it returns, the newest there is. When the journal takes
// no more ([journal.ErrFull], [journal.ErrFinished]), neither does the agent take an event of its front end.
func (s *Store) Handle(nowNS int64, e agent.Event) (out []agent.Publish, record uint64, err error) {
	told := isTold(e)
	if told {
		if err := s.log.Ready(); err != nil {
			return nil, s.log.Last(), err
		}
	}
	s.last = max(s.last, nowNS)
	out, err = s.core.Handle(s.last, e)
	if err != nil || !told {
		return out, s.log.Last(), err
	}
	entry := entry{s.last, numberOf(out), e}
	kind, b := entry.append(s.buf[:0])
	s.buf = b
	record, err = s.log.Append(kind, b)
	return out, record, err
}

// isTold tells whether an event comes from the front end.
func isTold(e agent.Event) bool {
	switch e.(type) {
	case agent.Message, agent.Tick:
		return false
	}
	return true
}

// State returns what Commit is to make durable. It belongs to the agent, as Handle does; Commit may be called meanwhile.
func (s *Store) State() agent.State { return s.core.State() }

// Commit makes durable what was handled before the call, and a state of the agent, and returns up to which record. After an error
// it may be called again, with the same state or a newer one.
func (s *Store) Commit(state agent.State) (durable uint64, err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if durable, err = s.log.Sync(); err != nil || state == s.saved {
		return durable, err
	}
	if err := s.log.SetState(appendState(nil, state)); err != nil {
		return durable, err
	}
	s.saved = state
	return durable, nil
}

// Torn returns how many bytes a crash had left behind the last whole record.
func (s *Store) Torn() int64 { return s.log.Torn() }

// Finish closes the survey for good: the journal stays readable and takes no more.
func (s *Store) Finish() error { return s.log.Finish() }

// Close makes durable what there is and leaves the journal to others.
func (s *Store) Close() error { return s.log.Close() }
