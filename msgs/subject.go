package msgs

import (
	"fmt"
	"strconv"
	"strings"
)

// Kinds of messages, as they stand in a subject.
const (
	KindHeartbeat  = "hb"
	KindTie        = "tie"
	KindSummary    = "summary"
	KindWant       = "want"
	KindCorrection = "corr"
	KindVerdict    = "verdict"
	KindLease      = "lease"
	KindRule       = "rule"
)

// UpSubject is where a robot publishes a kind of message.
func UpSubject(fleet, robot, kind string) string { return "up." + fleet + "." + robot + "." + kind }

// DownSubject is where the base publishes a kind of message for a robot.
func DownSubject(fleet, robot, kind string) string { return "down." + fleet + "." + robot + "." + kind }

// LeaseSubject is where the coordinator that speaks for a fleet says so.
func LeaseSubject(fleet string) string { return "down." + fleet + "._lease" }

// RuleSubject is where what a person has decided goes.
func RuleSubject(fleet string) string { return KindRule + "." + fleet }

// ChunkSubject is where chunk n of a large summary goes.
func ChunkSubject(fleet, robot string, slot Slot, n int) string {
	return UpSubject(fleet, robot, KindSummary) + "." + string(slot) + "." + strconv.Itoa(n)
}

// HeadSubject is where the head of a summary in chunks goes.
func HeadSubject(fleet, robot string) string {
	return UpSubject(fleet, robot, KindSummary) + "." + headToken
}

const headToken = "head"

// Subject is a subject taken apart.
type Subject struct {
	Up           bool // from a robot to the base
	Fleet, Robot string
	Kind         string
	Slot         Slot // for a chunk of a summary, else empty
	Chunk        int  // number of the chunk
	Head         bool // the head of a summary in chunks
}

// ParseSubject takes a subject apart. It knows no subject but those which the functions of this package make.
func ParseSubject(s string) (Subject, error) {
	t := strings.Split(s, ".")
	bad := func(found, want string) (Subject, error) {
		return Subject{}, &FieldError{Kind: "subject", Field: clip(s), Found: clip(found), Want: want}
	}
	if len(t) == 2 && t[0] == KindRule {
		if !validName(t[1]) {
			return bad("fleet "+t[1], nameRule)
		}
		return Subject{Fleet: t[1], Kind: KindRule}, nil
	}
	if len(t) < 3 || t[0] != "up" && t[0] != "down" {
		return bad(fmt.Sprintf("%d parts", len(t)), "up.FLEET.ROBOT.KIND, down.FLEET.ROBOT.KIND or rule.FLEET")
	}
	sub := Subject{Up: t[0] == "up", Fleet: t[1]}
	if !validName(sub.Fleet) {
		return bad("fleet "+sub.Fleet, nameRule)
	}
	if len(t) == 3 {
		if sub.Up || t[2] != "_lease" {
			return bad("3 parts", "4 or more, or down.FLEET._lease")
		}
		sub.Kind = KindLease
		return sub, nil
	}
	sub.Robot, sub.Kind = t[2], t[3]
	if !validName(sub.Robot) {
		return bad("robot "+sub.Robot, nameRule)
	}
	switch sub.Kind {
	case KindHeartbeat, KindTie, KindSummary:
		if !sub.Up {
			return bad("kind "+sub.Kind, "want, corr or verdict on a down subject")
		}
	case KindWant, KindCorrection, KindVerdict:
		if sub.Up {
			return bad("kind "+sub.Kind, "hb, tie or summary on an up subject")
		}
	default:
		return bad("kind "+sub.Kind, "hb, tie, summary, want, corr or verdict")
	}
	switch rest := t[4:]; {
	case len(rest) == 0:
		return sub, nil
	case sub.Kind == KindSummary && len(rest) == 1 && rest[0] == headToken:
		sub.Head = true
		return sub, nil
	case sub.Kind == KindSummary && len(rest) == 2 && Slot(rest[0]).valid():
		n, err := strconv.ParseUint(rest[1], 10, 16)
		if err != nil || n >= MaxChunks || strconv.FormatUint(n, 10) != rest[1] {
			return bad("chunk "+rest[1], fmt.Sprintf("a number from 0 to %d", MaxChunks-1))
		}
		sub.Slot, sub.Chunk = Slot(rest[0]), int(n)
		return sub, nil
	default:
		return bad(strings.Join(rest, "."), "nothing after the kind, or SLOT.N or head after summary")
	}
}
