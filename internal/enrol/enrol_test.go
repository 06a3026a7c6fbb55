package enrol

import (
	"crypto/sha256"
	"crypto/tls"
	"crypto/x509"
	"encoding/pem"
	"errors"
	"fmt"
	"io/fs"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"selvage/internal/config"
	"selvage/internal/keys"
)

var noon = time.Date(2031, 2, 3, 12, 0, 0, 0, time.UTC)

func plan() Plan {
	return Plan{Fleet: "mine-3", Robots: []string{"r1", "r2"}, Hosts: []string{"base.site", "10.0.0.2", "fd00::2"}, Port: 4222, Dimension: 3, Validity: 700 * 24 * time.Hour}
}

func enrolled(t *testing.T, p Plan) string {
	t.Helper()
	folder := filepath.Join(t.TempDir(), "keys")
	if err := New(folder, p, noon); err != nil {
		t.Fatal(err)
	}
	return folder
}

// tree returns mode and checksum of all that is in a folder.
func tree(t *testing.T, folder string) map[string]string {
	t.Helper()
	all := map[string]string{}
	err := filepath.WalkDir(folder, func(path string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		info, err := d.Info()
		if err != nil {
			return err
		}
		name, err := filepath.Rel(folder, path)
		if err != nil {
			return err
		}
		all[name] = info.Mode().String()
		if info.Mode().IsRegular() {
			b, err := os.ReadFile(path)
			if err != nil {
				return err
			}
			all[name] += fmt.Sprintf(" %x", sha256.Sum256(b))
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return all
}

func TestNew(t *testing.T) {
	before := syscall.Umask(0)
	folder := enrolled(t, plan())
	syscall.Umask(before)
	want := []string{
		".", "authority", "authority/README", "authority/ca.crt", "authority/ca.key", "base", "base/README", "base/base.seed", "base/base.yaml", "base/ca.crt",
		"base/robots.yaml", "base/selvage-base.service", "base/server.crt", "base/server.key", "robots",
	}
	for _, r := range []string{"r1", "r2"} {
		want = append(want, "robots/"+r)
		for _, f := range []string{"README", "agent.yaml", "ca.crt", "robot.seed", "selvage-agent.service"} {
			want = append(want, "robots/"+r+"/"+f)
		}
	}
	var got []string
	for name, is := range tree(t, folder) {
		got = append(got, name)
		if mode := is[:10]; mode != "-rw-------" && mode != "drwx------" {
			t.Errorf("%s has mode %s", name, mode)
		}
	}
	slices.Sort(got)
	if diff := cmp.Diff(want, got); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	left, err := os.ReadDir(filepath.Dir(folder))
	if err != nil || len(left) != 1 {
		t.Errorf("beside it: %v, %v", left, err)
	}

	// What was written can be read, and fits together.
	b, err := config.ReadBase(filepath.Join(folder, "base", "base.yaml"))
	if err != nil {
		t.Fatal(err)
	}
	roster, err := config.ReadRoster(b.Keys.Roster)
	if err != nil {
		t.Fatal(err)
	}
	base, err := keys.Load(b.Keys.Seed)
	if err != nil {
		t.Fatal(err)
	}
	if b.Fleet != "mine-3" || b.Dimension != 3 || b.Serve.Listen != "[::]:4222" || roster.Fleet != "mine-3" || roster.Base != base.Public() || !slices.Equal(roster.Names(), []string{"r1", "r2"}) {
		t.Errorf("base %+v, roster %+v", b, roster)
	}
	for _, r := range []string{"r1", "r2"} {
		a, err := config.ReadAgent(filepath.Join(folder, "robots", r, "agent.yaml"))
		if err != nil {
			t.Fatal(err)
		}
		own, err := keys.Load(a.Keys.Seed)
		if err != nil {
			t.Fatal(err)
		}
		if a.Fleet != "mine-3" || a.Robot != r || a.Dimension != 3 || a.Bus.URL != "tls://base.site:4222" || a.Keys.Base != base.Public() || roster.Good()[r] != own.Public() {
			t.Errorf("agent %+v", a)
		}
		if read(t, a.Bus.CA) != read(t, filepath.Join(folder, "authority", "ca.crt")) {
			t.Errorf("%s knows another authority", r)
		}
	}
	if _, err := tls.LoadX509KeyPair(b.Serve.Certificate, b.Serve.Key); err != nil {
		t.Error(err)
	}
}

func read(t *testing.T, parts ...string) string {
	t.Helper()
	b, err := os.ReadFile(filepath.Join(parts...))
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

// A secret is in one file only: no other tells it, nor does any error.
func TestSecretsStayInTheirFiles(t *testing.T) {
	folder := enrolled(t, plan())
	secrets := map[string]string{}
	all := tree(t, folder)
	for name := range all {
		if strings.HasSuffix(name, ".seed") || strings.HasSuffix(name, ".key") {
			secrets[name] = read(t, folder, name)
		}
	}
	if len(secrets) != 5 {
		t.Fatalf("%d secrets", len(secrets))
	}
	seed := regexp.MustCompile(`SU[A-Z2-7]{56}`)
	for name, is := range all {
		if is[0] == 'd' {
			continue
		}
		text := read(t, folder, name)
		if found := seed.FindAllString(text, -1); len(found) > 0 != strings.HasSuffix(name, ".seed") || len(found) > 1 {
			t.Errorf("%s has %d seeds", name, len(found))
		}
		if strings.Contains(text, "PRIVATE KEY") != strings.HasSuffix(name, ".key") {
			t.Errorf("%s: a secret key where none belongs, or none where one does", name)
		}
		for other, secret := range secrets {
			if other != name && text == secret {
				t.Errorf("%s and %s have the same secret", name, other)
			}
		}
	}
}

func certificateIn(t *testing.T, path string) *x509.Certificate {
	t.Helper()
	block, rest := pem.Decode([]byte(read(t, path)))
	if block == nil || len(rest) > 0 {
		t.Fatalf("%s is no certificate", path)
	}
	c, err := x509.ParseCertificate(block.Bytes)
	if err != nil {
		t.Fatal(err)
	}
	return c
}

// The certificate counts for the hosts of the base, from two days before until the day that was stated, and the authority can sign for
// nobody else: RFC 5280, section 4.2.1.10.
func TestCertificates(t *testing.T) {
	for _, hosts := range [][]string{{"base.site", "10.0.0.2", "fd00::2"}, {"base.site"}, {"10.0.0.2"}} {
		p := plan()
		p.Hosts = hosts
		folder := enrolled(t, p)
		authority := certificateIn(t, filepath.Join(folder, "base", "ca.crt"))
		server := certificateIn(t, filepath.Join(folder, "base", "server.crt"))
		pool := x509.NewCertPool()
		pool.AddCert(authority)
		verify := func(c *x509.Certificate, host string, at time.Time) error {
			_, err := c.Verify(x509.VerifyOptions{Roots: pool, DNSName: host, CurrentTime: at, KeyUsages: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth}})
			return err
		}
		for _, host := range hosts {
			if err := verify(server, host, noon); err != nil {
				t.Errorf("%s: %v", host, err)
			}
		}
		for _, host := range []string{"other.site", "10.0.0.3", "fd00::3"} {
			if err := verify(server, host, noon); err == nil {
				t.Errorf("counts for %s", host)
			}
		}
		for at, good := range map[time.Duration]bool{-47 * time.Hour: true, -49 * time.Hour: false, p.Validity - time.Hour: true, p.Validity + time.Hour: false} {
			if err := verify(server, hosts[0], noon.Add(at)); (err == nil) != good {
				t.Errorf("%v after it was made: %v", at, err)
			}
		}
		if _, err := server.Verify(x509.VerifyOptions{Roots: pool, CurrentTime: noon, KeyUsages: []x509.ExtKeyUsage{x509.ExtKeyUsageClientAuth}}); err == nil {
			t.Error("counts for clients")
		}

		// With the key of the authority in hand, certificates for others are worth nothing.
		block, _ := pem.Decode([]byte(read(t, folder, "authority", "ca.key")))
		key, err := x509.ParsePKCS8PrivateKey(block.Bytes)
		if err != nil {
			t.Fatal(err)
		}
		for _, forged := range []*x509.Certificate{{DNSNames: []string{"bank.example"}}, {IPAddresses: []net.IP{net.IPv4(10, 0, 0, 3)}}, {IPAddresses: []net.IP{net.ParseIP("fd00::3")}}} {
			forged.SerialNumber, forged.NotBefore, forged.NotAfter = serial(), noon, noon.Add(time.Hour)
			forged.ExtKeyUsage = []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth}
			der, err := x509.CreateCertificate(nil, forged, authority, server.PublicKey, key)
			if err != nil {
				t.Fatal(err)
			}
			c, err := x509.ParseCertificate(der)
			if err != nil {
				t.Fatal(err)
			}
			var invalid x509.CertificateInvalidError
			if err := verify(c, "", noon.Add(time.Minute)); !errors.As(err, &invalid) || invalid.Reason != x509.CANotAuthorizedForThisName {
				t.Errorf("of hosts %v, forged for %v %v: %v", hosts, forged.DNSNames, forged.IPAddresses, err)
			}
			openssl(t, folder, der, "permitted subtree violation", "excluded subtree violation")
		}
		block, _ = pem.Decode([]byte(read(t, folder, "base", "server.crt")))
		openssl(t, folder, block.Bytes, ": OK")
	}
}

// openssl asks another implementation about a certificate.
func openssl(t *testing.T, folder string, der []byte, says ...string) {
	t.Helper()
	if _, err := exec.LookPath("openssl"); err != nil {
		return
	}
	path := filepath.Join(t.TempDir(), "cert.pem")
	if err := os.WriteFile(path, pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: der}), 0o600); err != nil {
		t.Fatal(err)
	}
	out, _ := exec.Command("openssl", "verify", "-x509_strict", "-attime", fmt.Sprint(noon.Add(time.Minute).Unix()), "-purpose", "sslserver", "-CAfile", filepath.Join(folder, "base", "ca.crt"), path).CombinedOutput()
	if !slices.ContainsFunc(says, func(s string) bool { return strings.Contains(string(out), s) }) {
		t.Errorf("openssl says %s, want one of %q", out, says)
	}
}

