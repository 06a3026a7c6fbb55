package intake

import (
	"context"
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"sync"
)

// maxFrontEnds is how many may be connected at once.
const maxFrontEnds = 8

// Listen makes a socket in the file system that only its owner can open. A socket that nobody listens on any more is replaced.
func Listen(path string) (net.Listener, error) {
	if c, err := net.Dial("unix", path); err == nil {
		c.Close()
		return nil, fmt.Errorf("%s: another process listens there", path)
	}
	if info, err := os.Lstat(path); err == nil && info.Mode()&os.ModeSocket == 0 {
		return nil, fmt.Errorf("%s: found a file that is no socket, expected none", path)
	}
	// It gets its name when nobody else can open it any more.
	dir, err := os.MkdirTemp(filepath.Dir(path), ".intake")
	if err != nil {
		return nil, err
	}
	defer os.RemoveAll(dir)
	private := filepath.Join(dir, "s")
	l, err := net.ListenUnix("unix", &net.UnixAddr{Name: private, Net: "unix"})
	if err != nil {
		return nil, err
	}
	l.SetUnlinkOnClose(false)
	if err = os.Chmod(private, 0o600); err == nil {
		err = os.Rename(private, path)
	}
	if err != nil {
		return nil, errors.Join(err, l.Close())
	}
	return &listener{l, path}, nil
}

// listener takes its name away when it is closed.
type listener struct {
	*net.UnixListener
	path string
}

func (l *listener) Close() error {
	return errors.Join(os.Remove(l.path), l.UnixListener.Close())
}

// Serve takes the lines of all front ends that connect, until ctx ends. Then it closes the listener and waits for what it started. Warn
// is told why a connection ended when it did not simply end.
func (i *Intake) Serve(ctx context.Context, l net.Listener, warn func(error)) error {
	var wait sync.WaitGroup
	defer wait.Wait()
	stop := context.AfterFunc(ctx, func() { l.Close() })
	defer stop()
	places := make(chan struct{}, maxFrontEnds)
	for {
		c, err := l.Accept()
		if ctx.Err() != nil {
			if err == nil {
				c.Close()
			}
			return nil
		}
		if err != nil {
			return errors.Join(err, l.Close())
		}
		select {
		case places <- struct{}{}:
		default:
			warn(fmt.Errorf("a front end was sent away: %d are connected, the most there may be", maxFrontEnds))
			c.Close()
			continue
		}
		wait.Go(func() {
			defer func() { <-places }()
			stop := context.AfterFunc(ctx, func() { c.Close() })
			defer stop()
			err := i.Run(ctx, c, c)
			c.Close()
			if err != nil && ctx.Err() == nil {
				warn(fmt.Errorf("front end: %w", err))
			}
		})
	}
}
