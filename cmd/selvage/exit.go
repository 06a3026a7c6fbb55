package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"syscall"
)

// The exit codes.
const (
	exitDone        = 0
	exitCheck       = 1   // done, but a check failed
	exitInput       = 2   // the input or the command line is wrong; nothing was written
	exitEnvironment = 3   // disk or network failed
	exitInterrupted = 130 // stopped by an interrupt, as shells count it; nothing was written
)

// outcome is an error that knows its exit code.
type outcome struct {
	code int
	err  error
}

func (o *outcome) Error() string { return o.err.Error() }
func (o *outcome) Unwrap() error { return o.err }

// checkFailed says that the work is done, and its result not what it should be.
func checkFailed(format string, args ...any) error {
	return &outcome{exitCheck, fmt.Errorf(format, args...)}
}

// badInput says that the person has to change something first.
func badInput(format string, args ...any) error {
	return &outcome{exitInput, fmt.Errorf(format, args...)}
}

// unavailable says that disk, network or another program does not let the work begin or go on.
func unavailable(format string, args ...any) error {
	return &outcome{exitEnvironment, fmt.Errorf(format, args...)}
}

// exitCode sorts errors: what the file system refuses is the environment, but a name that leads nowhere is the input, and so is
// everything else that a verb has not marked itself.
func exitCode(err error) int {
	var o *outcome
	var path *fs.PathError
	var link *os.LinkError
	var number syscall.Errno
	switch {
	case err == nil:
		return exitDone
	case errors.As(err, &o):
		return o.code
	case errors.Is(err, context.Canceled):
		return exitInterrupted
	case errors.Is(err, fs.ErrNotExist), errors.Is(err, syscall.ENOTDIR), errors.Is(err, syscall.ENAMETOOLONG):
		return exitInput
	case errors.As(err, &path), errors.As(err, &link), errors.As(err, &number):
		return exitEnvironment
	}
	return exitInput
}

// interruptible does work that cannot stop in the middle and touches nothing outside the program: when ctx ends first, it is
// left behind.
func interruptible[T any](ctx context.Context, work func() (T, error)) (T, error) {
	type result struct {
		value T
		err   error
	}
	done := make(chan result, 1)
	go func() {
		value, err := work()
		done <- result{value, err}
	}()
	select {
	case r := <-done:
		return r.value, r.err
	case <-ctx.Done():
		var none T
		return none, ctx.Err()
	}
}
