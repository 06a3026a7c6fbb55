package bus

import (
	"bufio"
	"context"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/json"
	"errors"
	"fmt"
	"math/big"
	"net"
	"os"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/nats-io/nkeys"
)

// user is a key of the library.
type user struct{ nkeys.KeyPair }

func newUser(t *testing.T) user {
	t.Helper()
	pair, err := nkeys.CreateUser()
	if err != nil {
		t.Fatal(err)
	}
	return user{pair}
}

func (u user) Public() string {
	public, err := u.PublicKey()
	if err != nil {
		panic(err)
	}
	return public
}

// certificate makes one for 127.0.0.1 that signs itself, and the pool that trusts it.
func certificate(t *testing.T) (tls.Certificate, *x509.CertPool) {
	t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	template := &x509.Certificate{
		SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "base"}, NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour),
		IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)}, IsCA: true, BasicConstraintsValid: true, KeyUsage: x509.KeyUsageDigitalSignature | x509.KeyUsageCertSign,
		ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth},
	}
	der, err := x509.CreateCertificate(rand.Reader, template, template, key.Public(), key)
	if err != nil {
		t.Fatal(err)
	}
	leaf, err := x509.ParseCertificate(der)
	if err != nil {
		t.Fatal(err)
	}
	pool := x509.NewCertPool()
	pool.AddCert(leaf)
	return tls.Certificate{Certificate: [][]byte{der}, PrivateKey: key}, pool
}

// guarded is a server that lets in the base, r1 and r2, with the streams of fleet f.
type guarded struct {
	*Server
	roots        *x509.CertPool
	base, r1, r2 user
	link         *Client // of the base, in its process
}

func guard(t *testing.T) *guarded {
	t.Helper()
	g := &guarded{base: newUser(t), r1: newUser(t), r2: newUser(t)}
	access := &Access{Fleet: "f", Base: g.base.Public(), Robots: map[string]string{"r1": g.r1.Public(), "r2": g.r2.Public()}}
	access.Certificate, g.roots = certificate(t)
	g.Server = start(t, Options{Listen: "127.0.0.1:0", Access: access})
	var err error
	g.link, err = g.Connect(ClientOptions{Name: "base", Key: g.base, Warn: func(err error) { t.Log("base:", err) }})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(g.link.Close)
	if err := g.link.Prepare(deadline(t), "f", "r1", "r2"); err != nil {
		t.Fatal(err)
	}
	return g
}

// robot connects over TLS with a key.
func (g *guarded) robot(t *testing.T, name string, key Key) (*Client, chan bool, chan error) {
	t.Helper()
	link, warnings := make(chan bool, 100), make(chan error, 100)
	c, err := Dial(g.URL(), ClientOptions{
		Name: name, Key: key, Roots: g.roots, Connected: func(up bool) { link <- up }, Warn: func(err error) { warnings <- err },
	})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(c.Close)
	return c, link, warnings
}

