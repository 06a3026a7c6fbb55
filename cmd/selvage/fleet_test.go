package main

import (
	"bufio"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"net"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"
)

// daemon is a verb that runs until it is stopped. Its log is kept, one object a line.
type daemon struct {
	t    *testing.T
	name string
	cmd  *exec.Cmd
	in   io.WriteCloser
	out  *bufio.Scanner

	mu    sync.Mutex
	moved chan struct{} // closed when there is more of the log, or no more will come
	log   []map[string]any
	text  strings.Builder
	ended bool
	read  chan struct{}
}

func begin(t *testing.T, dir string, args ...string) *daemon {
	t.Helper()
	d := &daemon{t: t, name: strings.Join(args, " "), cmd: prepare(dir, args...), moved: make(chan struct{}), read: make(chan struct{})}
	var err error
	if d.in, err = d.cmd.StdinPipe(); err != nil {
		t.Fatal(err)
	}
	out, err := d.cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	d.out = bufio.NewScanner(out)
	log, err := d.cmd.StderrPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := d.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { d.cmd.Process.Kill(); d.cmd.Wait() })
	go func() {
		defer close(d.read)
		lines := bufio.NewScanner(log)
		for lines.Scan() {
			var line map[string]any
			json.Unmarshal(lines.Bytes(), &line)
			d.add(line, lines.Text(), false)
		}
		d.add(nil, "", true)
	}()
	return d
}

func (d *daemon) add(line map[string]any, text string, ended bool) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.log, d.ended = append(d.log, line), ended
	d.text.WriteString(text + "\n")
	close(d.moved)
	d.moved = make(chan struct{})
}

// says waits for a line of the log from number from on, and returns it and the number behind it.
func (d *daemon) says(from int, what string, is func(line map[string]any) bool) (line map[string]any, next int) {
	d.t.Helper()
	stuck := time.After(12 * time.Second)
	for {
		d.mu.Lock()
		log, moved, ended := d.log, d.moved, d.ended
		d.mu.Unlock()
		if i := slices.IndexFunc(log[from:], is); i >= 0 {
			return log[from+i], from + i + 1
		}
		if !ended {
			select {
			case <-moved:
				continue
			case <-stuck:
			}
		}
		d.mu.Lock()
		defer d.mu.Unlock()
		d.t.Fatalf("selvage %s does not say %s:\n%s", d.name, what, d.text.String())
	}
}

func message(text string) func(map[string]any) bool {
	return func(line map[string]any) bool { return line["message"] == text }
}

// tell gives an agent lines and demands that it takes each.
func (d *daemon) tell(lines ...string) {
	d.t.Helper()
	go io.WriteString(d.in, strings.Join(lines, "\n")+"\n") // the pipe is short
	for i := range lines {
		if !d.out.Scan() || !strings.HasPrefix(d.out.Text(), fmt.Sprintf(`{"ok":%d`, i+1)) {
			d.t.Fatalf("selvage %s: answer to %s: %q", d.name, lines[i], d.out.Text())
		}
	}
}

// stop sends SIGTERM, twice as timeout does, and demands a clean end within five seconds.
func (d *daemon) stop() {
	d.t.Helper()
	began := time.Now()
	for range 2 {
		if err := d.cmd.Process.Signal(syscall.SIGTERM); err != nil {
			d.t.Fatal(err)
		}
	}
	stuck := time.AfterFunc(10*time.Second, func() { d.cmd.Process.Kill() })
	defer stuck.Stop()
	<-d.read
	err := d.cmd.Wait()
	if took := time.Since(began); err != nil || took > 5*time.Second {
		d.t.Errorf("selvage %s ended with %v after %v:\n%s", d.name, err, took, d.text.String())
	}
}

// replaceIn edits a file of an enrolment as a person would.
func replaceIn(t *testing.T, path string, pairs ...string) {
	t.Helper()
	text := read(t, path)
	for i := 0; i < len(pairs); i += 2 {
		if !strings.Contains(text, pairs[i]) {
			t.Fatalf("%s lacks %q:\n%s", path, pairs[i], text)
		}
		text = strings.Replace(text, pairs[i], pairs[i+1], 1)
	}
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
}