func TestNewRefuses(t *testing.T) {
	for want, change := range map[string]func(*Plan){
		`fleet "a.b"`:                 func(p *Plan) { p.Fleet = "a.b" },
		`robot "r*"`:                  func(p *Plan) { p.Robots = []string{"r*"} },
		`robot "../x"`:                func(p *Plan) { p.Robots = []string{"../x"} },
		`robot "base": the name is t`: func(p *Plan) { p.Robots = []string{"base"} },
		`robot "R1": the name is t`:   func(p *Plan) { p.Robots = []string{"r1", "R1"} },
		`no robot`:                    func(p *Plan) { p.Robots = nil },
		`no host`:                     func(p *Plan) { p.Hosts = nil },
		`host "base site"`:            func(p *Plan) { p.Hosts = []string{"base site"} },
		`host "*.site"`:               func(p *Plan) { p.Hosts = []string{"*.site"} },
		`host "10.0.0.256"`:           func(p *Plan) { p.Hosts = []string{"10.0.0.256"} },
		`host "0.0.0.0"`:              func(p *Plan) { p.Hosts = []string{"0.0.0.0"} },
		`host "fe80::1%eth0"`:         func(p *Plan) { p.Hosts = []string{"fe80::1%eth0"} },
		`port 0`:                      func(p *Plan) { p.Port = 0 },
		`dimension 4`:                 func(p *Plan) { p.Dimension = 4 },
		`validity of 0 days`:          func(p *Plan) { p.Validity = time.Hour },
	} {
		p := plan()
		change(&p)
		dir := t.TempDir()
		err := New(filepath.Join(dir, "keys"), p, noon)
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v, want %s", err, want)
		}
		if left, err := os.ReadDir(dir); err != nil || len(left) > 0 {
			t.Errorf("%s: left %v, %v", want, left, err)
		}
	}
	// What is there stays.
	for _, there := range []string{"keys", "keys/x"} {
		dir := t.TempDir()
		if err := os.MkdirAll(filepath.Join(dir, there), 0o755); err != nil {
			t.Fatal(err)
		}
		before := tree(t, dir)
		if err := New(filepath.Join(dir, "keys"), plan(), noon); !errors.Is(err, errExists) {
			t.Errorf("over a folder: %v", err)
		}
		if diff := cmp.Diff(before, tree(t, dir)); diff != "" {
			t.Error(diff)
		}
	}
	if err := New(filepath.Join(t.TempDir(), "none", "keys"), plan(), noon); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("in a folder that is not there: %v", err)
	}
}