// A robot can do all that the package does on its side, over TLS and with no more than its permissions.
func TestRobotHasWhatItNeeds(t *testing.T) {
	g, ctx := guard(t), deadline(t)
	r1, link, warnings := g.robot(t, "r1", g.r1)
	awaitLink(t, link, true)
	if !strings.HasPrefix(g.URL(), "tls://") || !r1.nc.TLSRequired() {
		t.Errorf("connected to %s without TLS", g.URL())
	}
	beats, h := inbox()
	stop, err := g.link.Subscribe("up.f.*.hb", h)
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	corrections, h := inbox()
	for _, kind := range []string{"corr", "want"} {
		stop, err := r1.Follow(CorrectionStream("f"), "down.f.r1."+kind, h)
		if err != nil {
			t.Fatal(err)
		}
		defer stop()
	}
	verdicts := make(chan message, 10)
	stop, err = r1.Consume(ctx, VerdictStream("f"), "r1", func(subject string, b []byte) error {
		verdicts <- message{subject, string(b)}
		if string(b) == "again" {
			return errors.New("not now")
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	if err := r1.PublishHeartbeat("up.f.r1.hb", []byte("alive")); err != nil {
		t.Fatal(err)
	}
	expect(t, beats, message{"up.f.r1.hb", "alive"})
	if _, err := r1.Publish(ctx, "up.f.r1.tie", "1", []byte("tie")); err != nil {
		t.Fatal(err)
	}
	for _, subject := range []string{"up.f.r1.summary", "up.f.r1.summary.a.0", "up.f.r1.summary.head"} {
		if err := r1.PublishNewest(ctx, subject, []byte("s")); err != nil {
			t.Fatal(err)
		}
	}
	for _, kind := range []string{"corr", "want"} {
		if err := g.link.PublishNewest(ctx, "down.f.r1."+kind, []byte(kind)); err != nil {
			t.Fatal(err)
		}
		expect(t, corrections, message{"down.f.r1." + kind, kind})
		if b, _, err := r1.Newest(ctx, CorrectionStream("f"), "down.f.r1."+kind); err != nil || string(b) != kind {
			t.Errorf("newest %s: %q, %v", kind, b, err)
		}
	}
	for _, id := range []string{"v", "again"} {
		if _, err := g.link.Publish(ctx, "down.f.r1.verdict", id, []byte(id)); err != nil {
			t.Fatal(err)
		}
	}
	expect(t, verdicts, message{"down.f.r1.verdict", "v"}, message{"down.f.r1.verdict", "again"}, message{"down.f.r1.verdict", "again"})
	if len(warnings) > 0 {
		t.Errorf("warned: %v", <-warnings)
	}
}

// stranger is a plain connection of the library, for what the package does not do.
type stranger struct {
	*nats.Conn
	errors chan error
}

func (g *guarded) stranger(t *testing.T, key user, inbox string) *stranger {
	t.Helper()
	s := &stranger{errors: make(chan error, 100)}
	var err error
	s.Conn, err = nats.Connect(g.URL(), nats.Secure(&tls.Config{RootCAs: g.roots}), nats.Nkey(key.Public(), key.Sign), nats.CustomInboxPrefix(inbox),
		nats.NoReconnect(), nats.ErrorHandler(func(_ *nats.Conn, _ *nats.Subscription, err error) { s.errors <- err }))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(s.Close)
	return s
}

// refused waits for the server to say no to a subject.
func (s *stranger) refused(t *testing.T, subject string) {
	t.Helper()
	select {
	case err := <-s.errors:
		if !errors.Is(err, nats.ErrPermissionViolation) || !strings.Contains(err.Error(), `"`+subject+`"`) {
			t.Errorf("%s: %v", subject, err)
		}
	case <-time.After(longest):
		t.Errorf("%s: not refused", subject)
	}
}

// state is what the streams hold and who reads them: what must not change.
func (g *guarded) state(t *testing.T, ctx context.Context) string {
	t.Helper()
	var all []string
	for _, name := range []string{TieStream("f", "r1"), TieStream("f", "r2"), SummaryStream("f"), CorrectionStream("f"), VerdictStream("f")} {
		s, err := g.link.js.Stream(ctx, name)
		if err != nil {
			t.Fatal(err)
		}
		i, err := s.Info(ctx, jetstream.WithSubjectFilter(">"))
		if err != nil {
			t.Fatal(err)
		}
		all = append(all, fmt.Sprint(name, i.State.Msgs, i.State.LastSeq, i.State.Consumers, i.State.Subjects, i.Config))
	}
	return strings.Join(all, "\n")
}

func TestRobotIsRefusedWhatIsNotItsOwn(t *testing.T) {
	g, ctx := guard(t), deadline(t)
	for _, robot := range []string{"r1", "r2"} {
		for _, kind := range []string{"corr", "want"} {
			if err := g.link.PublishNewest(ctx, "down.f."+robot+"."+kind, []byte("for "+robot)); err != nil {
				t.Fatal(err)
			}
		}
		if _, err := g.link.Publish(ctx, "down.f."+robot+".verdict", robot, []byte("for "+robot)); err != nil {
			t.Fatal(err)
		}
		for _, subject := range []string{"tie", "summary"} {
			if err := g.link.PublishNewest(ctx, "up.f."+robot+"."+subject, []byte("of "+robot)); err != nil {
				t.Fatal(err)
			}
		}
	}
	before := g.state(t, ctx)
	s := g.stranger(t, g.r1, "_INBOX_r1")

	consumer, err := json.Marshal(map[string]any{"stream_name": VerdictStream("f"), "config": map[string]any{
		"name": "x", "deliver_subject": "up.f.r2.tie", "filter_subject": "down.f.r1.verdict", "ack_policy": "none",
	}})
	if err != nil {
		t.Fatal(err)
	}
	publishes, subscribes := 0, 0
	corr, verdict, ties := CorrectionStream("f"), VerdictStream("f"), TieStream("f", "r1")
	for _, c := range []struct{ subject, body string }{
		{"up.f.r2.tie", "as r2"}, {"up.f.r2.hb", "as r2"}, {"up.f.r2.summary", "as r2"}, {"up.f.r2.summary.head", "as r2"}, {"up.g.r1.tie", "another fleet"},
		{"up.f.r1", ""}, {"up.f.r1.other", ""}, {"up.f.r1.tie.below", ""},
		{"down.f.r1.corr", "as the base"}, {"down.f.r2.corr", "as the base"}, {"down.f.r1.verdict", "as the base"}, {"down.f._lease", "as the base"}, {"rule.f", "as a person"},
		{"$JS.API.DIRECT.GET." + corr + ".down.f.r2.corr", ""}, {"$JS.API.DIRECT.GET." + corr + ".down.f._lease", ""},
		{"$JS.API.DIRECT.GET." + corr, `{"last_by_subj":"down.f.r2.corr"}`}, {"$JS.API.DIRECT.GET." + corr, `{"seq":1}`},
		{"$JS.API.STREAM.MSG.GET." + corr, `{"last_by_subj":"down.f.r2.corr"}`}, {"$JS.API.DIRECT.GET." + SummaryStream("f") + ".up.f.r2.summary", ""},
		{"$JS.API.STREAM.INFO." + corr, ""}, {"$JS.API.STREAM.INFO." + ties, ""}, {"$JS.API.STREAM.LIST", ""}, {"$JS.API.STREAM.NAMES", ""}, {"$JS.API.INFO", ""},
		{"$JS.API.STREAM.CREATE.x", `{"name":"x","subjects":["up.g.>"]}`}, {"$JS.API.STREAM.UPDATE." + ties, `{}`}, {"$JS.API.STREAM.DELETE." + ties, ""},
		{"$JS.API.STREAM.PURGE." + ties, ""}, {"$JS.API.STREAM.PURGE." + corr, ""}, {"$JS.API.STREAM.MSG.DELETE." + corr, `{"seq":1}`}, {"$JS.API.STREAM.SNAPSHOT." + corr, `{}`},
		{"$JS.API.CONSUMER.CREATE." + verdict, string(consumer)}, {"$JS.API.CONSUMER.CREATE." + verdict + ".x", string(consumer)},
		{"$JS.API.CONSUMER.CREATE." + verdict + ".x.down.f.r1.verdict", string(consumer)}, {"$JS.API.CONSUMER.DURABLE.CREATE." + verdict + ".x", string(consumer)},
		{"$JS.API.CONSUMER.DELETE." + verdict + ".r1", ""}, {"$JS.API.CONSUMER.DELETE." + verdict + ".r2", ""}, {"$JS.API.CONSUMER.PAUSE." + verdict + ".r2", `{}`},
		{"$JS.API.CONSUMER.INFO." + verdict + ".r2", ""}, {"$JS.API.CONSUMER.MSG.NEXT." + verdict + ".r2", "1"}, {"$JS.API.CONSUMER.LIST." + verdict, ""},
		{"$JS.ACK." + verdict + ".r2.1.1.1.1.1", "+ACK"}, {"$SYS.REQ.SERVER.PING", ""}, {"$SYS.REQ.ACCOUNT.PING.CONNZ", ""}, {"_INBOX_r2.x", "an answer"}, {"_INBOX_base.x", "an answer"},
		{"anything", ""},
	} {
		if err := s.PublishRequest(c.subject, "_INBOX_r1.answer", []byte(c.body)); err != nil {
			t.Fatal(err)
		}
		publishes++
		s.refused(t, c.subject)
	}
	for _, subject := range []string{
		"down.f.r2.corr", "down.f.r2.want", "down.f.r2.>", "down.f.*.corr", "down.f.>", "down.>", ">", "*", "down.f.r1.>", "down.f._lease", "rule.f", "up.f.r2.hb", "up.f.>", "up.f.r1.hb",
		"_INBOX_r2.>", "_INBOX_base.>", "_INBOX.>", "$JS.>", "$JS.API.>", "$JS.ACK.>", "$JS.EVENT.>", "$SYS.>",
	} {
		subscribes++
		if _, err := s.Subscribe(subject, func(m *nats.Msg) { t.Errorf("%s brought %s %q", subject, m.Subject, m.Data) }); err != nil {
			t.Fatal(err)
		}
		s.refused(t, subject)
	}
	if err := s.Flush(); err != nil {
		t.Fatal(err)
	}
	if after := g.state(t, ctx); after != before {
		t.Errorf("the streams changed from\n%s\nto\n%s", before, after)
	}
	if len(s.errors) > 0 {
		t.Errorf("more was refused: %v", <-s.errors)
	}
	want := []Refusal{{Robot: "r1", What: "publish", N: uint64(publishes)}, {Robot: "r1", What: "subscribe", N: uint64(subscribes)}}
	if diff := cmp.Diff(want, g.Refused()); diff != "" {
		t.Errorf("counted (-want +got):\n%s", diff)
	}
}

// A client cannot put its refusals on another robot's account, nor fill the log.
func TestRefusalsAreReadRight(t *testing.T) {
	k1, k2 := newUser(t).Public(), newUser(t).Public()
	told := 0
	d := &doorkeeper{warn: func(string) { told++ }, count: map[Refusal]uint64{}, told: map[Refusal]time.Time{}}
	d.setRobots(map[string]string{"r1": k1, "r2": k2})
	at := `127.0.0.1:1 - cid:31 - `
	for text, want := range map[string]Refusal{
		at + `"v1:go" - "$G/nkey:` + k1 + `" - Publish Violation - Subject "up.f.r2.hb"`:                                        {Robot: "r1", What: "publish"},
		at + `"v1:go" - "$G/nkey:` + k1 + `" - Subscription Violation - Subject ">", SID 1`:                                     {Robot: "r1", What: "subscribe"},
		at + `"v1" - "$G/nkey:` + k2 + `" - Publish Violation - x:go" - "$G/nkey:` + k1 + `" - Publish Violation - Subject "a"`: {Robot: "r1", What: "publish"},
		at + `"v1:go" - "$G/nkey:` + k1 + `" - Publish Violation - Subject "$G/nkey:` + k2 + `"`:                                {Robot: "r1", What: "publish"},
		at + `"v1:go" - "$G/nkey:` + newUser(t).Public() + `" - Publish Violation - Subject "a"`:                                {What: "publish"},
		at + `authentication error`:                                    {What: "connect"},
		at + `authentication error - Nkey "` + k2 + `"`:                {What: "connect"},
		at + `TLS handshake error: remote error: tls: bad certificate`: {What: "connect"},
		`Filesystem is read only`:                                      {},
	} {
		got, ok := d.refusal(text)
		if ok != (want != Refusal{}) || ok && got != want {
			t.Errorf("%s: %+v, %v, want %+v", text, got, ok, want)
		}
	}
	for range 1000 {
		d.Errorf("%s", at+`authentication error`)
		d.Errorf("%s", at+`"v1:go" - "$G/nkey:`+k1+`" - Publish Violation - Subject "a"`)
	}
	d.Warnf("something else")
	d.Warnf("something else")
	if told != 4 || d.count[Refusal{What: "connect"}] != 1000 || d.count[Refusal{Robot: "r1", What: "publish"}] != 1000 {
		t.Errorf("told %d times, counted %v", told, d.count)
	}
}

// Where a reply subject leads is not looked at by the server. What lands there is an acknowledgement, or what the base wrote for the
// robot itself: no text of its choice. A pull brings nothing into a stream.
func TestReplySubjectsCarryNoTextOfTheRobot(t *testing.T) {
	g, ctx := guard(t), deadline(t)
	if err := g.link.PublishNewest(ctx, "down.f.r1.corr", []byte("for r1")); err != nil {
		t.Fatal(err)
	}
	if _, err := g.link.Publish(ctx, "down.f.r1.verdict", "1", []byte("verdict for r1")); err != nil {
		t.Fatal(err)
	}
	s := g.stranger(t, g.r1, "_INBOX_r1")
	for n, subject := range []string{"up.f.r2.tie", "up.f.r2.summary", "up.f.r2.summary.head", "down.f.r2.corr", "down.f._lease"} {
		stream := map[bool]string{true: SummaryStream("f"), false: CorrectionStream("f")}[strings.Contains(subject, "summary")]
		if strings.HasSuffix(subject, "tie") {
			stream = TieStream("f", "r2")
		}
		landed, h := inbox()
		stop, _, err := g.link.Replay(ctx, stream, func(at string, _ int64, b []byte) {
			if at == subject {
				h(at, b)
			}
		})
		if err != nil {
			t.Fatal(err)
		}
		text := fmt.Sprintf("text of r1, number %d", n)
		if err := s.PublishRequest("up.f.r1.tie", subject, []byte(text)); err != nil {
			t.Fatal(err)
		}
		select {
		case m := <-landed:
			if !strings.HasPrefix(m.payload, `{"stream":"`+TieStream("f", "r1")) || strings.Contains(m.payload, "text of r1") {
				t.Errorf("on %s landed %q", subject, m.payload)
			}
		case <-time.After(longest):
			t.Errorf("nothing on %s: the server looks at reply subjects by now, and the comment of Access is out of date", subject)
		}
		if err := s.PublishRequest("$JS.API.DIRECT.GET."+CorrectionStream("f")+".down.f.r1.corr", subject, nil); err != nil {
			t.Fatal(err)
		}
		expect(t, landed, message{subject, "for r1"})
		if err := s.PublishRequest("$JS.API.CONSUMER.MSG.NEXT."+VerdictStream("f")+".r1", subject, []byte("1")); err != nil {
			t.Fatal(err)
		}
		if err := s.Flush(); err != nil {
			t.Fatal(err)
		}
		if err := g.link.PublishNewest(ctx, subject, []byte("the end")); err != nil {
			t.Fatal(err)
		}
		expect(t, landed, message{subject, "the end"})
		stop()
	}
	if len(s.errors) > 0 {
		t.Errorf("refused: %v", <-s.errors)
	}
}

func TestWhoIsNotLetIn(t *testing.T) {
	g := guard(t)
	stolen := newUser(t)
	for _, c := range []struct {
		name, want string
		o          ClientOptions
	}{
		{"no certificates", "unknown authority", ClientOptions{Key: g.r1}},
		{"no key", "Authorization Violation", ClientOptions{Roots: g.roots}},
		{"unknown key", "Authorization Violation", ClientOptions{Roots: g.roots, Key: stolen}},
		{"key of another", "Authorization Violation", ClientOptions{Roots: g.roots, Key: pretender{stolen, g.r1.Public()}}},
	} {
		warnings := make(chan error, 100)
		c.o.Name = "r1"
		c.o.Warn = func(err error) { warnings <- err }
		c.o.Connected = func(up bool) {
			if up {
				t.Errorf("%s: let in", c.name)
			}
		}
		client, err := Dial(g.URL(), c.o)
		if err != nil {
			t.Fatal(err)
		}
		for told := false; !told; {
			select {
			case err := <-warnings:
				told = strings.Contains(err.Error(), c.want)
				if !told {
					t.Errorf("%s: %v", c.name, err)
				}
			case <-time.After(longest):
				t.Fatalf("%s: not told", c.name)
			}
		}
		client.Close()
	}
	if got := g.Refused(); len(got) != 1 || got[0].Robot != "" || got[0].What != "connect" || got[0].N < 4 {
		t.Errorf("counted %+v", got)
	}
	// In the process of the server a key is needed too.
	conn, err := g.nats.InProcessConn()
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close()
	conn.SetDeadline(time.Now().Add(longest))
	answers := bufio.NewScanner(conn)
	answers.Scan() // who the server is
	if _, err := conn.Write([]byte("CONNECT {}\r\n")); err != nil {
		t.Fatal(err)
	}
	if answers.Scan(); answers.Text() != "-ERR 'Authorization Violation'" {
		t.Errorf("in the process, without a key: %q, %v", answers.Text(), answers.Err())
	}
}

// pretender says that it has another key.
type pretender struct {
	user
	public string
}

func (p pretender) Public() string { return p.public }

// A client that has the certificate does not talk to a server without TLS.
func TestNoTalkWithoutTLS(t *testing.T) {
	_, roots := certificate(t)
	open := start(t, Options{Listen: "127.0.0.1:0"})
	warnings := make(chan error, 100)
	c, err := Dial(open.URL(), ClientOptions{Name: "r1", Roots: roots, Warn: func(err error) { warnings <- err }, Connected: func(up bool) {
		if up {
			t.Error("connected")
		}
	}})
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	select {
	case err := <-warnings:
		if !errors.Is(err, nats.ErrSecureConnWanted) {
			t.Error(err)
		}
	case <-time.After(longest):
		t.Error("not told")
	}
}

// Robots come and go while others work.
func TestSetRobotsDisturbsNobody(t *testing.T) {
	g, ctx := guard(t), deadline(t)
	r1, link1, warnings1 := g.robot(t, "r1", g.r1)
	_, link2, warnings2 := g.robot(t, "r2", g.r2)
	r3key := newUser(t)
	_, link3, _ := g.robot(t, "r3", r3key) // is there before it is enrolled
	awaitLink(t, link1, true)
	awaitLink(t, link2, true)
	got, h := inbox()
	stop, err := r1.Follow(CorrectionStream("f"), "down.f.r1.corr", h)
	if err != nil {
		t.Fatal(err)
	}
	defer stop()

	if err := g.SetRobots(map[string]string{"r1": g.r1.Public(), "r2": g.r2.Public(), "r3": r3key.Public()}); err != nil {
		t.Fatal(err)
	}
	awaitLink(t, link3, true)
	if err := g.SetRobots(map[string]string{"r1": g.r1.Public(), "r3": r3key.Public()}); err != nil {
		t.Fatal(err)
	}
	awaitLink(t, link2, false)
	select {
	case err := <-warnings2:
		if !strings.Contains(strings.ToLower(err.Error()), "authorization violation") && !strings.Contains(strings.ToLower(err.Error()), "authentication") {
			t.Errorf("r2 was told %v", err)
		}
	case <-time.After(longest):
		t.Error("r2 was not told")
	}
	if err := g.link.PublishNewest(ctx, "down.f.r1.corr", []byte("still here")); err != nil {
		t.Fatal(err)
	}
	expect(t, got, message{"down.f.r1.corr", "still here"})
	if len(link1) > 0 || len(link3) > 0 || len(warnings1) > 0 {
		t.Errorf("r1 or r3 was disturbed: %d, %d, %d", len(link1), len(link3), len(warnings1))
	}
	if err := g.SetRobots(map[string]string{"r1": "nonsense"}); err == nil {
		t.Error("a key that is none was taken")
	}
	if _, err := r1.Publish(ctx, "up.f.r1.tie", "1", []byte("tie")); err != nil {
		t.Error("after a refusal:", err)
	}
	if err := start(t, Options{}).SetRobots(nil); err == nil {
		t.Error("robots of a server that lets everybody in")
	}
}

func TestAccessRefuses(t *testing.T) {
	cert, _ := certificate(t)
	base, r1 := newUser(t).Public(), newUser(t).Public()
	robots := map[string]string{"r1": r1}
	for want, a := range map[string]*Access{
		`fleet "f.g"`:                   {Fleet: "f.g", Base: base, Robots: robots, Certificate: cert},
		`public key of the base`:        {Fleet: "f", Base: "x", Robots: robots, Certificate: cert},
		`robot "*"`:                     {Fleet: "f", Base: base, Robots: map[string]string{"*": r1}, Certificate: cert},
		`public key of robot r1`:        {Fleet: "f", Base: base, Robots: map[string]string{"r1": r1[:10]}, Certificate: cert},
		`robot r1 has the key of the b`: {Fleet: "f", Base: base, Robots: map[string]string{"r1": base}, Certificate: cert},
		`robot r2 has the key of robot`: {Fleet: "f", Base: base, Robots: map[string]string{"r1": r1, "r2": r1}, Certificate: cert},
		`no certificate`:                {Fleet: "f", Base: base, Robots: robots},
	} {
		dir := t.TempDir()
		s, err := Start(Options{StoreDir: dir, Listen: "127.0.0.1:0", Access: a})
		if err == nil {
			s.Close()
		}
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("error %v, want %s", err, want)
		}
		if left, err := os.ReadDir(dir); err != nil || len(left) > 0 {
			t.Errorf("%s: left %v, %v", want, left, err)
		}
	}
}
