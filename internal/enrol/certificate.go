package enrol

import (
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"fmt"
	"math/big"
	"net"
	"net/netip"
	"regexp"
	"slices"
	"strings"
	"time"
)

// early is how long before it is made a certificate begins to count: the clock of a robot may be behind.
const early = 48 * time.Hour

// hosts are the names and addresses at which robots reach the base.
type hosts struct {
	names []string
	ips   []net.IP
}

// hostForm is a host name by RFC 1123, section 2.1: labels of letters, digits and inner hyphens.
var hostForm = regexp.MustCompile(`^([A-Za-z0-9]([A-Za-z0-9-]{0,61}[A-Za-z0-9])?\.)*[A-Za-z0-9]([A-Za-z0-9-]{0,61}[A-Za-z0-9])?$`)

func parseHosts(all []string) (h hosts, err error) {
	for _, s := range all {
		if ip, err := netip.ParseAddr(s); err == nil {
			if ip.Zone() != "" || ip.IsUnspecified() || ip.IsMulticast() {
				return hosts{}, fmt.Errorf("host %q: expected an address that robots can reach, without a zone", s)
			}
			h.ips = append(h.ips, ip.Unmap().AsSlice())
			continue
		}
		if len(s) > 253 || !hostForm.MatchString(s) || strings.Trim(s, "0123456789.") == "" {
			return hosts{}, fmt.Errorf("host %q: expected a host name such as base.site, or an IP address", s)
		}
		h.names = append(h.names, s)
	}
	if len(all) == 0 {
		return hosts{}, fmt.Errorf("no host was given: expected the names or addresses at which robots reach the base")
	}
	return h, nil
}

// listen is the address to listen at for all of them.
func (h *hosts) listen() string {
	if slices.ContainsFunc(h.ips, func(ip net.IP) bool { return ip.To4() == nil }) {
		return "::"
	}
	return "0.0.0.0"
}

// certificates are PEM texts.
type certificates struct {
	authority, authorityKey []byte
	server, serverKey       []byte
}

// certify makes an authority that can sign for these hosts and nothing else, and the certificate of the server.
func certify(fleet string, h hosts, now, until time.Time) (*certificates, error) {
	authorityKey, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		return nil, err
	}
	serverKey, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		return nil, err
	}
	authority := &x509.Certificate{
		SerialNumber: serial(), Subject: pkix.Name{CommonName: "authority of fleet " + fleet}, NotBefore: now.Add(-early), NotAfter: until,
		IsCA: true, BasicConstraintsValid: true, MaxPathLenZero: true, KeyUsage: x509.KeyUsageCertSign, ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth},
		PermittedDNSDomainsCritical: true, PermittedDNSDomains: h.names,
	}
	for _, ip := range h.ips {
		authority.PermittedIPRanges = append(authority.PermittedIPRanges, &net.IPNet{IP: ip, Mask: net.CIDRMask(8*len(ip), 8*len(ip))})
	}
	// A kind of name that no host has would be free otherwise (RFC 5280, section 4.2.1.10).
	if len(h.names) == 0 {
		authority.PermittedDNSDomains = []string{"invalid"}
	}
	if len(h.ips) == 0 {
		for _, bytes := range []int{net.IPv4len, net.IPv6len} {
			authority.ExcludedIPRanges = append(authority.ExcludedIPRanges, &net.IPNet{IP: make(net.IP, bytes), Mask: make(net.IPMask, bytes)})
		}
	}
	server := &x509.Certificate{
		SerialNumber: serial(), Subject: pkix.Name{CommonName: "base of fleet " + fleet}, NotBefore: now.Add(-early), NotAfter: until,
		BasicConstraintsValid: true, KeyUsage: x509.KeyUsageDigitalSignature, ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth},
		DNSNames: h.names, IPAddresses: h.ips,
	}
	signed, err := sign(authority, authority, authorityKey, authorityKey)
	if err != nil {
		return nil, err
	}
	if authority, err = x509.ParseCertificate(signed); err != nil { // now it has the identifier that the other one names
		return nil, err
	}
	own, err := sign(server, authority, serverKey, authorityKey)
	if err != nil {
		return nil, err
	}
	c := &certificates{authority: armour(signed), server: armour(own)}
	if c.authorityKey, err = secret(authorityKey); err != nil {
		return nil, err
	}
	c.serverKey, err = secret(serverKey)
	return c, err
}

func sign(template, parent *x509.Certificate, key, by *ecdsa.PrivateKey) (der []byte, err error) {
	if der, err = x509.CreateCertificate(rand.Reader, template, parent, key.Public(), by); err != nil {
		return nil, fmt.Errorf("certificate: %w", err)
	}
	return der, nil
}

func armour(certificate []byte) []byte {
	return pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: certificate})
}

func secret(key *ecdsa.PrivateKey) ([]byte, error) {
	der, err := x509.MarshalPKCS8PrivateKey(key)
	if err != nil {
		return nil, fmt.Errorf("key of a certificate: %w", err)
	}
	defer clear(der)
	return pem.EncodeToMemory(&pem.Block{Type: "PRIVATE KEY", Bytes: der}), nil
}

// serial is a random serial number of 127 bits.
func serial() *big.Int {
	b := make([]byte, 16)
	rand.Read(b) // never fails
	b[0] = b[0]&0x7f | 1
	return new(big.Int).SetBytes(b)
}
