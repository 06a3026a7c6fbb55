package main

import (
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"strings"

	"github.com/mattn/go-isatty"
	"github.com/rs/zerolog"

	"selvage/internal/report"
)

// console is where a verb meets the person or the program that called it: results on out, everything else on err.
type console struct {
	out, err io.Writer
	errTTY   bool // err is a terminal: progress may move
	bold     bool // out is a terminal that may be coloured
	log      zerolog.Logger
}

func newConsole() *console {
	outTTY, errTTY := isatty.IsTerminal(os.Stdout.Fd()), isatty.IsTerminal(os.Stderr.Fd())
	if os.Getenv("TERM") == "dumb" {
		outTTY, errTTY = false, false
	}
	return &console{out: os.Stdout, err: os.Stderr, errTTY: errTTY, bold: outTTY && os.Getenv("NO_COLOR") == "", log: zerolog.Nop()}
}

// newLogger writes for people on a terminal, one JSON object a line otherwise.
func newLogger(level string) zerolog.Logger {
	at, err := zerolog.ParseLevel(level)
	if err != nil {
		panic(err) // kong has checked it
	}
	var w io.Writer = os.Stderr
	if isatty.IsTerminal(os.Stderr.Fd()) {
		w = zerolog.ConsoleWriter{Out: os.Stderr, NoColor: os.Getenv("NO_COLOR") != "", TimeFormat: "15:04:05"}
	}
	return zerolog.New(w).Level(at).With().Timestamp().Logger()
}

// fail tells what went wrong, if anything did, and returns the exit code.
func (c *console) fail(err error) int {
	code := exitCode(err)
	switch code {
	case exitDone:
	case exitInterrupted:
		fmt.Fprintln(c.err, "selvage: interrupted; nothing was written")
	default:
		fmt.Fprintln(c.err, "selvage: "+plain(err))
	}
	return code
}

// plain is the text of an error without the names of packages and system calls in front.
func plain(err error) string {
	text := err.Error()
	var path *fs.PathError
	if errors.As(err, &path) {
		text = strings.ReplaceAll(text, path.Error(), path.Path+": "+path.Err.Error())
	}
	for _, room := range []string{"survey: ", "posegraph: ", "sparse: ", "split: "} {
		text = strings.ReplaceAll(text, room, "")
	}
	return text
}

// finding prints the sentence that stands above everything else.
func (c *console) finding(format string, args ...any) {
	text := fmt.Sprintf(format, args...)
	if c.bold {
		text = "\x1b[1m" + text + "\x1b[0m"
	}
	fmt.Fprintln(c.out, text)
}

// table prints a table, as wide as it comes.
func (c *console) table(t report.Table) error {
	if err := t.Text(c.out, 0); err != nil {
		return fmt.Errorf("table: %w", err)
	}
	return nil
}

// warn logs what was left aside when a survey was read.
func (c *console) warn(warnings []string) {
	for _, w := range warnings {
		c.log.Warn().Msg(w)
	}
}
