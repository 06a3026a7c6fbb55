package enrol

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"syscall"
)

// build makes a folder whole or not at all: fill writes into a hidden one beside it, which then gets the name.
func build(path string, fill func(folder string) error) (err error) {
	if err := absent(path); err != nil {
		return err
	}
	folder, err := os.MkdirTemp(filepath.Dir(path), ".enrol-")
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.RemoveAll(folder))
		}
	}()
	if err := fill(folder); err != nil {
		return err
	}
	if err := syncTree(folder); err != nil {
		return err
	}
	if err := absent(path); err != nil {
		return err
	}
	if err := os.Rename(folder, path); err != nil {
		return err
	}
	return syncFolder(filepath.Dir(path))
}

// absent is an error when there is anything at a path.
func absent(path string) error {
	switch _, err := os.Lstat(path); {
	case err == nil:
		return fmt.Errorf("%s: %w", path, errExists)
	case !errors.Is(err, fs.ErrNotExist):
		return err
	}
	return nil
}

var errExists = errors.New("is there already, and nothing is written over")

// put writes a new file that only its owner may read.
func put(path string, text []byte) error {
	f, err := os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o600)
	if err != nil {
		return err
	}
	_, err = f.Write(text)
	return errors.Join(err, f.Chmod(0o600), f.Sync(), f.Close())
}

// replace puts a file in the place of another in one step.
func replace(path string, text []byte) error {
	f, err := os.CreateTemp(filepath.Dir(path), ".enrol-")
	if err != nil {
		return err
	}
	_, err = f.Write(text)
	if err = errors.Join(err, f.Sync(), f.Close()); err == nil {
		err = os.Rename(f.Name(), path)
	}
	if err != nil {
		return errors.Join(err, os.Remove(f.Name()))
	}
	syncFolder(filepath.Dir(path)) // it is in its place; a crash at this moment would bring back the one before
	return nil
}

func makeFolder(path string) error {
	if err := os.Mkdir(path, 0o700); err != nil {
		return err
	}
	return os.Chmod(path, 0o700) // whatever the mask says
}

// syncTree brings the names in a folder and in those below it to the disk; files are there already.
func syncTree(folder string) error {
	return filepath.WalkDir(folder, func(path string, d fs.DirEntry, err error) error {
		if err != nil || !d.IsDir() {
			return err
		}
		return syncFolder(path)
	})
}

func syncFolder(path string) error {
	d, err := os.Open(path)
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}

// lock keeps other enrolments off a folder until unlock.
func lock(folder string) (unlock func() error, err error) {
	d, err := os.Open(folder)
	if err != nil {
		return nil, err
	}
	if err := syscall.Flock(int(d.Fd()), syscall.LOCK_EX|syscall.LOCK_NB); err != nil {
		d.Close()
		if errors.Is(err, syscall.EWOULDBLOCK) {
			err = errors.New("another enrolment is at work there")
		}
		return nil, fmt.Errorf("%s: %w", folder, err)
	}
	return d.Close, nil
}
