package survey

import (
	"errors"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

const goodHistory = `# epoch 7
tie,stamp_ns,incarnation,epoch,old,new,reason
a,1000,1,1,,open,waiting for the separator of r2
b.1,1000,1,1,,held,"agrees, ""well"""
a,2000,1,3,open,held,agrees
b.1,2000,1,3,held,refused,contradicted
b.1,9000,1,18446744073709551615,refused,refused,ruled refused by lead: no
b.1,-5,2,1,,open,
`

func goodChanges() []ResultChange {
	return []ResultChange{
		{"a", 1000, 1, 1, "", "open", "waiting for the separator of r2"},
		{"b.1", 1000, 1, 1, "", "held", `agrees, "well"`},
		{"a", 2000, 1, 3, "open", "held", "agrees"},
		{"b.1", 2000, 1, 3, "held", "refused", "contradicted"},
		{"b.1", 9000, 1, 1<<64 - 1, "refused", "refused", "ruled refused by lead: no"},
		{"b.1", -5, 2, 1, "", "open", ""},
	}
}

func twoTies() *Survey { return &Survey{Ties: []Tie{{ID: "a"}, {ID: "b.1"}}} }

func putHistory(t testing.TB, dir, text string) {
	t.Helper()
	if err := os.MkdirAll(filepath.Join(dir, resultsName), 0o755); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, filepath.FromSlash(historyName)), []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
}

func TestHistoryReadBack(t *testing.T) {
	dir := t.TempDir()
	if got, err := ReadHistory(dir, twoTies()); got != nil || err != nil {
		t.Errorf("without results: %v, %v", got, err)
	}
	if err := WriteHistory(dir, goodChanges(), "epoch 7"); err != nil {
		t.Fatal(err)
	}
	text, err := os.ReadFile(filepath.Join(dir, filepath.FromSlash(historyName)))
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(goodHistory, string(text)); d != "" {
		t.Error(d)
	}
	got, err := ReadHistory(dir, twoTies())
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(goodChanges(), got); d != "" {
		t.Error(d)
	}
}

// What the reader refuses, the writer does too.
func TestBadHistory(t *testing.T) {
	const head = "tie,stamp_ns,incarnation,epoch,old,new,reason\na,1000,1,4,,open,\n"
	for _, c := range []struct{ row, want string }{
		{"c,1000,1,4,,held,\n", `:3: column tie: found "c", expected the id of a tie of this survey`},
		{"a,1000,1,5,open,maybe,\n", `:3: column new: found "maybe", expected held, refused or open`},
		{"a,1000,1,5,open,,\n", `:3: column new: found "", expected held, refused or open`},
		{"a,1000,1,5,held,open,\n", `:3: column old: found "held", expected open, the verdict before`},
		{"a,1000,1,5,,open,\n", `:3: column old: found "", expected open, the verdict before`},
		{"b.1,1000,1,5,open,held,\n", `:3: column old: found "open", expected nothing in the first verdict of an incarnation`},
		{"a,1000,2,5,open,held,\n", `:3: column old: found "open", expected nothing in the first verdict of an incarnation`},
		{"a,1000,1,4,open,held,\n", `:3: column epoch: found 4, expected more than 4, that of the verdict before`},
		{"b.1,1000,1,3,,held,\n", `:3: column epoch: found 3, expected at least 4, as in the row before`},
		{"b.1,1000,0,5,,held,\n", `:3: column incarnation: found 0, expected at least 1, as in the row before`},
		{"b.1,999,1,5,,held,\n", `:3: column stamp_ns: found 999, expected at least 1000, as in the row before`},
		{"b.1,1000,1,-5,,held,\n", `:3: column epoch: found "-5", expected a whole number of 64 bits`},
		{"b.1,x,1,5,,held,\n", `:3: column stamp_ns: found "x", expected an integer of 64 bits`},
		{"b.1,1000,1,5,,held,a\x01\n", `:3: column reason: found "a\x01", expected one line of printable text`},
	} {
		dir := t.TempDir()
		putHistory(t, dir, head+c.row)
		got, err := ReadHistory(dir, twoTies())
		var bad *Violations
		if !errors.As(err, &bad) || err.Error() != historyName+c.want || got != nil {
			t.Errorf("%q: %v, want %s", c.row, err, c.want)
		}
	}
	for i, spoil := range []func(x []ResultChange){
		func(x []ResultChange) { x[0].Tie = "a b" },
		func(x []ResultChange) { x[2].Old = "held" },
		func(x []ResultChange) { x[2].New = "" },
		func(x []ResultChange) { x[2].Reason = "two\nlines" },
		func(x []ResultChange) { x[4].Epoch = 3 },
		func(x []ResultChange) { x[3].StampNS = 1 },
	} {
		dir, all := t.TempDir(), goodChanges()
		spoil(all)
		err := WriteHistory(dir, all, "n")
		if err == nil || !strings.HasPrefix(err.Error(), "survey: history of tie ") {
			t.Errorf("spoilt in way %d: %v", i, err)
		}
		if _, err := os.Stat(filepath.Join(dir, resultsName)); !errors.Is(err, os.ErrNotExist) {
			t.Errorf("spoilt in way %d: something was written", i)
		}
	}
}

// FuzzReadHistory reads anything as a history. What it takes can be written, and comes back.
func FuzzReadHistory(f *testing.F) {
	f.Add([]byte(goodHistory))
	f.Add([]byte("tie,stamp_ns,incarnation,epoch,old,new,reason\na,1,1,1,,open,\"x\"\n\n"))
	dir, out := f.TempDir(), f.TempDir()
	f.Fuzz(func(t *testing.T, data []byte) {
		putHistory(t, dir, string(data))
		all, err := ReadHistory(dir, twoTies())
		if err != nil {
			if all != nil {
				t.Fatalf("%v, and %v", all, err)
			}
			return
		}
		if err := WriteHistory(out, all, "again"); err != nil {
			t.Fatal(err)
		}
		back, err := ReadHistory(out, twoTies())
		if err != nil || !reflect.DeepEqual(all, back) {
			t.Fatalf("%v: got %+v, want %+v", err, back, all)
		}
	})
}
