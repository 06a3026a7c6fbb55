package config

import (
	"fmt"
	"net"
	"net/url"
	"path/filepath"
	"regexp"
	"strconv"

	"github.com/nats-io/nkeys"
)

// Agent is what a robot is told.
type Agent struct {
	Fleet     string    `yaml:"fleet"`
	Robot     string    `yaml:"robot"`
	Dimension int       `yaml:"dimension"`          // of the survey, 2 or 3
	Bus       Link      `yaml:"bus"`                // where the base is
	Keys      AgentKeys `yaml:"keys,omitempty"`     // who it is
	Unsigned  bool      `yaml:"unsigned,omitempty"` // the fleet has no keys, and everybody in reach may say everything
	Journal   string    `yaml:"journal"`            // folder, made when missing
	Intake    string    `yaml:"intake"`             // path of the socket where the front end delivers, or stdin
	Output    string    `yaml:"output,omitempty"`   // path of the socket where consumers get the map; none when empty
	Metrics   string    `yaml:"metrics,omitempty"`  // host:port where figures can be asked for; none when empty
	Log       string    `yaml:"log"`                // text or json
	Pace      Pace      `yaml:"pace,omitempty"`     // of the link
}

// Link is a bus on another computer.
type Link struct {
	URL string `yaml:"url"`          // tls://HOST:PORT, or nats://HOST:PORT in a fleet without keys
	CA  string `yaml:"ca,omitempty"` // file with the certificate that signs that of the server
}

// AgentKeys are the keys that a robot has.
type AgentKeys struct {
	Seed string `yaml:"seed"` // file with its own
	Base string `yaml:"base"` // public key of the base
}

// Base is what a computer at the base is told.
type Base struct {
	Fleet     string   `yaml:"fleet"`
	Dimension int      `yaml:"dimension"`          // of the survey, 2 or 3
	Serve     Serve    `yaml:"serve,omitempty"`    // the bus runs here,
	Bus       Link     `yaml:"bus,omitempty"`      // or there
	Keys      BaseKeys `yaml:"keys,omitempty"`     // who may speak
	Unsigned  bool     `yaml:"unsigned,omitempty"` // the fleet has no keys, and everybody in reach may say everything
	Robots    []string `yaml:"robots,omitempty"`   // of a fleet without keys
	Holder    string   `yaml:"holder"`             // names this computer to the others at the base
	Standby   bool     `yaml:"standby,omitempty"`  // takes over when another one stops
	Page      string   `yaml:"page,omitempty"`     // host:port of the live page; none when empty
	Metrics   string   `yaml:"metrics,omitempty"`  // host:port where figures can be asked for; none when empty
	Log       string   `yaml:"log"`                // text or json
	Pace      Pace     `yaml:"pace,omitempty"`     // of the link
	Limits    Limits   `yaml:"limits,omitempty"`   // of the bus that runs here
}

// Serve is a bus that this computer runs.
type Serve struct {
	Listen      string `yaml:"listen"`                // host:port
	Store       string `yaml:"store"`                 // folder of the streams, made when missing
	Certificate string `yaml:"certificate,omitempty"` // file, PEM
	Key         string `yaml:"key,omitempty"`         // file with the secret key of the certificate, PEM
}

// BaseKeys are the keys that the base has.
type BaseKeys struct {
	Seed   string `yaml:"seed"`   // file with its own
	Roster string `yaml:"roster"` // file with the public keys of the robots, a Roster
}

// Limits bound what the bus takes; 0 leaves a limit as the program has it.
type Limits struct {
	StoreMiB    int `yaml:"store_mib,omitempty"`
	Connections int `yaml:"connections,omitempty"`
}

// Pace says how long agents and coordinator wait between two messages, and for an answer, as a multiple of what suits a thin radio link:
// 1, as is 0. On a cable or a good wireless network 0.1 makes the map come sooner. All computers of a fleet should have the same.
type Pace float64

// Scale applies it to a time in nanoseconds.
func (p Pace) Scale(ns int64) int64 {
	if p == 0 {
		return ns
	}
	return int64(float64(p) * float64(ns))
}

// ReadAgent reads agent.yaml.
func ReadAgent(path string) (*Agent, error) {
	return read(path, func(a *Agent, c *check) {
		c.names(a.Fleet, "fleet")
		c.robot(a.Robot, "robot")
		c.common(a.Dimension, a.Log, a.Metrics, a.Pace)
		c.link(&a.Bus, a.Unsigned)
		c.path("journal", &a.Journal)
		if a.Intake != "stdin" {
			c.path("intake", &a.Intake)
		}
		c.optional("output", &a.Output)
		if a.Unsigned {
			c.demand(a.Keys == AgentKeys{}, "keys", "keys", "none beside unsigned: true")
			return
		}
		c.path("keys.seed", &a.Keys.Seed)
		c.demand(nkeys.IsValidPublicUserKey(a.Keys.Base), "keys.base", quote(a.Keys.Base), "the public key of the base, U and 55 characters more (or unsigned: true)")
	})
}

