package journal

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"io/fs"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"
)

// The checksum is the one of RFC 3720, appendix B.4 (iSCSI CRC examples), and its usual check value.
func TestChecksum(t *testing.T) {
	ascending := make([]byte, 32)
	for i := range ascending {
		ascending[i] = byte(i)
	}
	for _, c := range []struct {
		b    []byte
		want uint32
	}{
		{make([]byte, 32), 0x8a9136aa}, {bytes.Repeat([]byte{0xff}, 32), 0x62a8ab43}, {ascending, 0x46dd794e},
		{[]byte("123456789"), 0xe3069283},
	} {
		if got := crc32.Checksum(c.b, castagnoli); got != c.want {
			t.Errorf("checksum %#x, want %#x", got, c.want)
		}
	}
}

// fill makes a journal of so many records in a folder, synced by threes.
func fill(t testing.TB, d Folder, records int, l limits) *Journal {
	t.Helper()
	j, err := open(d, owner, l)
	if err != nil {
		t.Fatal(err)
	}
	for n := range records {
		if _, err := j.Append(7, []byte(fmt.Sprintf("record %d", n+1))); err != nil {
			t.Fatal(err)
		}
		if n%3 == 2 || n == records-1 {
			if _, err := j.Sync(); err != nil {
				t.Fatal(err)
			}
		}
	}
	return j
}

// count returns how many records of fill a journal has, and fails when they are not those.
func count(t *testing.T, j *Journal) (n int) {
	t.Helper()
	for r, err := range j.From(1) {
		if err != nil {
			t.Fatal(err)
		}
		n++
		if want := fmt.Sprintf("record %d", n); string(r.Payload) != want || r.Number != uint64(n) || r.Kind != 7 {
			t.Fatalf("record %d of kind %d says %q, want %q", r.Number, r.Kind, r.Payload, want)
		}
	}
	return n
}

// holding returns a folder of one file.
func holding(name string, content []byte) *Memory {
	m := NewMemory(1)
	f := &inode{now: content, disk: bytes.Clone(content), dirty: map[int]bool{}}
	m.names[name], m.disk[name] = f, f
	return m
}

// TestCutAnywhere cuts a journal at every byte: what is left opens with its whole records, unless the file lacks what it had when it got
// its name, or says itself that more was durable.
func TestCutAnywhere(t *testing.T) {
	m := NewMemory(1)
	fill(t, m, 9, usual)
	whole := m.names["00000001.seg"].now
	for size := range len(whole) {
		d := holding("00000001.seg", bytes.Clone(whole[:size]))
		j, err := Open(d, owner)
		var damage *Damage
		switch records := (size - headerSize) / (preamble + 8); {
		case size < headerSize+3*(preamble+8):
			if !errors.As(err, &damage) || damage.File != "00000001.seg" || damage.Offset > int64(size) {
				t.Fatalf("cut at %d: %v", size, err)
			}
		case err != nil:
			t.Fatalf("cut at %d: %v", size, err)
		default:
			if n := count(t, j); n != records {
				t.Fatalf("cut at %d: %d records, want %d", size, n, records)
			}
			if want := int64((size - headerSize) % (preamble + 8)); j.Torn() != want {
				t.Fatalf("cut at %d: %d bytes torn, want %d", size, j.Torn(), want)
			}
			if _, err := j.Append(7, []byte(fmt.Sprintf("record %d", records+1))); err != nil {
				t.Fatal(err)
			}
			if err := j.Close(); err != nil {
				t.Fatal(err)
			}
			if j, err = Open(d, owner); err != nil || count(t, j) != records+1 || j.Torn() != 0 {
				t.Fatalf("cut at %d and written on: %v", size, err)
			}
		}
	}
}

