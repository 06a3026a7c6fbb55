package config

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/nats-io/nkeys"
	"pgregory.net/rapid"

	"selvage/internal/keys"
	"selvage/msgs"
)

// Public keys that some other run of the library made.
const (
	baseKey = "UDILV2VQVVPDRV2PJC4PYRENKXTOZ7RQB5QT2WZEVLOZ7FGS45KJYEFC"
	r1Key   = "UC6NWY4TX5N23Y6G4ENET357QEEIJED2QOWVVH7IRVYCHXV5NOYVIQTB"
)

const agentFile = `# of r1
fleet: mine-3
robot: r1
dimension: 3
bus:
  url: tls://10.0.0.2:4222
  ca: ca.crt
keys:
  seed: r1.seed
  base: ` + baseKey + `
journal: /var/lib/selvage/journal
intake: stdin
log: json
`

const baseFile = `fleet: mine-3
dimension: 2
serve:
  listen: 0.0.0.0:4222
  store: /var/lib/selvage/store
  certificate: server.crt
  key: server.key
keys:
  seed: base.seed
  roster: robots.yaml
holder: base-1
page: 127.0.0.1:8080
log: text
limits:
  connections: 50
`

const rosterFile = `fleet: mine-3
base: ` + baseKey + `
url: tls://[fd00::2]:4222
robots:
- name: r1
  key: ` + r1Key + `
  enrolled: 2031-02-03T04:05:06Z
  revoked: 2031-02-03T05:05:06.5Z
`

func write(t testing.TB, text string) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "file.yaml")
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

func TestAgentFile(t *testing.T) {
	if !nkeys.IsValidPublicUserKey(baseKey) || !nkeys.IsValidPublicUserKey(r1Key) {
		t.Fatal("the keys of the test are none")
	}
	path := write(t, agentFile)
	got, err := ReadAgent(path)
	if err != nil {
		t.Fatal(err)
	}
	in := func(name string) string { return filepath.Join(filepath.Dir(path), name) }
	want := &Agent{
		Fleet: "mine-3", Robot: "r1", Dimension: 3, Bus: Link{URL: "tls://10.0.0.2:4222", CA: in("ca.crt")},
		Keys: AgentKeys{Seed: in("r1.seed"), Base: baseKey}, Journal: "/var/lib/selvage/journal", Intake: "stdin", Log: "json",
	}
	if diff := cmp.Diff(want, got); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	got, err = ReadAgent(write(t, "fleet: f\nrobot: r1\ndimension: 2\nunsigned: true\nbus: {url: 'nats://base:4222'}\njournal: j\nintake: in.sock\noutput: out.sock\nmetrics: :9101\nlog: text\n"))
	if err != nil {
		t.Fatal(err)
	}
	if !got.Unsigned || filepath.Base(got.Intake) != "in.sock" || !filepath.IsAbs(got.Output) || !filepath.IsAbs(got.Journal) || got.Bus.CA != "" {
		t.Errorf("%+v", got)
	}
}

func TestBaseFile(t *testing.T) {
	path := write(t, baseFile)
	got, err := ReadBase(path)
	if err != nil {
		t.Fatal(err)
	}
	in := func(name string) string { return filepath.Join(filepath.Dir(path), name) }
	want := &Base{
		Fleet: "mine-3", Dimension: 2, Serve: Serve{Listen: "0.0.0.0:4222", Store: "/var/lib/selvage/store", Certificate: in("server.crt"), Key: in("server.key")},
		Keys: BaseKeys{Seed: in("base.seed"), Roster: in("robots.yaml")}, Holder: "base-1", Page: "127.0.0.1:8080", Log: "text", Limits: Limits{Connections: 50},
	}
	if diff := cmp.Diff(want, got); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	for _, text := range []string{
		"fleet: f\ndimension: 3\nunsigned: true\nserve: {listen: ':4222', store: s}\nrobots: [r1, r2]\nholder: a\nlog: text\n",
		"fleet: f\ndimension: 3\nbus: {url: 'tls://base:4222', ca: ca.crt}\nkeys: {seed: s, roster: r}\nholder: b\nstandby: true\nlog: text\n",
	} {
		if _, err := ReadBase(write(t, text)); err != nil {
			t.Errorf("%v in\n%s", err, text)
		}
	}
}

func TestRosterFile(t *testing.T) {
	r, err := ReadRoster(write(t, rosterFile))
	if err != nil {
		t.Fatal(err)
	}
	at := time.Date(2031, 2, 3, 4, 5, 6, 0, time.UTC)
	want := &Roster{Fleet: "mine-3", Base: baseKey, URL: "tls://[fd00::2]:4222", Robots: []Robot{{Name: "r1", Key: r1Key, Enrolled: at, Revoked: at.Add(time.Hour + time.Second/2)}}}
	if diff := cmp.Diff(want, r); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	b, err := r.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	again, err := ReadRoster(write(t, string(b)))
	if err != nil {
		t.Fatalf("%v in\n%s", err, b)
	}
	if diff := cmp.Diff(r, again); diff != "" {
		t.Errorf("written and read (-want +got):\n%s", diff)
	}
}

