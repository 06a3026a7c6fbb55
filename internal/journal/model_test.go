package journal

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"
)

var owner = Owner{ID: [16]byte{1, 2, 3}, Fleet: "f", Robot: "r1"}

// small limits make every schedule see several segments.
var small = limits{segment: 1500, held: 4000}

// model is what a journal must have.
type model struct {
	records []Record // as appended
	durable int      // of these were reported durable, the rest may be lost from the end
	state   uint64   // reported durable
	tried   uint64   // newest state that was tried
	final   bool     // finished, as reported
}

// compare holds a journal against the model, and notes what it has.
func (m *model) compare(j *Journal) error {
	var got []Record
	for r, err := range j.From(1) {
		if err != nil {
			return err
		}
		got = append(got, Record{r.Number, r.Kind, bytes.Clone(r.Payload)})
	}
	if len(got) < m.durable {
		return fmt.Errorf("%d records, %d were durable", len(got), m.durable)
	}
	if len(got) > len(m.records) {
		return fmt.Errorf("%d records, %d were appended", len(got), len(m.records))
	}
	for i, r := range got {
		if w := m.records[i]; r.Number != w.Number || r.Kind != w.Kind || !bytes.Equal(r.Payload, w.Payload) {
			return fmt.Errorf("record %d of kind %d with %d bytes, appended was %d of kind %d with %d", r.Number, r.Kind, len(r.Payload), w.Number, w.Kind, len(w.Payload))
		}
	}
	if j.Last() != uint64(len(got)) || j.Durable() > j.Last() {
		return fmt.Errorf("last %d, durable %d, %d records", j.Last(), j.Durable(), len(got))
	}
	m.records = m.records[:len(got)]
	m.durable = max(m.durable, int(j.Durable()))
	b, err := j.State()
	if err != nil {
		return err
	}
	var state uint64
	if b != nil {
		state = binary.LittleEndian.Uint64(b)
	}
	if state < m.state || state > m.tried {
		return fmt.Errorf("state %d, expected %d to %d", state, m.state, m.tried)
	}
	if m.final && !errors.Is(j.Ready(), ErrFinished) {
		return fmt.Errorf("a finished journal is ready: %v", j.Ready())
	}
	return nil
}

// schedule appends, syncs, fails, dies and opens again by a seed, and says what is wrong with what it finds.
func schedule(seed uint64, wrap func(*Memory) Folder) error {
	rng := rand.New(rand.NewPCG(seed, 1))
	disk := NewMemory(seed)
	var m model
	for life := range 2 + rng.IntN(5) {
		j, err := open(wrap(disk), owner, small)
		if err != nil {
			return fmt.Errorf("life %d: open: %w", life, err)
		}
		if err := m.compare(j); err != nil {
			return fmt.Errorf("life %d: after opening: %w", life, err)
		}
		f := Faults{}
		if rng.IntN(2) == 0 {
			f = Faults{Write: 0.1 * rng.Float64(), Sync: 0.2 * rng.Float64(), Names: 0.2 * rng.Float64(), Name: 0.1 * rng.Float64()}
		}
		if rng.IntN(4) == 0 {
			f.Capacity = 1 + rng.IntN(20_000)
		}
		f.Short = 0.3
		disk.SetFaults(f)
		if rng.IntN(2) == 0 {
			disk.KillAfter(1 + rng.IntN(60))
		}
		if err := m.live(rng, j); err != nil {
			return fmt.Errorf("life %d: %w", life, err)
		}
		if rng.IntN(4) == 0 {
			last := j.Last()
			if err := j.Close(); err == nil {
				m.durable = int(last)
			}
		}
		if rng.IntN(3) > 0 {
			disk = disk.PowerCut()
		}
		disk.Restart()
		disk.SetFaults(Faults{Short: 0.3})
		f = Faults{Read: 0.3}
		if rng.IntN(4) == 0 { // what cannot be read now is no damage
			disk.SetFaults(f)
			if j, err := open(wrap(disk), owner, small); err == nil {
				j.release()
			} else if !errors.Is(err, ErrFault) {
				return fmt.Errorf("life %d: open while reading fails: %w", life, err)
			}
			disk.SetFaults(Faults{Short: 0.3})
		}
	}
	return nil
}

// live uses a journal for a while.
func (m *model) live(rng *rand.Rand, j *Journal) error {
	for range rng.IntN(120) {
		switch k := rng.IntN(20); {
		case k < 12:
			r := Record{Number: uint64(len(m.records)) + 1, Kind: byte(1 + rng.IntN(255)), Payload: make([]byte, rng.IntN(1<<rng.IntN(10)))}
			for i := range r.Payload {
				r.Payload[i] = byte(rng.Uint32() >> rng.IntN(25)) // zeros among them
			}
			n, err := j.Append(r.Kind, r.Payload)
			if errors.Is(err, ErrFull) || errors.Is(err, ErrFinished) {
				continue
			}
			if err != nil || n != r.Number {
				return fmt.Errorf("append gave %d, %v", n, err)
			}
			m.records = append(m.records, r)
		case k < 17:
			durable, err := j.Sync()
			if err == nil && int(durable) != len(m.records) {
				return fmt.Errorf("sync gave %d, %d were appended", durable, len(m.records))
			}
			m.durable = max(m.durable, int(durable))
		case k < 18:
			m.tried++
			if err := j.SetState(binary.LittleEndian.AppendUint64(nil, m.tried)); err == nil {
				m.state = m.tried
			}
		case k < 19:
			if err := m.readBack(rng, j); err != nil {
				return err
			}
		case rng.IntN(40) == 0:
			if err := j.Finish(); err == nil {
				m.final, m.durable = true, len(m.records)
			}
		}
	}
	return nil
}

