package audit

import (
	"testing"

	"github.com/google/go-cmp/cmp"

	"selvage/internal/survey"
)

func TestTurned(t *testing.T) {
	changes := []survey.ResultChange{
		{Tie: "calm", Epoch: 1, New: "held", Reason: "agrees"},
		{Tie: "slow", Epoch: 1, New: "open", Reason: "waits"},
		{Tie: "lost", Epoch: 1, New: "held", Reason: "agrees"},
		{Tie: "wild", Epoch: 2, New: "open", Reason: "waits"},
		{Tie: "slow", Epoch: 2, Old: "open", New: "held", Reason: "agrees"},
		{Tie: "wild", Epoch: 3, Old: "open", New: "refused", Reason: "contradicts"},
		{Tie: "wild", Epoch: 4, Old: "refused", New: "held", Reason: "agrees after all"},
		{Tie: "calm", Epoch: 4, Old: "held", New: "held", Reason: "ruled held by lead: seen"},
		{Tie: "lost", Epoch: 5, Old: "held", New: "refused", Reason: "contradicts"},
		{Tie: "lost", Epoch: 6, Old: "refused", New: "refused", Reason: "ruled refused by lead: no"},
	}
	got := turned(changes)
	want := []Turned{
		{Tie: "lost", Verdicts: []string{"held", "refused"}, Epochs: []uint64{1, 5}, Lost: true, Reason: "ruled refused by lead: no"},
		{Tie: "wild", Verdicts: []string{"open", "refused", "held"}, Epochs: []uint64{2, 3, 4}, Reason: "agrees after all"},
		{Tie: "slow", Verdicts: []string{"open", "held"}, Epochs: []uint64{1, 2}, Reason: "agrees"},
	}
	if d := cmp.Diff(want, got); d != "" {
		t.Error(d)
	}
	table := (&Audit{History: got}).historyTable()
	if d := cmp.Diff([][]string{{"lost", "held (1), refused (5)", "ruled refused by lead: no"}, {"wild", "open (2), refused (3), held (4)", "agrees after all"}}, table.Rows); d != "" {
		t.Error(d)
	}
	if len((&Audit{}).historyTable().Rows) != 0 {
		t.Error("a table of nothing")
	}
}