// A robot that was revoked and enrolled anew has one good key; both verify what they should.
func TestRosterOfARobotThatCameBack(t *testing.T) {
	dir := t.TempDir()
	var pairs []*keys.Pair
	for _, name := range []string{"base", "old", "new", "r2"} {
		if _, err := keys.Create(filepath.Join(dir, name)); err != nil {
			t.Fatal(err)
		}
		p, err := keys.Load(filepath.Join(dir, name))
		if err != nil {
			t.Fatal(err)
		}
		pairs = append(pairs, p)
	}
	at := time.Date(2031, 2, 3, 4, 5, 6, 0, time.UTC)
	r := &Roster{Fleet: "f", Base: pairs[0].Public(), URL: "tls://base.site:4222", Robots: []Robot{
		{Name: "r1", Key: pairs[1].Public(), Enrolled: at, Revoked: at.Add(time.Hour)}, {Name: "r2", Key: pairs[3].Public(), Enrolled: at},
		{Name: "r1", Key: pairs[2].Public(), Enrolled: at.Add(2 * time.Hour)},
	}}
	b, err := r.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	if r, err = ReadRoster(write(t, string(b))); err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(map[string]string{"r1": pairs[2].Public(), "r2": pairs[3].Public()}, r.Good()); diff != "" {
		t.Error(diff)
	}
	if diff := cmp.Diff([]string{"r1", "r2"}, r.Names()); diff != "" {
		t.Error(diff)
	}
	ring, err := r.Ring()
	if err != nil {
		t.Fatal(err)
	}
	text := []byte("text")
	for i, want := range []error{keys.ErrForged, keys.ErrRevoked, nil, keys.ErrForged} {
		signature, err := pairs[i].Sign(text)
		if err != nil {
			t.Fatal(err)
		}
		if err := ring.Verify("r1", at.Add(time.Hour).UnixNano(), text, signature); !errors.Is(err, want) {
			t.Errorf("key %d: %v, want %v", i, err, want)
		}
	}
}