// changed lists what differs between two trees.
func changed(before, after map[string]string) (all []string) {
	for name := range after {
		if before[name] != after[name] {
			all = append(all, name)
		}
	}
	for name := range before {
		if after[name] == "" {
			all = append(all, name)
		}
	}
	slices.Sort(all)
	return all
}

func TestAddAndRevoke(t *testing.T) {
	folder := enrolled(t, plan())
	if err := os.RemoveAll(filepath.Join(folder, "authority")); err != nil { // nobody needs it any more
		t.Fatal(err)
	}
	before := tree(t, folder)
	if err := Add(folder, "mine-3", []string{"r7", "r8"}, noon.Add(time.Hour)); err != nil {
		t.Fatal(err)
	}
	after := tree(t, folder)
	want := []string{"base/robots.yaml"}
	for _, r := range []string{"r7", "r8"} {
		want = append(want, "robots/"+r)
		for _, f := range []string{"README", "agent.yaml", "ca.crt", "robot.seed", "selvage-agent.service"} {
			want = append(want, "robots/"+r+"/"+f)
		}
	}
	if diff := cmp.Diff(want, changed(before, after)); diff != "" {
		t.Errorf("adding changed (-want +got):\n%s", diff)
	}
	for name, is := range after {
		if mode := is[:10]; mode != "-rw-------" && mode != "drwx------" {
			t.Errorf("%s has mode %s", name, mode)
		}
	}
	a, err := config.ReadAgent(filepath.Join(folder, "robots", "r7", "agent.yaml"))
	if err != nil || a.Robot != "r7" || a.Bus.URL != "tls://base.site:4222" || a.Dimension != 3 {
		t.Errorf("%+v, %v", a, err)
	}

	before = after
	lost := noon.Add(2*time.Hour + 1500*time.Millisecond)
	if err := Revoke(folder, "mine-3", []string{"r2"}, lost); err != nil {
		t.Fatal(err)
	}
	after = tree(t, folder)
	if diff := cmp.Diff([]string{"base/robots.yaml"}, changed(before, after)); diff != "" {
		t.Errorf("revoking changed (-want +got):\n%s", diff)
	}
	r, err := config.ReadRoster(filepath.Join(folder, "base", "robots.yaml"))
	if err != nil {
		t.Fatal(err)
	}
	own, err := keys.Load(a.Keys.Seed)
	if err != nil {
		t.Fatal(err)
	}
	good := r.Good()
	if len(good) != 3 || good["r7"] != own.Public() || good["r2"] != "" || len(r.Robots) != 4 || !r.Robots[1].Revoked.Equal(lost) {
		t.Errorf("roster %+v", r)
	}

	// What cannot be done changes nothing.
	for want, f := range map[string]func() error{
		`robot "r1": the name is taken`:        func() error { return Add(folder, "mine-3", []string{"r1"}, noon) },
		`robot "R7": the name is taken`:        func() error { return Add(folder, "mine-3", []string{"R7"}, noon) },
		"r2: is there already":                 func() error { return Add(folder, "mine-3", []string{"r9", "r2"}, noon) },
		`robot "a b"`:                          func() error { return Add(folder, "mine-3", []string{"a b"}, noon) },
		"is of fleet mine-3, not of mine-4":    func() error { return Add(folder, "mine-4", []string{"r9"}, noon) },
		`robot "r2": expected one that is enr`: func() error { return Revoke(folder, "mine-3", []string{"r1", "r2"}, noon) },
		`robot "r3": expected one that is enr`: func() error { return Revoke(folder, "mine-3", []string{"r3"}, noon) },
		`robot "r1": expected one that is enr`: func() error { return Revoke(folder, "mine-3", []string{"r1", "r1"}, noon) },
	} {
		if err := f(); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v, want %s", err, want)
		}
		if diff := cmp.Diff(after, tree(t, folder)); diff != "" {
			t.Errorf("%s: changed %s", want, diff)
		}
	}

	// A robot that comes back gets a new key once its old folder is out of the way.
	if err := os.Rename(filepath.Join(folder, "robots", "r2"), filepath.Join(t.TempDir(), "r2")); err != nil {
		t.Fatal(err)
	}
	if err := Add(folder, "mine-3", []string{"r2"}, noon.Add(3*time.Hour)); err != nil {
		t.Fatal(err)
	}
	if r, err = config.ReadRoster(filepath.Join(folder, "base", "robots.yaml")); err != nil || len(r.Robots) != 5 || r.Good()["r2"] == "" || r.Robots[1].Key == r.Good()["r2"] {
		t.Errorf("roster %+v, %v", r, err)
	}
	if _, err := r.Ring(); err != nil {
		t.Error(err)
	}
}

