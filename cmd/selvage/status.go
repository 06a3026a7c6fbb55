package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"strconv"
	"time"

	"selvage/internal/config"
	"selvage/internal/report"
)

type statusCmd struct {
	Config string        `arg:"" help:"Configuration of the base, base.yaml: its metrics says where the coordinator answers."`
	Wait   time.Duration `placeholder:"TIME" help:"Wait so long, such as 10s, for a coordinator that is starting."`
	JSON   bool          `name:"json" help:"Print one JSON object instead of tables."`
}

func (statusCmd) Help() string {
	return `Asks the coordinator that runs with this configuration where the fleet stands: which sessions share a datum, how old the newest message of each robot is, which correction it has applied, for how many keyframes the base still waits, and which ties are in doubt, with what would settle each.

Example, a base on one desk that nobody has spoken to:

  echo '{fleet: desk, dimension: 2, unsigned: true, robots: [r1, r2], serve: {listen: "127.0.0.1:14225", store: desk-status}, holder: desk, metrics: "127.0.0.1:14226", log: text}' > desk-status.yaml
  timeout 3 selvage coordinate desk-status.yaml &
  selvage status desk-status.yaml --wait 3s
`
}

// Run implements the verb.
func (c *statusCmd) Run(ctx context.Context, con *console) error {
	b, err := config.ReadBase(c.Config)
	if err != nil {
		return err
	}
	host, port, err := net.SplitHostPort(b.Metrics)
	if err != nil {
		return badInput("%s: metrics: found nothing, expected host:port where the coordinator answers", c.Config)
	}
	if ip := net.ParseIP(host); host == "" || ip != nil && ip.IsUnspecified() {
		host = "localhost"
	}
	f, err := c.ask(ctx, "http://"+net.JoinHostPort(host, port)+"/status.json")
	if err != nil {
		return err
	}
	if f.Fleet != b.Fleet {
		return unavailable("%s: a coordinator of fleet %s answers there, expected %s", b.Metrics, f.Fleet, b.Fleet)
	}
	if c.JSON {
		e := json.NewEncoder(con.out)
		e.SetIndent("", "  ")
		return e.Encode(f)
	}
	return f.print(con)
}

// ask fetches the status; while there is time left it tries again when nobody leads or answers.
func (c *statusCmd) ask(ctx context.Context, url string) (*fleetStatus, error) {
	until := time.Now().Add(c.Wait)
	for {
		f, err := fetch(ctx, url)
		switch {
		case ctx.Err() != nil:
			return nil, ctx.Err()
		case err == nil && f.Leads, time.Now().After(until):
			return f, err
		}
		select {
		case <-ctx.Done():
			return nil, ctx.Err()
		case <-time.After(100 * time.Millisecond):
		}
	}
}

// maxStatus bounds an answer, in bytes.
const maxStatus = 256 << 20

func fetch(ctx context.Context, url string) (*fleetStatus, error) {
	ctx, cancel := context.WithTimeout(ctx, 30*time.Second)
	defer cancel()
	q, err := http.NewRequestWithContext(ctx, http.MethodGet, url, nil)
	if err != nil {
		return nil, badInput("%w", err)
	}
	client := http.Client{Transport: &http.Transport{Proxy: nil, DisableKeepAlives: true}}
	a, err := client.Do(q)
	if err != nil {
		return nil, unavailable("no coordinator answers: %w", err)
	}
	defer a.Body.Close()
	if a.StatusCode != http.StatusOK {
		return nil, unavailable("%s: %s", url, a.Status)
	}
	var f fleetStatus
	if err := json.NewDecoder(io.LimitReader(a.Body, maxStatus)).Decode(&f); err != nil {
		return nil, unavailable("%s: the answer is not a status: %w", url, err)
	}
	return &f, nil
}

func (f *fleetStatus) print(con *console) error {
	if !f.Leads {
		con.finding("%s waits to lead fleet %s: another coordinator speaks, or the bus is down.", f.Holder, f.Fleet)
		return nil
	}
	joined, sessions := 0, 0
	robots := report.Table{Caption: "Robots", Columns: []report.Column{
		{Name: "robot"}, {Name: "session", Right: true}, {Name: "datum"}, {Name: "last news", Unit: "s", Right: true}, {Name: "applied", Right: true}, {Name: "waiting for", Right: true},
	}}
	for i := range f.Robots {
		r := &f.Robots[i]
		news, applied, waiting := "none", r.Applied, strconv.Itoa(r.Waiting)
		if r.NewsS != nil {
			news = fmt.Sprintf("%.0f", *r.NewsS)
		}
		if applied == "" {
			applied = "none"
		}
		if r.Gaps {
			waiting += ", ties"
		}
		if len(r.Sessions) == 0 {
			robots.Rows = append(robots.Rows, []string{r.Robot, "none", "", news, applied, waiting})
		}
		for _, s := range r.Sessions {
			sessions++
			datum := "its own"
			if s.Joined {
				joined++
				datum = s.Datum
			}
			robots.Rows = append(robots.Rows, []string{r.Robot, strconv.Itoa(int(s.Session)), datum, news, applied, waiting})
		}
	}
	rest := "it has not come to rest"
	if f.Rests {
		rest = "it is at rest"
	}
	con.finding("Fleet %s, epoch %s: %d of %d sessions are joined; of %d ties %d are held, %d open and %d refused; %s.",
		f.Fleet, f.Epoch, joined, sessions, f.Ties.Held+f.Ties.Open+f.Ties.Refused, f.Ties.Held, f.Ties.Open, f.Ties.Refused, rest)
	fmt.Fprintf(con.out, "%s leads, term %d.\n", f.Holder, f.Term)
	err := con.table(robots)
	if len(f.Doubts) > 0 {
		doubts := report.Table{Caption: "In doubt", Columns: []report.Column{{Name: "tie"}, {Name: "from"}, {Name: "to"}, {Name: "why"}}}
		for _, d := range f.Doubts {
			doubts.Rows = append(doubts.Rows, []string{d.Tie, d.From, d.To, d.Reason})
		}
		err = errors.Join(err, con.table(doubts))
	}
	return err
}