func TestWrongFiles(t *testing.T) {
	agent := func(old, new string) string { return strings.Replace(agentFile, old, new, 1) }
	base := func(old, new string) string { return strings.Replace(baseFile, old, new, 1) }
	roster := func(old, new string) string { return strings.Replace(rosterFile, old, new, 1) }
	readers := map[string]func(string) error{
		"agent":  func(p string) error { _, err := ReadAgent(p); return err },
		"base":   func(p string) error { _, err := ReadBase(p); return err },
		"roster": func(p string) error { _, err := ReadRoster(p); return err },
	}
	for _, c := range []struct{ kind, text, want string }{
		{"agent", agent("robot: r1", "robot: r.1"), `:3: robot: found "r.1", expected 1 to 32 letters`},
		{"agent", agent("robot: r1", "robot: base"), `:3: robot: found "base", expected a name that is not kept`},
		{"agent", agent("dimension: 3", "dimension: 4"), `:4: dimension: found 4, expected 2 or 3`},
		{"agent", agent("dimension: 3", "dimension: many"), `:4: `},
		{"agent", agent("  url:", "  uri:"), `:6: found unknown field "uri"`},
		{"agent", agent("fleet: mine-3", "fleet: mine-3\nfleet: b"), `:3: `},
		{"agent", agent("tls://10.0.0.2:4222", "nats://10.0.0.2:4222"), `:6: bus.url: found "nats://10.0.0.2:4222", expected tls://HOST:PORT`},
		{"agent", agent("tls://10.0.0.2:4222", "tls://a:b@10.0.0.2:4222"), `:6: bus.url`},
		{"agent", agent("tls://10.0.0.2:4222", "tls://10.0.0.2"), `:6: bus.url`},
		{"agent", agent("  ca: ca.crt\n", ""), `:6: bus.ca: found nothing, expected a path`},
		{"agent", agent("  seed: r1.seed\n", ""), `keys.seed: found nothing, expected a path`},
		{"agent", agent(baseKey, baseKey[:55]), `:10: keys.base: found "UDIL`},
		{"agent", agent("log: json", "log: xml"), `:13: log: found "xml", expected text or json`},
		{"agent", agent("log: json", "log: json\nmetrics: 9101"), `:14: metrics: found "9101", expected host:port`},
		{"agent", agent("log: json", "log: json\nunsigned: true"), `keys: found keys, expected none`},
		{"agent", agent("journal: /var/lib/selvage/journal\n", ""), `journal: found nothing`},
		{"agent", agent("intake: stdin\n", ""), `intake: found nothing`},
		{"agent", "", "file.yaml: found nothing"},
		{"agent", "fleet: &a f\nrobot: *a\n", `:1: found "&", expected plain fields`},
		{"agent", "a: " + strings.Repeat("[", 20), "deep nesting"},
		{"agent", strings.Repeat("# much\n", 1<<16), "expected a smaller file"},
		{"agent", "fleet: [\n", "file.yaml:"},
		{"base", base("holder: base-1\n", ""), `holder: found nothing`},
		{"base", base("0.0.0.0:4222", "4222"), `:4: serve.listen: found "4222", expected host:port`},
		{"base", base("0.0.0.0:4222", ":0"), `:4: serve.listen`},
		{"base", base("  certificate: server.crt\n", ""), `serve.certificate: found nothing`},
		{"base", base("holder: base-1\n", "holder: base-1\nbus:\n  url: tls://a:1\n  ca: b\n"), `bus: found both or none of serve and bus`},
		{"base", "fleet: f\ndimension: 3\nholder: a\nlog: text\nkeys: {seed: s, roster: r}\n", `bus: found both or none`},
		{"base", base("holder: base-1\n", "holder: base-1\nrobots: [r1]\n"), `:12: robots: found names, expected none`},
		{"base", base("  connections: 50", "  connections: -1"), `:15: limits.connections: found -1`},
		{"base", base("  connections: 50", "  store_mib: 99999999"), `:15: limits.store_mib: found 99999999`},
		{"base", "fleet: f\ndimension: 3\nunsigned: true\nserve: {listen: ':1', store: s}\nrobots:\n- r1\n- r1\nholder: a\nlog: text\n", `:7: robots[1]: found r1 a second time`},
		{"base", "fleet: f\ndimension: 3\nunsigned: true\nserve: {listen: ':1', store: s, key: k}\nrobots: []\nholder: a\nlog: text\n", `robots: found none`},
		{"roster", roster("name: r1", "name: base"), `:5: robots[0].name: found "base"`},
		{"roster", roster("  enrolled: 2031-02-03T04:05:06Z\n", ""), `robots[0].enrolled: found nothing, expected a time`},
		{"roster", roster("2031-02-03T04:05:06Z", "yesterday"), `:7: `},
		{"roster", roster("url: tls:", "url: nats:"), `:3: url: found "nats://[fd00::2]:4222", expected tls://HOST:PORT`},
		{"roster", roster(r1Key, baseKey), `:6: robots[0].key: found the key of the base, expected a key of its own`},
		{"roster", rosterFile + "- {name: r1, key: " + r1Key + ", enrolled: 2031-02-03T04:05:06Z}\n", `:9: robots[1].key: found the key of r1`},
		{"roster", strings.Replace(rosterFile, "  revoked: 2031-02-03T05:05:06.5Z\n", "", 1) + "- {name: r1, key: x, enrolled: 2031-02-03T04:05:06Z}\n", `:8: robots[1].name: found r1 a second time`},
	} {
		path := write(t, c.text)
		err := readers[c.kind](path)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v\nwant %s in\n%s", c.kind, err, c.want, c.text[:min(len(c.text), 600)])
		}
	}
	for kind, reader := range readers {
		if err := reader(filepath.Join(t.TempDir(), "none")); !errors.Is(err, os.ErrNotExist) {
			t.Errorf("%s that is not there: %v", kind, err)
		}
	}
}

// Names are those of the messages.
func TestNamesAreThoseOfTheMessages(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		name := rapid.OneOf(rapid.StringMatching(`[A-Za-z0-9_-]{1,34}`), rapid.String()).Draw(t, "name")
		_, err := msgs.ParseSubject(fmt.Sprintf("up.%s.%s.hb", name, name))
		if ok := nameForm.MatchString(name); ok != (err == nil) {
			t.Fatalf("%q: %v here, %v there", name, ok, err)
		}
	})
}

func FuzzRead(f *testing.F) {
	for _, text := range []string{agentFile, baseFile, rosterFile, "a: [{b: c}]", "? a\n: b"} {
		f.Add(text)
	}
	f.Fuzz(func(t *testing.T, text string) {
		path := write(t, text)
		if a, err := ReadAgent(path); err == nil && (a.Unsigned == (a.Keys.Seed != "")) {
			t.Errorf("%+v", a)
		}
		if b, err := ReadBase(path); err == nil && (b.Unsigned == (b.Keys.Seed != "") || b.Serve.Listen == "" && b.Bus.URL == "") {
			t.Errorf("%+v", b)
		}
		if r, err := ReadRoster(path); err == nil {
			if _, err := r.Ring(); err != nil {
				t.Errorf("%+v: %v", r, err)
			}
		}
	})
}