func TestOneEnrolmentAtATime(t *testing.T) {
	folder := enrolled(t, plan())
	unlock, err := lock(folder)
	if err != nil {
		t.Fatal(err)
	}
	if err := Add(folder, "mine-3", []string{"r9"}, noon); err == nil || !strings.Contains(err.Error(), "another enrolment is at work") {
		t.Error(err)
	}
	if err := unlock(); err != nil {
		t.Fatal(err)
	}
	if err := Add(folder, "mine-3", []string{"r9"}, noon); err != nil {
		t.Error(err)
	}
}

// An enrolment that cannot be finished leaves what was.
func TestNothingIsHalfDone(t *testing.T) {
	folder := enrolled(t, plan())
	// The second of two robots fails: something is in its way that the first look does not see.
	before := tree(t, folder)
	err := change(folder, "mine-3", func(r *config.Roster) (func() error, error) {
		path := filepath.Join(folder, "robots", "r7")
		undo := func() error { return os.RemoveAll(path) }
		if err := build(path, func(f string) error { return addRobot(f, r, "r7", 3, nil, noon) }); err != nil {
			return undo, err
		}
		return undo, build(filepath.Join(folder, "robots", "r8"), func(string) error { return errors.New("the disk is full") })
	})
	if err == nil || !strings.Contains(err.Error(), "the disk is full") {
		t.Error(err)
	}
	if diff := cmp.Diff(before, tree(t, folder)); diff != "" {
		t.Errorf("changed %s", diff)
	}
	// What an interruption left is named.
	if err := os.Mkdir(filepath.Join(folder, "robots", "r7"), 0o700); err != nil {
		t.Fatal(err)
	}
	if err := Add(folder, "mine-3", []string{"r7"}, noon); err == nil || !strings.Contains(err.Error(), "what an interruption left") {
		t.Error(err)
	}
	if os.Geteuid() == 0 {
		return // whoever may do everything cannot be kept from writing
	}
	if err := os.Chmod(filepath.Join(folder, "base"), 0o500); err != nil {
		t.Fatal(err)
	}
	before = tree(t, folder)
	if err := Add(folder, "mine-3", []string{"r8"}, noon); !errors.Is(err, fs.ErrPermission) {
		t.Error(err)
	}
	if diff := cmp.Diff(before, tree(t, folder)); diff != "" {
		t.Errorf("changed %s", diff)
	}
}