// readBack reads some of the records of a journal that is in use.
func (m *model) readBack(rng *rand.Rand, j *Journal) error {
	first := uint64(1 + rng.IntN(len(m.records)+2))
	next := first
	for r, err := range j.From(first) {
		if err != nil {
			return err
		}
		if r.Number != next || !bytes.Equal(r.Payload, m.records[r.Number-1].Payload) {
			return fmt.Errorf("from %d: record %d, expected %d", first, r.Number, next)
		}
		next++
	}
	if next <= uint64(len(m.records)) {
		return fmt.Errorf("from %d: ended before %d of %d", first, next, len(m.records))
	}
	return nil
}

func bare(m *Memory) Folder { return m }

// TestNothingDurableIsLost runs schedules of appending, failing, dying and power cuts: what was reported durable is there, in order
// and once, and nothing else than what was appended.
func TestNothingDurableIsLost(t *testing.T) {
	seeds := uint64(10_000)
	if testing.Short() {
		seeds = 1000
	}
	for seed := range seeds {
		if err := schedule(seed, bare); err != nil {
			t.Fatalf("seed %d: %v", seed, err)
		}
	}
}

// A folder that breaks one of the rules a journal rests on.
type (
	noSync      struct{ *Memory } // files are not synced
	noNames     struct{ *Memory } // the folder is not synced
	deaf        struct{ *Memory } // an error of a sync is not heard
	noSyncFile  struct{ File }
	deafFile    struct{ File }
	lostWrites  struct{ *Memory }
	lostWriting struct{ File } // an error of a write is not heard
	hasty       struct {       // a file has its name before it is durable
		*Memory
		unsynced File
	}
	behindTail struct { // the newest segment is written on behind its torn tail
		*Memory
		behind bool
	}
	bodyFile struct { // without a header of its own
		File
		d *behindTail
	}
)

func (d noSync) Create(name string) (File, error) {
	f, err := d.Memory.Create(name)
	return noSyncFile{f}, err
}
func (f noSyncFile) Sync() error { return nil }

func (d noNames) Sync() error { return nil }

func (d deaf) Create(name string) (File, error) {
	f, err := d.Memory.Create(name)
	return deafFile{f}, err
}
func (f deafFile) Sync() error { f.File.Sync(); return nil }

func (d lostWrites) Create(name string) (File, error) {
	f, err := d.Memory.Create(name)
	return lostWriting{f}, err
}
func (f lostWriting) Write(b []byte) (int, error) { f.File.Write(b); return len(b), nil }

func (d *hasty) Create(name string) (File, error) {
	f, err := d.Memory.Create(name)
	d.unsynced = f
	return noSyncFile{f}, err
}
func (d *hasty) Rename(from, to string) error {
	if err := errors.Join(d.Memory.Rename(from, to), d.Memory.Sync()); err != nil {
		return err
	}
	return d.unsynced.Sync()
}

func (d *behindTail) Create(name string) (File, error) {
	f, err := d.Memory.Create(name)
	d.behind = false
	return &bodyFile{f, d}, err
}
func (f *bodyFile) Write(b []byte) (int, error) {
	if strings.HasPrefix(string(b), magic) {
		newest := ""
		for n := range f.d.names {
			if _, ok := parseName(n); ok {
				newest = max(newest, n)
			}
		}
		if newest != "" {
			segment, err := f.d.Memory.Open(newest)
			f.File, f.d.behind = segment, true
			return len(b), err
		}
	}
	return f.File.Write(b)
}
func (d *behindTail) Rename(from, to string) error {
	if d.behind {
		return d.Memory.Remove(from)
	}
	return d.Memory.Rename(from, to)
}

// TestPlantedBugs: the schedules find a journal whose disk does not do what it says.
func TestPlantedBugs(t *testing.T) {
	for _, c := range []struct {
		name string
		wrap func(*Memory) Folder
	}{
		{"files are not synced", func(m *Memory) Folder { return noSync{m} }},
		{"names are not synced", func(m *Memory) Folder { return noNames{m} }},
		{"errors of a sync are not heard", func(m *Memory) Folder { return deaf{m} }},
		{"errors of a write are not heard", func(m *Memory) Folder { return lostWrites{m} }},
		{"names come before content", func(m *Memory) Folder { return &hasty{Memory: m} }},
		{"a torn tail is written behind", func(m *Memory) Folder { return &behindTail{Memory: m} }},
	} {
		found := 0
		for seed := range uint64(300) {
			if schedule(seed, c.wrap) != nil {
				found++
			}
		}
		t.Logf("%s: found by %d of 300 schedules", c.name, found)
		if found < 5 {
			t.Errorf("%s: found by %d of 300 schedules", c.name, found)
		}
	}
}
