package bus

import (
	"context"
	"crypto/tls"
	"crypto/x509"
	"fmt"
	"strconv"
	"sync"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// ClientOptions say who a client is and whom it tells what happens to its connection.
type ClientOptions struct {
	Name      string               // of the robot, or of the base: a single token of a subject
	Warn      func(error)          // told what goes wrong out of any call, such as a refused permission; may be nil
	Connected func(connected bool) // told when the link goes and comes; may be nil

	Key   Key            // proves who it is; nil where the server lets everybody in
	Roots *x509.CertPool // who may have signed the certificate of the server; nil for a connection that anybody can read and change
}

// Key is the key of a client: an NKey of a user.
type Key interface {
	Public() string
	Sign(challenge []byte) ([]byte, error)
}

// Client is a connection to the bus. It is safe for use by several goroutines.
type Client struct {
	nc   *nats.Conn
	js   jetstream.JetStream
	warn func(error)

	mu        sync.Mutex
	followers map[*follower]struct{}
	failure   string // the last attempt to connect that was told of
	failed    time.Time
}

// Dial makes a client of a server elsewhere. It returns at once, and tries for ever when the server cannot be reached or does not
// let it in, which Warn is told.
func Dial(url string, o ClientOptions) (*Client, error) {
	if o.Roots == nil {
		return connect(url, o)
	}
	return connect(url, o, nats.Secure(&tls.Config{RootCAs: o.Roots, MinVersion: tls.VersionTLS13}))
}

func connect(url string, o ClientOptions, more ...nats.Option) (*Client, error) {
	if !token(o.Name) {
		return nil, fmt.Errorf("bus: client: found name %q, expected a single token of a subject", o.Name)
	}
	if o.Warn == nil {
		o.Warn = func(error) {}
	}
	if o.Connected == nil {
		o.Connected = func(bool) {}
	}
	c := &Client{warn: o.Warn, followers: map[*follower]struct{}{}}
	options := append([]nats.Option{
		nats.Name(o.Name), nats.CustomInboxPrefix(answers(o.Name)),
		nats.MaxReconnects(-1), nats.RetryOnFailedConnect(true), nats.ReconnectBufSize(-1),
		nats.ReconnectWait(500 * time.Millisecond), nats.ReconnectJitter(100*time.Millisecond, 100*time.Millisecond),
		nats.PingInterval(5 * time.Second), nats.MaxPingsOutstanding(2), nats.Timeout(3 * time.Second),
		nats.ErrorHandler(func(_ *nats.Conn, _ *nats.Subscription, err error) { o.Warn(err) }),
		nats.DisconnectErrHandler(func(*nats.Conn, error) { o.Connected(false) }),
		nats.ConnectHandler(func(*nats.Conn) { c.connected(); o.Connected(true); c.resume() }),
		nats.ReconnectHandler(func(*nats.Conn) { c.connected(); o.Connected(true); c.resume() }),
		nats.ReconnectErrHandler(func(_ *nats.Conn, err error) { c.apart(err) }), nats.IgnoreAuthErrorAbort(),
	}, more...)
	if o.Key != nil {
		options = append(options, nats.Nkey(o.Key.Public(), o.Key.Sign))
	}
	nc, err := nats.Connect(url, options...)
	if err != nil {
		return nil, fmt.Errorf("bus: %w", err)
	}
	js, err := jetstream.New(nc, jetstream.WithDefaultTimeout(patience(0)))
	if err != nil {
		nc.Close()
		return nil, fmt.Errorf("bus: %w", err)
	}
	c.nc, c.js = nc, js
	return c, nil
}

// apart tells why an attempt to connect failed: the same reason once, and no more often than every ten seconds.
func (c *Client) apart(err error) {
	c.mu.Lock()
	tell := c.failure != err.Error() && time.Since(c.failed) >= 10*time.Second
	if tell {
		c.failure, c.failed = err.Error(), time.Now()
	}
	c.mu.Unlock()
	if tell {
		c.warn(fmt.Errorf("bus: connect: %w", err))
	}
}

func (c *Client) connected() {
	c.mu.Lock()
	c.failure = ""
	c.mu.Unlock()
}

// Close ends the connection. Handlers are not called once it has returned, save for those that run at that moment.
func (c *Client) Close() { c.nc.Close() }

// Publish stores a message in the stream of its subject. With an id, a repeat within two minutes is not stored again, and
// duplicate is true: on a first attempt that means somebody else has used the id.
func (c *Client) Publish(ctx context.Context, subject, id string, payload []byte) (duplicate bool, err error) {
	ack, err := c.publish(ctx, subject, payload, jetstream.WithMsgID(id))
	return err == nil && ack.Duplicate, err
}

// PublishNewest stores a message in place of the one before it on its subject.
func (c *Client) PublishNewest(ctx context.Context, subject string, payload []byte) error {
	_, err := c.publish(ctx, subject, payload)
	return err
}

func (c *Client) publish(ctx context.Context, subject string, payload []byte, o ...jetstream.PublishOpt) (*jetstream.PubAck, error) {
	if !c.nc.IsConnected() { // the library would wait for the acknowledgement first
		return nil, fmt.Errorf("bus: publish %s: %w", subject, nats.ErrDisconnected)
	}
	ctx, cancel := context.WithTimeout(ctx, patience(len(payload)))
	defer cancel()
	ack, err := c.js.Publish(ctx, subject, payload, o...)
	if err != nil {
		return nil, fmt.Errorf("bus: publish %s: %w", subject, err)
	}
	return ack, nil
}

// patience is how long to wait for the acknowledgement of a message: a link of 0.5 Mbit/s delivers 64 kB in a second.
func patience(size int) time.Duration {
	return 4*time.Second + time.Duration(size>>16)*time.Second
}

// PublishHeartbeat sends a message to whoever listens at this moment. It is not stored and not acknowledged.
func (c *Client) PublishHeartbeat(subject string, payload []byte) error {
	if err := c.nc.Publish(subject, payload); err != nil {
		return fmt.Errorf("bus: publish %s: %w", subject, err)
	}
	return nil
}

// Newest returns the newest message of a subject in a stream and its sequence there; nil and 0 when there is none.
func (c *Client) Newest(ctx context.Context, stream, subject string) (payload []byte, sequence uint64, err error) {
	ctx, cancel := context.WithTimeout(ctx, patience(maxPayload))
	defer cancel()
	m, err := c.nc.RequestWithContext(ctx, "$JS.API.DIRECT.GET."+stream+"."+subject, nil)
	if err != nil {
		return nil, 0, fmt.Errorf("bus: newest %s: %w", subject, err)
	}
	switch status := m.Header.Get("Status"); status {
	case "":
	case "404":
		return nil, 0, nil
	default:
		return nil, 0, fmt.Errorf("bus: newest %s: %s %s", subject, status, m.Header.Get("Description"))
	}
	sequence, err = strconv.ParseUint(m.Header.Get(jetstream.SequenceHeader), 10, 64)
	if err != nil || m.Header.Get(jetstream.SubjectHeader) != subject {
		return nil, 0, fmt.Errorf("bus: newest %s: an answer without its sequence or of another subject", subject)
	}
	return m.Data, sequence, nil
}