// freePort is one that nobody listens on now.
func freePort(t *testing.T) string {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	_, port, _ := net.SplitHostPort(l.Addr().String())
	return port
}

// straight is what the front end of a robot says that drives six steps of ten metres along x.
func straight() []string {
	lines := []string{`{"event":"session"}`}
	for k := range 7 {
		lines = append(lines, fmt.Sprintf(`{"event":"keyframe","id":%d,"stamp_ns":%d,"x_m":%d,"y_m":0,"qz":0,"qw":1}`, k, k*1e9, 10*k))
		if k > 0 {
			lines = append(lines, fmt.Sprintf(`{"event":"relative","kind":"odometry","from":%d,"to":%d,"x_m":10,"y_m":0,"qz":0,"qw":1,"sx_m":0.02,"sy_m":0.02,"srz_rad":0.005}`, k-1, k))
		}
	}
	return lines
}

// A fleet of two as it is enrolled: the base and two robots, each a process with its own folder, over TLS and signed. Both robots drive
// side by side, two metres apart, and r1 sees r2 at five places, as many as two robots need with nobody to confirm them.
func TestFleet(t *testing.T) {
	dir := t.TempDir()
	port, figures := freePort(t), "127.0.0.1:"+freePort(t)
	selvage(t, dir, "enrol", "f", "--robots", "r1,r2", "--host", "127.0.0.1", "--port", port, "--dimension", "2").want(t, 0)
	at := func(parts ...string) string { return filepath.Join(append([]string{dir, "f-keys"}, parts...)...) }
	replaceIn(t, at("base", "base.yaml"), "/var/lib/selvage/store", "store", "page: 127.0.0.1:8080\n", "", "127.0.0.1:9102", figures, "pace: 1 ", "pace: 0.02 ")
	for _, r := range []string{"r1", "r2"} {
		replaceIn(t, at("robots", r, "agent.yaml"), "/var/lib/selvage/journal", "journal", "/run/selvage/intake.sock", "stdin",
			"/run/selvage/map.sock", "map.sock", "pace: 1 ", "pace: 0.02 ", "metrics: 127.0.0.1:9101\n", "")
	}
	base := begin(t, dir, "coordinate", at("base", "base.yaml"))
	base.says(0, "that it leads", func(line map[string]any) bool {
		return line["message"] == "leads" && line["term"] == 1.0 && line["fleet"] == "f"
	})
	r1, r2 := begin(t, dir, "agent", at("robots", "r1", "agent.yaml")), begin(t, dir, "agent", at("robots", "r2", "agent.yaml"))
	r2.tell(straight()...)
	lines := straight()
	for _, k := range []int{0, 1, 3, 5, 6} {
		lines = append(lines, fmt.Sprintf(`{"event":"tie","kind":"pose","from_key":%d,"to_robot":"r2","to_session":1,"to_key":%d,"x_m":0,"y_m":2,"qz":0,"qw":1,"sx_m":0.02,"sy_m":0.02,"srz_rad":0.01}`, k, k))
	}
	r1.tell(lines...)
	joined := func(line map[string]any) bool {
		return line["message"] == "map changed" && line["joined"] == true
	}
	var datum string
	for i, r := range []*daemon{r1, r2} {
		line, _ := r.says(0, "that it is joined", joined)
		if at := line["datum"]; i == 0 {
			datum, _ = at.(string)
		} else if at != datum || datum == "" {
			t.Errorf("r1 stands in datum %q, r2 in %q", datum, at)
		}
	}

	// status says the same, and health that it does.
	config := at("base", "base.yaml")
	var f fleetStatus
	for stuck := time.Now().Add(5 * time.Second); ; { // the agents tell what they have applied with their next heartbeat
		a := selvage(t, dir, "status", config, "--json")
		a.want(t, 0)
		if err := json.Unmarshal([]byte(a.stdout), &f); err != nil {
			t.Fatal(err)
		}
		if f.Rests || time.Now().After(stuck) {
			break
		}
	}
	if !f.Rests || !f.Leads || f.Fleet != "f" || f.Holder != "base-1" || f.Term != 1 || f.Ties != (tieCounts{Held: 5}) || len(f.Doubts) > 0 || len(f.Robots) != 2 {
		t.Fatalf("status %+v", f)
	}
	for i, r := range f.Robots {
		if r.Robot != fmt.Sprintf("r%d", i+1) || len(r.Sessions) != 1 || r.Sessions[0] != (sessionStatus{1, true, datum}) ||
			r.Applied != f.Epoch || r.Waiting != 0 || r.NewsS == nil || *r.NewsS > 10 {
			t.Errorf("status of %s: %+v", r.Robot, r)
		}
	}
	if a := selvage(t, dir, "status", config); a.code != 0 || !strings.HasPrefix(a.stdout, "Fleet f, epoch "+f.Epoch+": 2 of 2 sessions are joined; of 5 ties 5 are held, 0 open and 0 refused; it is at rest.\n") || !strings.Contains(a.stdout, datum) {
		t.Errorf("status says %s%s", a.stdout, a.err)
	}
	health, err := http.Get("http://" + figures + "/healthz")
	if err != nil {
		t.Fatal(err)
	}
	defer health.Body.Close()
	if word, err := io.ReadAll(health.Body); err != nil || health.StatusCode != 200 || string(word) != "leads\n" && string(word) != "solves\n" {
		t.Errorf("health: %s, %q, %v", health.Status, word, err)
	}

	// The software on r2 learns the place of its session: datum_from_session of r2 is that of r1 and two metres to the left.
	var stands [2]placeLine
	for i := range stands {
		path := at("robots", fmt.Sprintf("r%d", i+1), "map.sock")
		if info, err := os.Stat(path); err != nil || info.Mode().Perm() != 0o600 {
			t.Errorf("%s: %v, %v", path, info, err)
		}
		c, err := net.Dial("unix", path)
		if err != nil {
			t.Fatal(err)
		}
		defer c.Close()
		c.SetDeadline(time.Now().Add(5 * time.Second))
		if err := json.NewDecoder(c).Decode(&stands[i]); err != nil {
			t.Fatal(err)
		}
		if p := &stands[i]; !p.Joined || p.Datum != datum || p.Session != 1 || p.Keyframe != 6 || p.DatumFromSession == nil || math.Abs(p.SessionFromKeyframe.X-60) > 1e-6 {
			t.Fatalf("output %+v", p)
		}
	}
	if a, b := stands[0].DatumFromSession, stands[1].DatumFromSession; math.Hypot(b.X-a.X, b.Y-a.Y-2) > 1e-6 || math.Abs(b.QZ-a.QZ) > 1e-6 {
		t.Errorf("r1 stands at %+v, r2 at %+v, want it 2 m to the left", a, b)
	}

	// An agent that comes back goes on from its journal, and the base from its streams.
	r2.stop()
	r2 = begin(t, dir, "agent", at("robots", "r2", "agent.yaml"))
	if line, _ := r2.says(0, "that it has read its journal", message("the journal is read")); line["session"] != 1.0 {
		t.Errorf("r2 came back with session %v, want 1", line["session"])
	}
	r2.says(0, "that it is joined again", joined)

	// A revoked robot is let out when the base is told to read the roster again.
	selvage(t, dir, "enrol", "f", "--revoke", "r2").want(t, 0)
	if err := base.cmd.Process.Signal(syscall.SIGHUP); err != nil {
		t.Fatal(err)
	}
	_, n := base.says(0, "that it has read the roster", message("the roster was read again"))
	r2.says(0, "that its link is down", message("the link is down"))
	base.says(n, "that it leads again", func(line map[string]any) bool { return line["message"] == "leads" && line["term"] == 2.0 })
	for _, d := range []*daemon{r1, r2, base} {
		d.stop()
	}
}

