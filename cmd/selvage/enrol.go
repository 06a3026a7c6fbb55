package main

import (
	"context"
	"fmt"
	"strings"
	"time"

	"selvage/internal/enrol"
)

type enrolCmd struct {
	Fleet     string   `arg:"" help:"Name of the fleet."`
	Robots    []string `placeholder:"NAME,..." xor:"work" required:"" help:"Enrol a new fleet with these robots."`
	Add       []string `placeholder:"NAME,..." xor:"work" required:"" help:"Enrol further robots."`
	Revoke    []string `placeholder:"NAME,..." xor:"work" required:"" help:"Take the right to speak from robots. What the base had from them before stays, until it is ruled out."`
	Host      []string `placeholder:"NAME,..." help:"Of a new fleet: host names and addresses at which robots reach the base, the one they use first."`
	Port      int      `default:"4222" placeholder:"N" help:"Of a new fleet: port of the bus (default ${default})."`
	Dimension int      `default:"3" placeholder:"N" help:"Of a new fleet: dimension of its surveys, 2 or 3 (default ${default})."`
	Days      int      `default:"730" placeholder:"N" help:"Of a new fleet: for how many days the certificate of the base is good (default ${default})."`
	Out       string   `short:"o" placeholder:"FOLDER" help:"Folder of the fleet (default FLEET-keys)."`
}

func (enrolCmd) Help() string {
	return `Makes a key for the base and for each robot, the fleet's own certificate authority, and for each computer a folder with all that goes onto it: configuration, secret, certificates, a unit for systemd, and a README that tells what to copy where. Only their owner can read what is written. Nothing is written over, and the folders of others stay as they are.

Keep the folder where only you can read it. Of a robot that was added or revoked the base learns from base/robots.yaml.

Example:

  selvage enrol mine-3 --robots r1,r2 --host base.site,10.0.0.2
  selvage enrol mine-3 --add r7
  selvage enrol mine-3 --revoke r2
`
}

// Run implements the verb.
func (c *enrolCmd) Run(ctx context.Context, con *console) error {
	folder := c.Out
	if folder == "" {
		folder = c.Fleet + "-keys"
	}
	if err := ctx.Err(); err != nil {
		return err
	}
	now := time.Now().UTC()
	if len(c.Robots) > 0 {
		p := enrol.Plan{
			Fleet: c.Fleet, Robots: c.Robots, Hosts: c.Host, Port: c.Port, Dimension: c.Dimension, Validity: time.Duration(min(c.Days, 1<<15)) * 24 * time.Hour,
		}
		if err := enrol.New(folder, p, now); err != nil {
			return err
		}
		con.finding("The base and %s of fleet %s are enrolled in %s; the certificate of the base is good until %s, for %s.",
			listed(c.Robots), c.Fleet, folder, now.Add(p.Validity).Format(time.DateOnly), listed(c.Host))
		fmt.Fprintf(con.out, "Each folder in it goes onto one computer, as its README tells; %s/authority onto none.\n", folder)
		return nil
	}
	if len(c.Host) > 0 {
		return badInput("--host is of a new fleet: the certificate of the base stays as it is when robots are added or revoked")
	}
	if len(c.Add) > 0 {
		if err := enrol.Add(folder, c.Fleet, c.Add, now); err != nil {
			return err
		}
		con.finding("Enrolled %s in fleet %s.", listed(c.Add), c.Fleet)
	} else {
		if err := enrol.Revoke(folder, c.Fleet, c.Revoke, now); err != nil {
			return err
		}
		con.finding("Revoked %s of fleet %s: what the base stores from %s on does not count.", listed(c.Revoke), c.Fleet, now.Format(time.RFC3339))
	}
	fmt.Fprintf(con.out, "Copy %s/base/robots.yaml to the base and have it read again: only then it takes effect.\n", folder)
	return nil
}

// listed writes a list as people do.
func listed(all []string) string {
	last := len(all) - 1
	if last < 1 {
		return strings.Join(all, "")
	}
	return strings.Join(all[:last], ", ") + " and " + all[last]
}
