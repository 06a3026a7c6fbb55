package bus

import (
	"context"
	"fmt"
	"time"

	"github.com/nats-io/nats.go/jetstream"
)

// Quotas in bytes. The server sets the whole quota of a stream aside, so that storeLimit holds the four streams of a fleet
// and the tie streams of 175 robots; 16 MiB are some 40 000 ties, or 60 000 rulings.
const (
	storeLimit   = int64(4 << 30)
	tieQuota     = 16 << 20
	newestQuota  = 512 << 20
	verdictQuota = 256 << 20
	ruleQuota    = 16 << 20
)

// BaseReader is the durable reader of ties and summaries that Prepare makes for the base.
const BaseReader = "coordinator"

// TieStream is the stream of the ties of one robot.
func TieStream(fleet, robot string) string { return "TIE+" + fleet + "+" + robot }

// SummaryStream is the stream of the newest summaries of a fleet.
func SummaryStream(fleet string) string { return "SUMMARY+" + fleet }

// CorrectionStream is the stream of the newest corrections and wants of a fleet, and of its lease.
func CorrectionStream(fleet string) string { return "CORR+" + fleet }

// VerdictStream is the stream of the verdicts of a fleet. Each robot has a durable reader in it, called by its name.
func VerdictStream(fleet string) string { return "VERDICT+" + fleet }

// RuleStream is the stream of what people have decided for a fleet. The base alone writes and reads it.
func RuleStream(fleet string) string { return "RULE+" + fleet }

// Prepare makes the streams and readers of a fleet and these robots, or brings them up to date. Names must be single
// tokens of a subject.
func (c *Client) Prepare(ctx context.Context, fleet string, robots ...string) error {
	newest := jetstream.StreamConfig{
		Storage: jetstream.FileStorage, MaxMsgsPerSubject: 1, AllowDirect: true, MaxBytes: newestQuota, Discard: jetstream.DiscardNew,
	}
	all := jetstream.StreamConfig{
		Storage: jetstream.FileStorage, Discard: jetstream.DiscardNew, Duplicates: 2 * time.Minute,
	}

	summaries := newest
	summaries.Name = SummaryStream(fleet)
	summaries.Subjects = []string{"up." + fleet + ".*.summary", "up." + fleet + ".*.summary.>"}

	corrections := newest
	corrections.Name = CorrectionStream(fleet)
	corrections.Subjects = []string{"down." + fleet + ".*.corr", "down." + fleet + ".*.want", "down." + fleet + "._lease"}
	corrections.AllowMsgTTL = true

	verdicts := all
	verdicts.Name, verdicts.MaxBytes = VerdictStream(fleet), verdictQuota
	verdicts.Subjects = []string{"down." + fleet + ".*.verdict"}

	rulings := all
	rulings.Name, rulings.MaxBytes = RuleStream(fleet), ruleQuota
	rulings.Subjects = []string{"rule." + fleet}

	streams := []jetstream.StreamConfig{summaries, corrections, verdicts, rulings}
	for _, r := range robots {
		ties := all
		ties.Name, ties.MaxBytes = TieStream(fleet, r), tieQuota
		ties.Subjects = []string{"up." + fleet + "." + r + ".tie"}
		streams = append(streams, ties)
	}
	for _, s := range streams {
		if _, err := c.js.CreateOrUpdateStream(ctx, s); err != nil {
			return fmt.Errorf("bus: stream %s: %w", s.Name, err)
		}
	}

	if err := c.reader(ctx, summaries.Name, BaseReader, ""); err != nil {
		return err
	}
	for _, r := range robots {
		if err := c.reader(ctx, TieStream(fleet, r), BaseReader, ""); err != nil {
			return err
		}
		if err := c.reader(ctx, verdicts.Name, r, "down."+fleet+"."+r+".verdict"); err != nil {
			return err
		}
	}
	return nil
}

// reader makes a durable reader that remembers what it has acknowledged.
func (c *Client) reader(ctx context.Context, stream, name, filter string) error {
	_, err := c.js.CreateOrUpdateConsumer(ctx, stream, jetstream.ConsumerConfig{
		Durable: name, AckPolicy: jetstream.AckExplicitPolicy, MaxAckPending: 5000, FilterSubject: filter,
	})
	if err != nil {
		return fmt.Errorf("bus: reader %s of %s: %w", name, stream, err)
	}
	return nil
}
