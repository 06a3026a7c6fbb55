package enrol

import (
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"

	"selvage/internal/config"
	"selvage/internal/keys"
)

// Plan says what a fleet is to be.
type Plan struct {
	Fleet     string
	Robots    []string
	Hosts     []string // names and addresses of the base; robots use the first
	Port      int
	Dimension int           // of the survey, 2 or 3
	Validity  time.Duration // of the certificates, from now
}

// MaxValidity bounds the validity of certificates.
const MaxValidity = 20 * 366 * 24 * time.Hour

// New makes the folder of a fleet. It must not be there yet.
func New(folder string, p Plan, now time.Time) error {
	h, err := parseHosts(p.Hosts)
	switch {
	case err != nil:
		return err
	case !nameForm.MatchString(p.Fleet):
		return fmt.Errorf("fleet %q: expected %s", p.Fleet, nameRule)
	case p.Port < 1 || p.Port > 65535:
		return fmt.Errorf("port %d: expected 1 to 65535", p.Port)
	case p.Dimension != 2 && p.Dimension != 3:
		return fmt.Errorf("dimension %d: expected 2 or 3", p.Dimension)
	case p.Validity < 24*time.Hour || p.Validity > MaxValidity:
		return fmt.Errorf("validity of %d days: expected 1 to %d", p.Validity/(24*time.Hour), MaxValidity/(24*time.Hour))
	case len(p.Robots) == 0:
		return errors.New("no robot was given")
	}
	if err := checkRobots(p.Robots, nil); err != nil {
		return err
	}
	now = now.UTC().Truncate(time.Second)
	c, err := certify(p.Fleet, h, now, now.Add(p.Validity))
	if err != nil {
		return err
	}
	return build(folder, func(folder string) error {
		authority, base := filepath.Join(folder, "authority"), filepath.Join(folder, "base")
		for _, f := range []string{authority, base, filepath.Join(folder, "robots")} {
			if err := makeFolder(f); err != nil {
				return err
			}
		}
		public, err := keys.Create(filepath.Join(base, "base.seed"))
		if err != nil {
			return err
		}
		r := &config.Roster{Fleet: p.Fleet, Base: public, URL: "tls://" + net.JoinHostPort(p.Hosts[0], strconv.Itoa(p.Port))}
		for _, robot := range p.Robots {
			f := filepath.Join(folder, "robots", robot)
			if err := makeFolder(f); err != nil {
				return err
			}
			if err := addRobot(f, r, robot, p.Dimension, c.authority, now); err != nil {
				return err
			}
		}
		roster, err := r.Marshal()
		if err != nil {
			return err
		}
		words := words{
			"FLEET": p.Fleet, "LISTEN": net.JoinHostPort(h.listen(), strconv.Itoa(p.Port)), "PORT": strconv.Itoa(p.Port), "DIMENSION": strconv.Itoa(p.Dimension), "HOSTS": strings.Join(p.Hosts, ", "),
			"UNTIL": now.Add(p.Validity).Format(time.DateOnly),
		}
		for path, text := range map[string][]byte{
			"authority/ca.key": c.authorityKey, "authority/ca.crt": c.authority, "authority/README": words.fill("authority/README"),
			"base/ca.crt": c.authority, "base/server.crt": c.server, "base/server.key": c.serverKey, "base/robots.yaml": roster,
			"base/base.yaml": words.fill("base/base.yaml"), "base/selvage-base.service": words.fill("base/selvage-base.service"), "base/README": words.fill("base/README"),
		} {
			if err := put(filepath.Join(folder, path), text); err != nil {
				return err
			}
		}
		return nil
	})
}

// addRobot makes the key of a robot, fills its folder and enters it into a roster.
func addRobot(folder string, r *config.Roster, robot string, dimension int, authority []byte, now time.Time) error {
	public, err := keys.Create(filepath.Join(folder, "robot.seed"))
	if err != nil {
		return err
	}
	r.Robots = append(r.Robots, config.Robot{Name: robot, Key: public, Enrolled: now.UTC().Truncate(time.Second)})
	words := words{"FLEET": r.Fleet, "ROBOT": robot, "URL": r.URL, "BASE": r.Base, "DIMENSION": strconv.Itoa(dimension)}
	if err := put(filepath.Join(folder, "ca.crt"), authority); err != nil {
		return err
	}
	for _, name := range []string{"agent.yaml", "selvage-agent.service", "README"} {
		if err := put(filepath.Join(folder, name), words.fill("robot/"+name)); err != nil {
			return err
		}
	}
	return nil
}

