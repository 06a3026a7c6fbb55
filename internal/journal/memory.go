package journal

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"maps"
	"math/rand/v2"
	"slices"
	"sync"
	"syscall"
)

// Faults say how often a [Memory] fails: each is the share of operations of its kind that do.
type Faults struct {
	Write    float64 // some of the bytes are written, then an error
	Sync     float64 // of a file: some sectors reach the disk, the others never will, and later syncs do not tell
	Names    float64 // sync of the folder: the oldest changes of names reach the disk, the others never will
	Name     float64 // creating, renaming, removing
	Read     float64 // reading, opening and listing
	Short    float64 // a read returns less than was asked for, without an error
	Capacity int     // bytes there is room for, 0 for no bound; then writes fail with ENOSPC
}

var (
	// ErrFault is the cause of what a [Memory] does wrong on purpose.
	ErrFault = errors.New("fault on purpose")
	// ErrDead means that the process that did this is gone.
	ErrDead = errors.New("the process is gone")
)

// sector is what the disk of a [Memory] writes at once, bytes: fewer than a real one, so that few records cover many. Of the last
// thing written a crash may leave a part even so.
const sector = 128

// Memory is a folder in memory that fails, and loses power, by a seed. A file has two contents: what processes see, and what is on
// the disk. Of the sectors written since the last sync a power cut keeps any; of the names changed since the last sync of the folder
// it keeps the oldest.
type Memory struct {
	mu      sync.Mutex
	rng     *rand.Rand
	faults  Faults
	names   map[string]*inode // as processes see them
	disk    map[string]*inode
	changes []change // of names, in order, that are not on the disk
	locked  bool
	process int // that runs now
	left    int // operations until it dies, when mortal
	mortal  bool
}

// inode is a file.
type inode struct {
	now, disk []byte
	dirty     map[int]bool // sectors
	grown     bool
}

// change puts a file under a name, or none, and takes it from another name.
type change struct {
	name, from string
	file       *inode
}

func (c *change) apply(names map[string]*inode) {
	if c.from != "" {
		delete(names, c.from)
	}
	if c.file == nil {
		delete(names, c.name)
	} else {
		names[c.name] = c.file
	}
}

// NewMemory returns an empty folder without faults.
func NewMemory(seed uint64) *Memory {
	return &Memory{rng: rand.New(rand.NewPCG(seed, sector)), names: map[string]*inode{}, disk: map[string]*inode{}}
}

// SetFaults says how often it fails from now on.
func (m *Memory) SetFaults(f Faults) {
	m.mu.Lock()
	defer m.mu.Unlock()
	m.faults = f
}

// KillAfter lets the process die at the n-th operation from now that changes anything, in the middle of it.
func (m *Memory) KillAfter(n int) {
	m.mu.Lock()
	defer m.mu.Unlock()
	m.left, m.mortal = n, true
}

// Restart lets the process die, if it lives, and begins another: what it wrote is there, its lock is gone.
func (m *Memory) Restart() {
	m.mu.Lock()
	defer m.mu.Unlock()
	m.process++
	m.locked, m.mortal = false, false
}

// PowerCut returns the folder as it would be found if power failed now. The folder itself goes on.
func (m *Memory) PowerCut() *Memory {
	m.mu.Lock()
	defer m.mu.Unlock()
	cut := NewMemory(m.rng.Uint64())
	names := maps.Clone(m.disk)
	for i := range m.rng.IntN(len(m.changes) + 1) {
		m.changes[i].apply(names)
	}
	for _, name := range slices.Sorted(maps.Keys(names)) {
		content := names[name].afterCut(m.rng)
		file := &inode{now: content, disk: bytes.Clone(content), dirty: map[int]bool{}}
		cut.names[name], cut.disk[name] = file, file
	}
	return cut
}

// afterCut returns what is left of a file.
func (f *inode) afterCut(rng *rand.Rand) []byte {
	size := len(f.disk)
	if f.grown && len(f.now) > size {
		switch rng.IntN(3) {
		case 0:
			size = len(f.now)
		case 1:
			size += rng.IntN(len(f.now) - size + 1)
		}
	}
	left := make([]byte, size)
	copy(left, f.disk)
	for _, s := range slices.Sorted(maps.Keys(f.dirty)) {
		from, to := min(s*sector, size), min((s+1)*sector, size, len(f.now))
		switch rng.IntN(3) {
		case 0:
			copy(left[from:to], f.now[from:to])
		case 1:
			copy(left[from:to], f.now[from:from+rng.IntN(to-from+1)])
		}
	}
	return left
}

// sync puts sectors onto the disk: all, or by chance some.
func (f *inode) sync(put func() bool) {
	if f.grown && len(f.now) > len(f.disk) && put() {
		f.disk = append(f.disk, make([]byte, len(f.now)-len(f.disk))...)
	}
	for _, s := range slices.Sorted(maps.Keys(f.dirty)) {
		if from, to := s*sector, min((s+1)*sector, len(f.now), len(f.disk)); from < to && put() {
			copy(f.disk[from:to], f.now[from:to])
		}
	}
	f.grown = false
	clear(f.dirty)
}

func (m *Memory) coin() bool { return m.rng.IntN(2) == 0 }

func (m *Memory) fails(share float64) bool { return share > 0 && m.rng.Float64() < share }

// act begins an operation of a process that changes something: it may be its last.
func (m *Memory) act(process int) (last bool, err error) {
	if process != m.process || m.mortal && m.left <= 0 {
		return false, ErrDead
	}
	m.left--
	return m.mortal && m.left <= 0, nil
}