// TestDamageIsFound changes each byte of a closed journal in turn. But for its last mark, where no record is lost, that is damage
// which names the place, and the file stays as it is.
func TestDamageIsFound(t *testing.T) {
	m := NewMemory(1)
	if err := fill(t, m, 9, usual).Close(); err != nil {
		t.Fatal(err)
	}
	whole := m.names["00000001.seg"].now
	mark := len(whole) - preamble - 1
	for at := range whole {
		b := bytes.Clone(whole)
		b[at] ^= 0x10
		d := holding("00000001.seg", bytes.Clone(b))
		j, err := Open(d, owner)
		var damage *Damage
		switch {
		case at >= mark && err == nil && count(t, j) == 9: // it may only be that of a torn tail
		case at == 8 && errors.Is(err, ErrVersion):
		case at < mark && errors.As(err, &damage) && damage.Offset <= max(int64(at), 124) && at-int(damage.Offset) < preamble+8+headerSize:
			if !bytes.Equal(d.names["00000001.seg"].now, b) || len(d.names) != 1 {
				t.Fatalf("byte %d: the folder was changed", at)
			}
			if _, err := d.Lock(); err != nil {
				t.Fatalf("byte %d: %v", at, err)
			}
		default:
			t.Fatalf("byte %d: %v", at, err)
		}
	}
}

// TestMissingSegments takes away each segment but the newest in turn, and puts in one of another journal.
func TestMissingSegments(t *testing.T) {
	m := NewMemory(1)
	if err := fill(t, m, 60, limits{segment: 400, held: 4000}).Close(); err != nil {
		t.Fatal(err)
	}
	if len(m.names) < 4 {
		t.Fatalf("%d segments", len(m.names))
	}
	for n := 1; n < len(m.names); n++ {
		f := m.names[segmentName(uint64(n))]
		delete(m.names, segmentName(uint64(n)))
		var damage *Damage
		if _, err := Open(m, owner); !errors.As(err, &damage) || damage.File != segmentName(uint64(max(n-1, 1))) && n > 1 || !strings.Contains(damage.Why, "are missing") {
			t.Errorf("without segment %d: %v", n, err)
		}
		m.names[segmentName(uint64(n))] = f
	}
	foreign := NewMemory(2)
	other := owner
	other.ID[0]++
	j, err := Open(foreign, other)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := j.Append(1, nil); err != nil {
		t.Fatal(err)
	}
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	renamed := foreign.names["00000001.seg"]
	m.names["00000002.seg"] = renamed
	var damage *Damage
	if _, err := Open(m, owner); !errors.As(err, &damage) || damage.File != "00000002.seg" {
		t.Errorf("with a segment of another journal: %v", err)
	}
	if j, err = Open(foreign, owner); err != nil || j.Owner() != other {
		t.Errorf("an old journal keeps its id: %v", err)
	}
	foreign.Restart()
	if _, err := Open(foreign, Owner{ID: owner.ID, Fleet: "f", Robot: "r2"}); err == nil || !strings.Contains(err.Error(), `belongs to robot "r1" of fleet "f", expected "r2" of "f"`) {
		t.Errorf("opened for another robot: %v", err)
	}
}