// ReadBase reads base.yaml.
func ReadBase(path string) (*Base, error) {
	return read(path, func(b *Base, c *check) {
		c.names(b.Fleet, "fleet")
		c.common(b.Dimension, b.Log, b.Metrics, b.Pace)
		c.names(b.Holder, "holder")
		c.address("page", b.Page)
		serves := b.Serve != (Serve{})
		c.demand(serves != (b.Bus != Link{}), "bus", "both or none of serve and bus", "one of them")
		if serves {
			c.demand(address(b.Serve.Listen), "serve.listen", quote(b.Serve.Listen), "host:port")
			c.path("serve.store", &b.Serve.Store)
			if b.Unsigned {
				c.demand(b.Serve.Certificate == "" && b.Serve.Key == "", "serve.certificate", quote(b.Serve.Certificate), "none beside unsigned: true")
			} else {
				c.path("serve.certificate", &b.Serve.Certificate)
				c.path("serve.key", &b.Serve.Key)
			}
		} else {
			c.link(&b.Bus, b.Unsigned)
		}
		c.demand(b.Limits.StoreMiB >= 0 && b.Limits.StoreMiB <= 1<<24, "limits.store_mib", strconv.Itoa(b.Limits.StoreMiB), "0 to 16777216")
		c.demand(b.Limits.Connections >= 0 && b.Limits.Connections <= 1<<16, "limits.connections", strconv.Itoa(b.Limits.Connections), "0 to 65536")
		if b.Unsigned {
			c.demand(b.Keys == BaseKeys{}, "keys", "keys", "none beside unsigned: true")
			c.demand(len(b.Robots) > 0, "robots", "none", "the names of the robots")
			seen := map[string]bool{}
			for i, r := range b.Robots {
				at := "robots[" + strconv.Itoa(i) + "]"
				c.robot(r, at)
				c.demand(!seen[r], at, r+" a second time", "each robot once")
				seen[r] = true
			}
			return
		}
		c.demand(len(b.Robots) == 0, "robots", "names", "none: the roster has them (or unsigned: true)")
		c.path("keys.seed", &b.Keys.Seed)
		c.path("keys.roster", &b.Keys.Roster)
	})
}

var nameForm = regexp.MustCompile(`^[A-Za-z0-9][A-Za-z0-9_-]{0,31}$`)

const nameRule = "1 to 32 letters, digits, _ or -, the first a letter or digit"

func (c *check) names(s, field string) { c.demand(nameForm.MatchString(s), field, quote(s), nameRule) }

// robot is a name that the base does not use for itself.
func (c *check) robot(s, field string) {
	c.names(s, field)
	c.demand(s != "base", field, quote(s), "a name that is not kept for the base")
}

func (c *check) common(dimension int, log, metrics string, pace Pace) {
	c.demand(pace == 0 || pace >= 0.02 && pace <= 10, "pace", fmt.Sprint(float64(pace)), "0.02 to 10")
	c.demand(dimension == 2 || dimension == 3, "dimension", strconv.Itoa(dimension), "2 or 3")
	c.demand(log == "text" || log == "json", "log", quote(log), "text or json")
	c.address("metrics", metrics)
}

func (c *check) address(field, s string) {
	c.demand(s == "" || address(s), field, quote(s), "host:port, or nothing")
}

func address(s string) bool {
	_, port, err := net.SplitHostPort(s)
	n, bad := strconv.ParseUint(port, 10, 16)
	return err == nil && bad == nil && n > 0
}

func (c *check) link(l *Link, unsigned bool) {
	if unsigned {
		c.demand(secure(l.URL) || plain(l.URL, "nats"), "bus.url", quote(l.URL), "nats://HOST:PORT or tls://HOST:PORT")
		c.optional("bus.ca", &l.CA)
		return
	}
	c.demand(secure(l.URL), "bus.url", quote(l.URL), "tls://HOST:PORT")
	c.path("bus.ca", &l.CA)
}

func secure(s string) bool { return plain(s, "tls") }

// plain tells whether a URL is a scheme, a host and a port, and nothing more.
func plain(s, scheme string) bool {
	u, err := url.Parse(s)
	return err == nil && u.Scheme == scheme && u.Hostname() != "" && address(u.Host) && s == scheme+"://"+u.Host
}

// path completes the path in a field.
func (c *check) path(field string, p *string) {
	c.demand(*p != "", field, "nothing", "a path")
	c.optional(field, p)
}

func (c *check) optional(field string, p *string) {
	if *p != "" && !filepath.IsAbs(*p) {
		*p = filepath.Join(c.folder, *p)
	}
}