// What is wrong before the start is told at once, with the exit code for it.
func TestDaemonsRefuse(t *testing.T) {
	dir := t.TempDir()
	taken, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer taken.Close()
	desk := `{fleet: f, dimension: 2, unsigned: true, robots: [r1], serve: {listen: "%s", store: store}, holder: desk, log: json}`
	write(t, dir, "taken.yaml", fmt.Sprintf(desk, taken.Addr()))
	write(t, dir, "blocked.yaml", strings.Replace(fmt.Sprintf(desk, "127.0.0.1:"+freePort(t)), "store: store", "store: taken.yaml", 1))
	write(t, dir, "far.yaml", `{fleet: f, dimension: 2, unsigned: true, robots: [r1], bus: {url: "nats://127.0.0.1:1"}, holder: desk, log: json}`)
	write(t, dir, "slow.yaml", strings.Replace(fmt.Sprintf(desk, "127.0.0.1:4222"), "log: json", "log: json, pace: 50", 1))
	write(t, dir, "silent.yaml", `{fleet: f, dimension: 2, unsigned: true, robots: [r1], bus: {url: "nats://127.0.0.1:1"}, holder: desk, metrics: "127.0.0.1:1", log: json}`)
	write(t, dir, "r1.yaml", `{fleet: f, robot: r1, dimension: 2, unsigned: true, bus: {url: "nats://127.0.0.1:1"}, journal: r1.yaml, intake: stdin, log: json}`)
	for _, c := range []struct {
		args string
		code int
		says string
	}{
		{"bus none.yaml", exitInput, "none.yaml"},
		{"bus far.yaml", exitInput, "found no serve"},
		{"bus taken.yaml", exitEnvironment, "address already in use"},
		{"coordinate taken.yaml", exitEnvironment, "address already in use"},
		{"coordinate blocked.yaml", exitEnvironment, "not a directory"},
		{"coordinate slow.yaml", exitInput, "pace: found 50, expected 0.02 to 10"},
		{"status far.yaml", exitInput, "metrics: found nothing"},
		{"status silent.yaml", exitEnvironment, "no coordinator answers"},
		{"agent far.yaml", exitInput, "far.yaml"},
		{"agent r1.yaml", exitEnvironment, "journal"},
	} {
		selvage(t, dir, strings.Fields(c.args)...).want(t, c.code, c.says)
	}
}