// TestFullDisk fills a disk, finds that the journal holds what it can, opens on the full disk, and makes room.
func TestFullDisk(t *testing.T) {
	m := NewMemory(1)
	j := fill(t, m, 30, small)
	m.SetFaults(Faults{Capacity: 2000})
	n := 30
	for {
		_, err := j.Append(7, []byte(fmt.Sprintf("record %d", n+1)))
		if errors.Is(err, ErrFull) {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		n++
		if durable, err := j.Sync(); err != nil && (!errors.Is(err, syscall.ENOSPC) || durable < 30) {
			t.Fatalf("sync gave %d, %v", durable, err)
		}
	}
	var names, bytes int
	for range 50 { // trying again takes no more room
		if _, err := j.Sync(); !errors.Is(err, syscall.ENOSPC) {
			t.Fatalf("sync on a full disk: %v", err)
		}
		before, was := names, bytes
		names, bytes = len(m.names), 0
		for _, f := range m.names {
			bytes += len(f.now)
		}
		if before > 0 && (names != before || bytes != was) {
			t.Fatalf("%d files with %d bytes, before %d with %d", names, bytes, before, was)
		}
	}
	if durable := int(j.Durable()); n-durable < small.held/(preamble+10) || j.Ready() == nil {
		t.Errorf("%d records of %d are durable", durable, n)
	}
	durable := int(j.Durable())
	m.Restart()
	second, err := open(m, owner, small)
	if err != nil {
		t.Fatalf("opening on a full disk: %v", err)
	}
	if got := count(t, second); got < durable {
		t.Errorf("%d records, %d were durable", got, durable)
	}
	m.Restart()
	m.SetFaults(Faults{})
	if durable, err := j.Sync(); err != nil || int(durable) != n {
		t.Errorf("with room again sync gave %d, %v, want %d", durable, err, n)
	}
	if got := count(t, j); got != n {
		t.Errorf("%d records, want %d", got, n)
	}
}

func TestFinish(t *testing.T) {
	m := NewMemory(1)
	j := fill(t, m, 5, usual)
	for range 2 {
		if err := j.Finish(); err != nil {
			t.Fatal(err)
		}
	}
	if _, err := j.Append(1, nil); !errors.Is(err, ErrFinished) {
		t.Errorf("append to a finished journal: %v", err)
	}
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	if _, err := j.Sync(); err != nil { // nothing is left to do
		t.Error(err)
	}
	for what, err := range map[string]error{"close": j.Close(), "finish": j.Finish(), "ready": j.Ready(), "state": j.SetState(nil)} {
		if !errors.Is(err, ErrClosed) {
			t.Errorf("%s after closing: %v", what, err)
		}
	}
	j, err := Open(m.PowerCut(), owner)
	if err != nil || count(t, j) != 5 || !errors.Is(j.Ready(), ErrFinished) {
		t.Errorf("opened again: %v, %v", err, j.Ready())
	}
	empty, err := Open(NewMemory(1), owner)
	if err == nil {
		err = errors.Join(empty.Finish(), empty.Close())
	}
	if err != nil {
		t.Error(err)
	}
}

// A mark of the end that a failed sync has left in the memory of the system is there when the journal is opened again. It counts, but
// Finish does not take it for one on the disk.
func TestFinishAfterFailedSync(t *testing.T) {
	for seed := range uint64(20) {
		m := NewMemory(seed)
		j := fill(t, m, 5, usual)
		m.SetFaults(Faults{Sync: 1})
		if err := j.Finish(); !errors.Is(err, ErrFault) || j.Ready() != nil {
			t.Fatalf("finish: %v, ready: %v", err, j.Ready())
		}
		m.Restart()
		m.SetFaults(Faults{})
		j, err := Open(m, owner)
		if err != nil || count(t, j) != 5 || !errors.Is(j.Ready(), ErrFinished) {
			t.Fatalf("opened: %v, ready: %v", err, j.Ready())
		}
		if err := j.Finish(); err != nil {
			t.Fatal(err)
		}
		if j, err = Open(m.PowerCut(), owner); err != nil || count(t, j) != 5 || !errors.Is(j.Ready(), ErrFinished) {
			t.Fatalf("seed %d: opened after a power cut: %v, ready: %v", seed, err, j.Ready())
		}
	}
}

// opens counts what is opened for reading.
type opens struct {
	*Memory
	n int
}

func (o *opens) Open(name string) (File, error) { o.n++; return o.Memory.Open(name) }

// Reading back from a record takes the segments from there on.
func TestFromReadsWhatItNeeds(t *testing.T) {
	o := &opens{Memory: NewMemory(1)}
	j := fill(t, o, 900, limits{segment: 1000, held: 4000})
	segments := len(j.spans)
	for _, first := range []uint64{1, 450, 899, 900, 901} {
		o.n = 0
		n := first
		for r, err := range j.From(first) {
			if err != nil || r.Number != n {
				t.Fatalf("from %d: record %d, want %d: %v", first, r.Number, n, err)
			}
			n++
		}
		most := segments - int(first)*segments/900 + 2
		if n != 901 || o.n > most {
			t.Errorf("from %d to %d: %d segments read of %d, want at most %d", first, n, o.n, segments, most)
		}
	}
}

// TestManyAtOnce appends and syncs from several goroutines: every one finds its record durable, and few syncs serve all.
func TestManyAtOnce(t *testing.T) {
	m := NewMemory(1)
	j, err := open(m, owner, limits{segment: 4000, held: 1 << 20})
	if err != nil {
		t.Fatal(err)
	}
	var wait sync.WaitGroup
	for g := range byte(8) {
		wait.Go(func() {
			for i := range 200 {
				n, err := j.Append(g+1, []byte{byte(i)})
				if err != nil {
					t.Error(err)
					return
				}
				if durable, err := j.Sync(); err != nil || durable < n || j.Durable() < n {
					t.Errorf("record %d: durable to %d, %v", n, durable, err)
				}
			}
		})
	}
	wait.Wait()
	if j, err = Open(m.PowerCut(), owner); err != nil {
		t.Fatal(err)
	}
	var seen [9]int
	for r, err := range j.From(1) {
		if err != nil || int(r.Payload[0]) != seen[r.Kind] {
			t.Fatalf("record %d: %v", r.Number, err)
		}
		seen[r.Kind]++
	}
	if seen != [9]int{0, 200, 200, 200, 200, 200, 200, 200, 200} {
		t.Errorf("records by goroutine: %v", seen)
	}
}

func TestAppendAllocatesNothing(t *testing.T) {
	j, err := Open(NewMemory(1), owner)
	if err != nil {
		t.Fatal(err)
	}
	payload := make([]byte, 200)
	some := func() {
		for range 100 {
			if _, err := j.Append(1, payload); err != nil {
				t.Fatal(err)
			}
		}
	}
	for range 2 { // both buffers have grown
		for range 100 {
			some()
		}
		if _, err := j.Sync(); err != nil {
			t.Fatal(err)
		}
	}
	if n := testing.AllocsPerRun(50, some); n != 0 {
		t.Errorf("a hundred records take %v allocations", n)
	}
}

func TestRefusals(t *testing.T) {
	if _, err := Open(NewMemory(1), Owner{Fleet: "f", Robot: "r"}); err == nil {
		t.Error("a journal without an id opens")
	}
	if _, err := Open(NewMemory(1), Owner{ID: owner.ID, Robot: strings.Repeat("r", 33)}); err == nil {
		t.Error("a robot with 33 letters passes")
	}
	j, err := Open(NewMemory(1), owner)
	if err != nil {
		t.Fatal(err)
	}
	if n, err := j.Append(1, make([]byte, MaxPayload+1)); err == nil || n != 0 || j.Last() != 0 {
		t.Errorf("a record that is too long: %d, %v", n, err)
	}
	if n, err := j.Append(1, make([]byte, MaxPayload)); err != nil || n != 1 {
		t.Errorf("the longest record: %d, %v", n, err)
	}
}

// TestOS holds a journal on a real disk against what its files should be.
func TestOS(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "deep", "journal")
	d, err := OS(dir)
	if err != nil {
		t.Fatal(err)
	}
	j := fill(t, d, 100, limits{segment: 1000, held: 1 << 20})
	if err := j.SetState([]byte("state")); err != nil {
		t.Fatal(err)
	}
	if _, err := Open(d, owner); !errors.Is(err, ErrInUse) {
		t.Errorf("opened twice: %v", err)
	}
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	err = filepath.WalkDir(filepath.Dir(dir), func(p string, e fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		info, err := e.Info()
		if want := fs.FileMode(0o600); err == nil && (e.IsDir() && info.Mode().Perm() != 0o700 || !e.IsDir() && info.Mode().Perm() != want) {
			t.Errorf("%s has mode %v", p, info.Mode())
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	if j, err = Open(d, owner); err != nil {
		t.Fatal(err)
	}
	defer j.Close()
	if b, err := j.State(); err != nil || string(b) != "state" || count(t, j) != 100 {
		t.Errorf("state %q, %v", b, err)
	}
}

const childDir = "SELVAGE_TEST_JOURNAL" // tells the test binary that it is the child of TestKill

// TestMain is the child when it is told to: it appends and syncs, and writes every durable number to standard output until it is killed.
func TestMain(m *testing.M) {
	dir := os.Getenv(childDir)
	if dir == "" {
		os.Exit(m.Run())
	}
	d, err := OS(dir)
	if err != nil {
		panic(err)
	}
	j, err := open(d, owner, limits{segment: 20_000, held: 1 << 20})
	if err != nil {
		panic(err)
	}
	for {
		for range 20 {
			if _, err := j.Append(7, []byte(fmt.Sprintf("record %d", j.Last()+1))); err != nil {
				panic(err)
			}
		}
		durable, err := j.Sync()
		if err != nil {
			panic(err)
		}
		if err := binary.Write(os.Stdout, binary.LittleEndian, durable); err != nil {
			return
		}
	}
}

// TestKill kills a process that writes a journal, again and again.
func TestKill(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "journal")
	for round := range 8 {
		child := exec.Command(os.Args[0])
		child.Env = append(os.Environ(), childDir+"="+dir)
		child.Stderr = os.Stderr
		out, err := child.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := child.Start(); err != nil {
			t.Fatal(err)
		}
		stuck := time.AfterFunc(20*time.Second, func() { child.Process.Kill() })
		var durable uint64
		for range 3 + 10*round {
			if err := binary.Read(out, binary.LittleEndian, &durable); err != nil {
				t.Fatal(err)
			}
		}
		if err := child.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		for binary.Read(out, binary.LittleEndian, &durable) == nil {
		}
		child.Wait() // it was killed
		stuck.Stop()
		d, err := OS(dir)
		if err != nil {
			t.Fatal(err)
		}
		j, err := Open(d, owner)
		if err != nil {
			t.Fatal(err)
		}
		if n := count(t, j); uint64(n) < durable {
			t.Errorf("round %d: %d records, %d were durable", round, n, durable)
		}
		if err := j.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

// FuzzOpen opens what may be a journal of one segment or two. What opens can be read, written on and opened again.
func FuzzOpen(f *testing.F) {
	m := NewMemory(1)
	j := fill(f, m, 5, limits{segment: 200, held: 4000})
	one, two := bytes.Clone(m.names["00000001.seg"].now), bytes.Clone(m.names["00000002.seg"].now)
	f.Add(one, []byte{})
	f.Add(one, two)
	if err := j.Close(); err != nil {
		f.Fatal(err)
	}
	for _, second := range [][]byte{m.names["00000002.seg"].now, two[:headerSize+40], two[:headerSize]} {
		f.Add(one, second)
		f.Add(second, []byte{})
	}
	f.Add(one[:headerSize+90], two)
	f.Fuzz(func(t *testing.T, b, c []byte) {
		d, segments := holding("00000001.seg", bytes.Clone(b)), 1
		if len(c) > 0 {
			d.names["00000002.seg"] = holding("00000002.seg", bytes.Clone(c)).names["00000002.seg"]
			d.disk["00000002.seg"] = d.names["00000002.seg"]
			segments = 2
		}
		j, err := Open(d, owner)
		if err != nil {
			if !bytes.Equal(d.names["00000001.seg"].now, b) || len(d.names) != segments {
				t.Fatal("refused, and changed")
			}
			return
		}
		var before []Record
		for r, err := range j.From(1) {
			if err != nil {
				t.Fatal(err)
			}
			before = append(before, Record{r.Number, r.Kind, bytes.Clone(r.Payload)})
		}
		extra, err := j.Append(9, []byte("more"))
		if errors.Is(err, ErrFinished) {
			return
		}
		if err != nil || extra != uint64(len(before))+1 {
			t.Fatalf("append behind %d: %d, %v", len(before), extra, err)
		}
		if _, err := j.Sync(); err != nil {
			t.Fatal(err)
		}
		if j, err = Open(d.PowerCut(), owner); err != nil {
			t.Fatal(err)
		}
		n := 0
		for r, err := range j.From(1) {
			if err != nil {
				t.Fatal(err)
			}
			if n < len(before) && (r.Number != before[n].Number || r.Kind != before[n].Kind || !bytes.Equal(r.Payload, before[n].Payload)) {
				t.Fatalf("record %d is not what it was", n+1)
			}
			n++
		}
		if n != len(before)+1 {
			t.Fatalf("%d records, want %d", n, len(before)+1)
		}
	})
}
