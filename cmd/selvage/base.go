package main

import (
	"crypto/tls"
	"crypto/x509"
	"fmt"
	"net"
	"os"
	"time"

	"selvage/internal/bus"
	"selvage/internal/config"
	"selvage/internal/keys"
)

// base is a computer at the base, as its files say.
type base struct {
	config.Base
	pair   *keys.Pair     // its own; as the roster and its ring nil in a fleet without keys
	roster *config.Roster // who is enrolled by now
	ring   *keys.Ring
}

// readBase reads base.yaml and, where the fleet has keys, who is enrolled.
func readBase(path string) (*base, error) {
	c, err := config.ReadBase(path)
	if err != nil {
		return nil, err
	}
	b := &base{Base: *c}
	return b, b.enrolled()
}

// enrolled reads the roster. After an error the one before it still counts.
func (b *base) enrolled() error {
	if b.Unsigned {
		return nil
	}
	roster, err := config.ReadRoster(b.Keys.Roster)
	if err != nil {
		return err
	}
	if roster.Fleet != b.Fleet {
		return fmt.Errorf("%s: found fleet %s, expected %s", b.Keys.Roster, roster.Fleet, b.Fleet)
	}
	ring, err := roster.Ring()
	if err != nil {
		return fmt.Errorf("%s: %w", b.Keys.Roster, err)
	}
	b.roster, b.ring = roster, ring
	return nil
}

// identify loads the key of the base.
func (b *base) identify() (err error) {
	if b.Unsigned {
		return nil
	}
	if b.pair, err = keys.Load(b.Keys.Seed); err == nil && b.pair.Public() != b.roster.Base {
		err = fmt.Errorf("%s: found the key %s, expected that of the base in %s, %s", b.Keys.Seed, b.pair.Public(), b.Keys.Roster, b.roster.Base)
	}
	return err
}

// robots are those that belong to the fleet, the revoked ones too.
func (b *base) robots() []string {
	if b.Unsigned {
		return b.Robots
	}
	return b.roster.Names()
}

// serve starts the bus that runs here.
func (b *base) serve(con *console) (*bus.Server, error) {
	o := bus.Options{
		Listen: b.Serve.Listen, StoreDir: b.Serve.Store, Store: int64(b.Limits.StoreMiB) << 20, Connections: b.Limits.Connections,
		Warn: func(text string) { con.log.Warn().Msg(text) },
	}
	if !b.Unsigned {
		certificate, err := tls.LoadX509KeyPair(b.Serve.Certificate, b.Serve.Key)
		if err != nil {
			return nil, fmt.Errorf("%s, %s: %w", b.Serve.Certificate, b.Serve.Key, err)
		}
		if until := certificate.Leaf.NotAfter; time.Until(until) < 0 {
			return nil, fmt.Errorf("%s: good until %s, expected one that is good today: enrol the fleet anew", b.Serve.Certificate, until.Format(time.DateOnly))
		}
		o.Access = &bus.Access{Fleet: b.Fleet, Base: b.roster.Base, Robots: b.roster.Good(), Certificate: certificate}
	}
	free, err := net.Listen("tcp", b.Serve.Listen) // the server would try for ten seconds, and not say why it failed
	if err != nil {
		return nil, unavailable("serve.listen: %w", err)
	}
	free.Close()
	s, err := bus.Start(o)
	if err != nil {
		return nil, unavailable("%w", err)
	}
	con.log.Info().Str("url", s.URL()).Str("store", b.Serve.Store).Msg("the bus is open")
	return s, nil
}

// readmit reads again who is enrolled and tells the bus, if that runs here.
func (b *base) readmit(con *console, s *bus.Server) bool {
	err := b.enrolled()
	if err == nil && s != nil && !b.Unsigned {
		err = s.SetRobots(b.roster.Good())
	}
	if err != nil {
		con.log.Error().Err(err).Msg("the roster was not read again; what it said before still counts")
		return false
	}
	con.log.Info().Strs("robots", b.robots()).Msg("the roster was read again")
	return true
}

// authorities reads the certificate that signs that of a bus on another computer; none where no file is named.
func authorities(l config.Link) (*x509.CertPool, error) {
	if l.CA == "" {
		return nil, nil
	}
	text, err := os.ReadFile(l.CA)
	if err != nil {
		return nil, err
	}
	roots := x509.NewCertPool()
	if !roots.AppendCertsFromPEM(text) {
		return nil, fmt.Errorf("%s: found no certificate, expected one in PEM", l.CA)
	}
	return roots, nil
}