// The bus alone, over TLS, and two coordinators on it: one leads, and the other one when the first has stopped.
func TestStandby(t *testing.T) {
	dir := t.TempDir()
	port := freePort(t)
	selvage(t, dir, "enrol", "f", "--robots", "r1", "--host", "127.0.0.1", "--port", port, "--dimension", "2").want(t, 0)
	config := func(name string) string { return filepath.Join("f-keys", "base", name) }
	replaceIn(t, filepath.Join(dir, config("base.yaml")), "/var/lib/selvage/store", "store", "page: 127.0.0.1:8080\n", "", "metrics: 127.0.0.1:9102\n", "")
	for _, holder := range []string{"one", "two"} {
		write(t, dir, config(holder+".yaml"), fmt.Sprintf(`{fleet: f, dimension: 2, bus: {url: "tls://127.0.0.1:%s", ca: ca.crt}, keys: {seed: base.seed, roster: robots.yaml}, holder: %s, log: json}`, port, holder))
	}
	leads := func(holder string) func(map[string]any) bool { // the term is 1 again: nobody was there to be told of the first one
		return func(line map[string]any) bool {
			return line["message"] == "leads" && line["holder"] == holder && line["term"] == 1.0
		}
	}
	bus := begin(t, dir, "bus", config("base.yaml"))
	bus.says(0, "that it is open", message("the bus is open"))
	one := begin(t, dir, "coordinate", config("one.yaml"))
	one.says(0, "that it leads", leads("one"))
	two := begin(t, dir, "coordinate", config("two.yaml"))
	two.says(0, "that it is connected", message("the link is up"))
	one.stop()
	two.says(0, "that it leads", leads("two"))
	two.stop()
	bus.stop()
}
