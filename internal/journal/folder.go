package journal

import (
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"syscall"
)

// ErrInUse means that another process has the journal open.
var ErrInUse = errors.New("another process uses this journal")

// Folder is what a journal needs of a disk: a folder of files. [OS] is a real one, [Memory] one that fails on demand.
type Folder interface {
	Lock() (release func() error, err error) // keeps others away; ErrInUse when they keep us away
	List() ([]string, error)
	Create(name string) (File, error) // for writing; the name must be free
	Open(name string) (File, error)   // for reading; fs.ErrNotExist when there is none
	Rename(from, to string) error     // over a file that is there
	Remove(name string) error
	Sync() error // makes the names durable
}

// File is one file. Writes go to its end.
type File interface {
	io.Writer
	io.ReaderAt
	io.Closer
	Size() (int64, error)
	Sync() error
}

// OS returns a folder of the operating system, made with mode 0700 when it is missing. Its files are for their owner only.
func OS(dir string) (Folder, error) {
	if _, err := os.Stat(dir); errors.Is(err, os.ErrNotExist) {
		if err := os.MkdirAll(dir, 0o700); err != nil {
			return nil, err
		}
		if err := osFolder(filepath.Dir(dir)).Sync(); err != nil {
			return nil, err
		}
	}
	return osFolder(dir), nil
}

type osFolder string

func (d osFolder) path(name string) string { return filepath.Join(string(d), name) }

func (d osFolder) Lock() (func() error, error) {
	f, err := os.OpenFile(d.path("lock"), os.O_CREATE|os.O_RDWR, 0o600)
	if err != nil {
		return nil, err
	}
	if err := syscall.Flock(int(f.Fd()), syscall.LOCK_EX|syscall.LOCK_NB); err != nil {
		f.Close()
		if errors.Is(err, syscall.EWOULDBLOCK) {
			err = ErrInUse
		}
		return nil, fmt.Errorf("%s: %w", string(d), err)
	}
	return f.Close, nil
}

func (d osFolder) List() ([]string, error) {
	entries, err := os.ReadDir(string(d))
	var names []string
	for _, e := range entries {
		names = append(names, e.Name())
	}
	return names, err
}

func (d osFolder) Create(name string) (File, error) {
	return d.open(name, os.O_CREATE|os.O_EXCL|os.O_WRONLY)
}

func (d osFolder) Open(name string) (File, error) { return d.open(name, os.O_RDONLY) }

func (d osFolder) open(name string, flag int) (File, error) {
	f, err := os.OpenFile(d.path(name), flag, 0o600)
	if err != nil {
		return nil, err
	}
	return osFile{f}, nil
}

func (d osFolder) Rename(from, to string) error { return os.Rename(d.path(from), d.path(to)) }
func (d osFolder) Remove(name string) error     { return os.Remove(d.path(name)) }

func (d osFolder) Sync() error {
	f, err := os.Open(string(d))
	if err != nil {
		return err
	}
	return errors.Join(f.Sync(), f.Close())
}

type osFile struct{ *os.File }

func (f osFile) Size() (int64, error) {
	info, err := f.Stat()
	if err != nil {
		return 0, err
	}
	return info.Size(), nil
}

// readAll reads a whole file into buf, which may be too small. What cannot be read is an error: it is not the end of the file.
func readAll(d Folder, name string, buf []byte) (b []byte, err error) {
	f, err := d.Open(name)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	size, err := f.Size()
	if err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	if size > maxFile {
		return nil, fmt.Errorf("%s: %d bytes, expected at most %d", name, size, maxFile)
	}
	if int64(cap(buf)) < size {
		buf = make([]byte, size)
	}
	buf = buf[:size]
	if err := readFull(f, buf); err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	return buf, nil
}

// readFull fills b from the start of a file.
func readFull(f File, b []byte) error {
	for at := 0; at < len(b); {
		n, err := f.ReadAt(b[at:], int64(at))
		if at += n; at < len(b) && (err != nil || n == 0) {
			if err == nil || err == io.EOF {
				err = io.ErrUnexpectedEOF
			}
			return err
		}
	}
	return nil
}

// temporary is the name of a file that has not got its own yet. There is one at a time.
const temporary = "new"

// publish makes a file under a name that it gets when its content is durable. The file that it returns can be written on.
func publish(d Folder, name string, content ...[]byte) (File, error) {
	if err := d.Remove(temporary); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return nil, err
	}
	f, err := d.Create(temporary)
	if err != nil {
		return nil, err
	}
	for _, b := range content {
		if err == nil {
			err = write(f, b)
		}
	}
	if err == nil {
		err = f.Sync()
	}
	if err == nil {
		err = d.Rename(temporary, name)
	}
	if err != nil { // on a full disk others need the room; what cannot be removed now is removed by the next
		d.Remove(temporary)
	} else {
		err = d.Sync()
	}
	if err != nil {
		return nil, errors.Join(fmt.Errorf("%s: %w", name, err), f.Close())
	}
	return f, nil
}

func write(f File, b []byte) error {
	n, err := f.Write(b)
	if err == nil && n < len(b) {
		err = io.ErrShortWrite
	}
	return err
}
