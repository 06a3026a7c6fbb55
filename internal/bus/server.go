package bus

import (
	"cmp"
	"crypto/tls"
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"strconv"
	"syscall"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"
)

// maxPayload is the largest message with its headers. The server advises against more.
const maxPayload = 8 << 20

// ErrStoreInUse means that another process runs a server on the same folder.
var ErrStoreInUse = errors.New("another process uses this store of the bus")

// Options say how to run the server.
type Options struct {
	Listen   string            // host:port to listen on, port 0 for any; "" lets only this process in
	StoreDir string            // folder of the streams, made when missing; required
	Warn     func(text string) // told what the server warns of, of what it refuses once a minute; may be nil

	Access      *Access // who may do what, over TLS; nil lets everybody do everything, which is for rehearsals and closed networks
	Store       int64   // bytes that all streams may take; 0 for 4 GiB
	Connections int     // at once; 0 for 1000
}

// Server is a NATS server in this process.
type Server struct {
	nats    *server.Server
	lock    *os.File
	options Options
	tls     *tls.Config
	door    *doorkeeper
}

// Start runs a server until Close.
func Start(o Options) (*Server, error) {
	if o.StoreDir == "" {
		return nil, errors.New("bus: no folder for the store was given")
	}
	var secure *tls.Config
	if o.Access != nil {
		secure = &tls.Config{Certificates: []tls.Certificate{o.Access.Certificate}, MinVersion: tls.VersionTLS13}
	}
	so, err := o.server(secure)
	if err != nil {
		return nil, err
	}
	lock, err := lockStore(o.StoreDir)
	if err != nil {
		return nil, fmt.Errorf("bus: %w", err)
	}
	ns, err := server.NewServer(so)
	if err != nil {
		lock.Close()
		return nil, fmt.Errorf("bus: %w", err)
	}
	s := &Server{nats: ns, lock: lock, options: o, tls: secure, door: &doorkeeper{warn: o.Warn, count: map[Refusal]uint64{}, told: map[Refusal]time.Time{}}}
	if o.Access != nil {
		s.door.setRobots(o.Access.Robots)
	}
	ns.SetLoggerV2(s.door, false, false, false)
	ns.Start()
	if !ns.ReadyForConnections(10 * time.Second) {
		s.Close()
		return nil, errors.New("bus: the server did not come up within 10 s")
	}
	return s, nil
}

// server writes the options as the library wants them.
func (o *Options) server(secure *tls.Config) (*server.Options, error) {
	so := &server.Options{
		ServerName: "base", NoSigs: true, DisableJetStreamBanner: true, MaxPayload: maxPayload,
		JetStream: true, StoreDir: o.StoreDir, JetStreamMaxStore: cmp.Or(o.Store, storeLimit), JetStreamMaxMemory: 64 << 20, SyncInterval: time.Second,
		PingInterval: 5 * time.Second, MaxPingsOut: 2, MaxConn: cmp.Or(o.Connections, 1000), DontListen: o.Listen == "", NoLog: true,
	}
	if a := o.Access; a != nil {
		if err := a.check(); err != nil {
			return nil, err
		}
		if len(a.Certificate.Certificate) == 0 && o.Listen != "" {
			return nil, errors.New("bus: no certificate of the server was given")
		}
		so.Nkeys, so.TLSConfig = a.users(), secure
	}
	if o.Listen == "" {
		return so, nil
	}
	host, port, err := net.SplitHostPort(o.Listen)
	if err != nil {
		return nil, fmt.Errorf("bus: listen: %w", err)
	}
	so.Host = host
	if so.Port, err = strconv.Atoi(port); err != nil || so.Port < 0 || so.Port > 65535 {
		return nil, fmt.Errorf("bus: listen: found port %q, expected 0 to 65535", port)
	}
	if so.Port == 0 {
		so.Port = server.RANDOM_PORT
	}
	return so, nil
}

// lockStore keeps others off the folder while the file is open. The server itself would share it and lose data.
func lockStore(dir string) (*os.File, error) {
	if err := os.MkdirAll(dir, 0o750); err != nil {
		return nil, err
	}
	f, err := os.OpenFile(filepath.Join(dir, "lock"), os.O_CREATE|os.O_RDWR, 0o640)
	if err != nil {
		return nil, err
	}
	if err := syscall.Flock(int(f.Fd()), syscall.LOCK_EX|syscall.LOCK_NB); err != nil {
		f.Close()
		if errors.Is(err, syscall.EWOULDBLOCK) {
			err = ErrStoreInUse
		}
		return nil, fmt.Errorf("%s: %w", dir, err)
	}
	return f, nil
}

// URL is where a client outside this process connects, "" when none can.
func (s *Server) URL() string {
	scheme := "nats://"
	if s.tls != nil {
		scheme = "tls://"
	}
	if a, ok := s.nats.Addr().(*net.TCPAddr); ok && a != nil {
		return scheme + a.String()
	}
	return ""
}

// Connect makes a client in the process of the server. It needs a key like any other, but no certificates.
func (s *Server) Connect(o ClientOptions) (*Client, error) {
	return connect("", o, nats.InProcessServer(s.nats))
}

// Close stops the server and leaves the store to others.
func (s *Server) Close() error {
	s.nats.Shutdown()
	s.nats.WaitForShutdown()
	return s.lock.Close()
}