// change changes a name.
func (m *Memory) change(op string, c change) error {
	last, err := m.act(m.process)
	if err == nil && m.fails(m.faults.Name) {
		err = ErrFault
	}
	if err == nil && last && m.coin() {
		err = ErrDead
	}
	if err == nil {
		c.apply(m.names)
		m.changes = append(m.changes, c)
		if last {
			err = ErrDead
		}
	}
	if err != nil {
		return &fs.PathError{Op: op, Path: c.name, Err: err}
	}
	return nil
}

// Lock is that of [Folder].
func (m *Memory) Lock() (func() error, error) {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.locked {
		return nil, ErrInUse
	}
	m.locked = true
	process := m.process
	return func() error {
		m.mu.Lock()
		defer m.mu.Unlock()
		if process == m.process {
			m.locked = false
		}
		return nil
	}, nil
}

// List is that of [Folder].
func (m *Memory) List() ([]string, error) {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.fails(m.faults.Read) {
		return nil, ErrFault
	}
	return slices.Sorted(maps.Keys(m.names)), nil
}

// Create is that of [Folder].
func (m *Memory) Create(name string) (File, error) {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.names[name] != nil {
		return nil, &fs.PathError{Op: "create", Path: name, Err: fs.ErrExist}
	}
	f := &inode{dirty: map[int]bool{}}
	if err := m.change("create", change{name: name, file: f}); err != nil {
		return nil, err
	}
	return &handle{m, f, name, m.process}, nil
}

// Open is that of [Folder].
func (m *Memory) Open(name string) (File, error) {
	m.mu.Lock()
	defer m.mu.Unlock()
	f := m.names[name]
	if f == nil {
		return nil, &fs.PathError{Op: "open", Path: name, Err: fs.ErrNotExist}
	}
	if m.fails(m.faults.Read) {
		return nil, &fs.PathError{Op: "open", Path: name, Err: ErrFault}
	}
	return &handle{m, f, name, m.process}, nil
}

// Rename is that of [Folder].
func (m *Memory) Rename(from, to string) error {
	m.mu.Lock()
	defer m.mu.Unlock()
	f := m.names[from]
	if f == nil {
		return &fs.PathError{Op: "rename", Path: from, Err: fs.ErrNotExist}
	}
	return m.change("rename", change{name: to, from: from, file: f})
}

// Remove is that of [Folder].
func (m *Memory) Remove(name string) error {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.names[name] == nil {
		return &fs.PathError{Op: "remove", Path: name, Err: fs.ErrNotExist}
	}
	return m.change("remove", change{name: name})
}

// Sync is that of [Folder].
func (m *Memory) Sync() error {
	m.mu.Lock()
	defer m.mu.Unlock()
	last, err := m.act(m.process)
	if err != nil {
		return err
	}
	n := len(m.changes)
	if last || m.fails(m.faults.Names) {
		n, err = m.rng.IntN(n+1), ErrFault
	}
	for i := range n {
		m.changes[i].apply(m.disk)
	}
	if last { // what is not on the disk may get there still
		m.changes = m.changes[n:]
		return ErrDead
	}
	m.changes = nil
	return err
}

// handle is an open file.
type handle struct {
	m       *Memory
	f       *inode
	name    string
	process int
}

func (h *handle) fail(op string, err error) error {
	return &fs.PathError{Op: op, Path: h.name, Err: err}
}

func (h *handle) Write(b []byte) (int, error) {
	m, f := h.m, h.f
	m.mu.Lock()
	defer m.mu.Unlock()
	last, err := m.act(h.process)
	if err != nil {
		return 0, h.fail("write", err)
	}
	n := len(b)
	if m.faults.Capacity > 0 {
		room := m.faults.Capacity
		for _, other := range m.names {
			room -= len(other.now)
		}
		if n > room {
			n, err = max(room, 0), syscall.ENOSPC
		}
	}
	switch {
	case last:
		n, err = m.rng.IntN(n+1), ErrDead
	case m.fails(m.faults.Write):
		n, err = m.rng.IntN(n+1), ErrFault
	}
	if n > 0 {
		for s := len(f.now) / sector; s <= (len(f.now)+n-1)/sector; s++ {
			f.dirty[s] = true
		}
		f.now = append(f.now, b[:n]...)
		f.grown = true
	}
	if err != nil {
		return n, h.fail("write", err)
	}
	return n, nil
}

func (h *handle) Sync() error {
	m := h.m
	m.mu.Lock()
	defer m.mu.Unlock()
	last, err := m.act(h.process)
	switch {
	case err != nil:
		return h.fail("sync", err)
	case last && m.coin(): // nothing happened yet
		return h.fail("sync", ErrDead)
	case !last && m.fails(m.faults.Sync):
		h.f.sync(m.coin)
		return h.fail("sync", ErrFault)
	}
	h.f.sync(func() bool { return true })
	if last {
		return h.fail("sync", ErrDead)
	}
	return nil
}

func (h *handle) ReadAt(b []byte, at int64) (int, error) {
	m := h.m
	m.mu.Lock()
	defer m.mu.Unlock()
	switch {
	case at < 0:
		return 0, h.fail("read", fmt.Errorf("offset %d", at))
	case m.fails(m.faults.Read):
		return 0, h.fail("read", ErrFault)
	case at >= int64(len(h.f.now)):
		return 0, io.EOF
	}
	n := copy(b, h.f.now[at:])
	if n < len(b) {
		return n, io.EOF
	}
	if n > 1 && m.fails(m.faults.Short) {
		n = 1 + m.rng.IntN(n-1)
	}
	return n, nil
}

func (h *handle) Size() (int64, error) {
	h.m.mu.Lock()
	defer h.m.mu.Unlock()
	return int64(len(h.f.now)), nil
}

func (h *handle) Close() error { return nil }
