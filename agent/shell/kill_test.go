package shell

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"selvage/agent"
	"selvage/agent/intake"
	"selvage/agent/record"
	"selvage/internal/bus"
	disks "selvage/internal/journal"
	"selvage/msgs"
)

// The child of TestKill finds here where its journal is and where the bus.
const childDir, childBus = "SELVAGE_TEST_AGENT_DIR", "SELVAGE_TEST_AGENT_BUS"

// child is a whole agent: a front end on standard input, a journal on the disk, the bus. It lives until it is killed.
func child() error {
	d, err := disks.OS(os.Getenv(childDir))
	if err != nil {
		return err
	}
	c := agent.DefaultConfig("f", "r1", 2)
	c.Journal, c.PublishNS, c.SettleNS, c.RetryNS, c.HeartbeatNS = journal, 1e8, 1e9, 1e9, 1e9
	store, core, err := record.Open(d, c)
	if err != nil {
		return err
	}
	link, err := bus.Dial(os.Getenv(childBus), bus.ClientOptions{Name: "r1"})
	if err != nil {
		return err
	}
	s := New(core, link, Options{Fleet: "f", Robot: "r1", Tick: 10 * time.Millisecond, Store: store, Warn: func(err error) { fmt.Fprintln(os.Stderr, err) }})
	go s.Run(context.Background())
	return intake.New(intake.Options{Robot: "r1", Dim: 2}, s).Run(context.Background(), os.Stdin, os.Stdout)
}

// TestKill kills an agent again and again while its front end tells it keyframes and ties, a few lines ahead of the answers. Whatever was
// answered is on the bus in the end, every number once and always with the same bytes.
func TestKill(t *testing.T) {
	server := serve(t, bus.Options{Listen: "127.0.0.1:0"})
	base := asBase(t, deadline(t), server)
	stored := make(chan []byte, 100_000)
	stop, _, err := base.Replay(deadline(t), bus.TieStream("f", "r1"), func(_ string, _ int64, b []byte) { stored <- b })
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	dir := filepath.Join(t.TempDir(), "journal")
	const keyframes, rounds = 600, 5
	var lines []string
	for k := range keyframes {
		at := fmt.Sprintf(`"x_m":%d,"y_m":0,"qz":0,"qw":1`, k)
		lines = append(lines, fmt.Sprintf(`{"event":"keyframe","id":%d,"stamp_ns":%d,%s}`, k, k*1e9, at),
			fmt.Sprintf(`{"event":"tie","id":"t.%d","kind":"range","from_key":%d,"to_robot":"r2","to_session":1,"to_key":%d,"range_m":5,"s_range_m":0.1}`, k, k, k))
	}
	told := 0 // lines answered
	for round := range rounds {
		until := (round + 1) * len(lines) / rounds
		c := exec.Command(os.Args[0])
		c.Env = append(os.Environ(), childDir+"="+dir, childBus+"="+server.URL())
		var complaints bytes.Buffer
		c.Stderr = &complaints
		in, err := c.StdinPipe()
		if err != nil {
			t.Fatal(err)
		}
		out, err := c.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		stuck := time.AfterFunc(patience, func() { c.Process.Kill() })
		ahead := min(until+20, len(lines))
		go func() { // which the kill ends
			io.WriteString(in, `{"event":"session","session":1}`+"\n"+strings.Join(lines[told:ahead], "\n")+"\n")
		}()
		answers := bufio.NewScanner(out)
		for first := true; told < until && answers.Scan(); first = false {
			var a struct {
				OK    int
				Error string
			}
			if err := json.Unmarshal(answers.Bytes(), &a); err != nil {
				t.Fatal(err)
			}
			if a.OK == 0 && !strings.Contains(a.Error, "came twice") {
				t.Fatalf("round %d: %s", round, a.Error)
			}
			if !first {
				told++
			}
		}
		if told < until {
			t.Fatalf("round %d: %d lines of %d were answered: %v\n%s", round, told, until, answers.Err(), complaints.String())
		}
		if round < rounds-1 {
			c.Process.Kill()
			c.Wait() // it was killed
			stuck.Stop()
			continue
		}
		defer func() {
			c.Process.Kill()
			c.Wait()
			stuck.Stop()
		}()
	}
	ids, numbers, newest := map[string]bool{}, map[uint64]string{}, uint64(0)
	for late := time.After(patience); len(ids) < keyframes || uint64(len(numbers)) < newest; {
		select {
		case b := <-stored:
			m, err := msgs.DecodeTie(b)
			if err != nil {
				t.Fatal(err)
			}
			if was, again := numbers[m.Header.Number]; again {
				t.Errorf("number %d twice: %s and %s", m.Header.Number, was, m.ID)
			}
			ids[m.ID], numbers[m.Header.Number] = true, m.ID
			newest = max(newest, m.Header.Number)
		case <-late:
			t.Fatalf("%d ties of %d came, with %d of %d numbers", len(ids), keyframes, len(numbers), newest)
		}
	}
	if extra := len(numbers) - keyframes; extra > 20*rounds {
		t.Errorf("%d ties were taken twice", extra)
	}
}