// Add enrols further robots in a fleet, or robots anew whose keys were revoked. The folders of others stay as they are.
func Add(folder, fleet string, robots []string, now time.Time) error {
	return change(folder, fleet, func(r *config.Roster) (undo func() error, err error) {
		if err := checkRobots(robots, r.Good()); err != nil {
			return nil, err
		}
		base, err := config.ReadBase(filepath.Join(folder, "base", "base.yaml"))
		if err != nil {
			return nil, err
		}
		authority, err := os.ReadFile(filepath.Join(folder, "base", "ca.crt"))
		if err != nil {
			return nil, err
		}
		for _, robot := range robots {
			err := absent(filepath.Join(folder, "robots", robot))
			if errors.Is(err, errExists) && !slices.Contains(r.Names(), robot) {
				return nil, fmt.Errorf("%w; nobody of that name is enrolled: it is what an interruption left, remove it and try again", err)
			}
			if err != nil {
				return nil, err
			}
		}
		var made []string
		undo = func() error {
			var all error
			for _, f := range made {
				all = errors.Join(all, os.RemoveAll(f))
			}
			return all
		}
		for _, robot := range robots {
			path := filepath.Join(folder, "robots", robot)
			if err := build(path, func(f string) error { return addRobot(f, r, robot, base.Dimension, authority, now) }); err != nil {
				return undo, err
			}
			made = append(made, path)
		}
		return undo, nil
	})
}

// Revoke takes the right to speak from robots. What they said before stays.
func Revoke(folder, fleet string, robots []string, now time.Time) error {
	return change(folder, fleet, func(r *config.Roster) (func() error, error) {
		good := r.Good()
		for _, robot := range robots {
			if good[robot] == "" {
				return nil, fmt.Errorf("robot %q: expected one that is enrolled and not revoked", robot)
			}
			for i := range r.Robots {
				if x := &r.Robots[i]; x.Key == good[robot] {
					x.Revoked = now.UTC().Truncate(time.Millisecond)
				}
			}
			delete(good, robot)
		}
		return nil, nil
	})
}

// change brings a roster up to date in one step. When that fails, what was made for it is undone.
func change(folder, fleet string, edit func(*config.Roster) (undo func() error, err error)) (err error) {
	unlock, err := lock(folder)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, unlock()) }()
	path := filepath.Join(folder, "base", "robots.yaml")
	r, err := config.ReadRoster(path)
	if err != nil {
		return err
	}
	if r.Fleet != fleet {
		return fmt.Errorf("%s is of fleet %s, not of %s", folder, r.Fleet, fleet)
	}
	undo, err := edit(r)
	if err == nil {
		var text []byte
		if text, err = r.Marshal(); err == nil {
			err = replace(path, text)
		}
	}
	if err != nil && undo != nil {
		err = errors.Join(err, undo())
	}
	return err
}

var nameForm = regexp.MustCompile(`^[A-Za-z0-9][A-Za-z0-9_-]{0,31}$`)

const nameRule = "1 to 32 letters, digits, _ or -, the first a letter or digit"

// checkRobots refuses names that are none, come twice or are taken. Case does not tell two names apart: they become folders.
func checkRobots(robots []string, good map[string]string) error {
	seen := map[string]bool{"base": true}
	for name := range good {
		seen[strings.ToLower(name)] = true
	}
	for _, robot := range robots {
		if !nameForm.MatchString(robot) {
			return fmt.Errorf("robot %q: expected %s", robot, nameRule)
		}
		if seen[strings.ToLower(robot)] {
			return fmt.Errorf("robot %q: the name is taken", robot)
		}
		seen[strings.ToLower(robot)] = true
	}
	return nil
}
