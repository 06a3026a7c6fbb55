package report

import (
	"math"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

func TestDigits(t *testing.T) {
	nan := math.NaN()
	for _, c := range []struct {
		value, sigma float64
		want         string
	}{
		{1.23456, 0.012, "1.235"},
		{1.23456, 0.05, "1.23"},
		{1.23456, 0.029, "1.235"},
		{1.23456, 0.03, "1.23"},
		{1.23456, 2.9, "1.2"},
		{1.23456, 3, "1"},
		{12345, 120, "12350"},
		{12345, 400, "12300"},
		{-0.0004, 0.05, "0.00"},
		{-0.4, 20, "0"},
		{-7, 0.4, "-7.0"},
		{0, 0.2, "0.00"},
		{0, 0, "0"},
		{0.0123456, 0, "0.0123"},
		{1234.56, nan, "1230"},
		{1234.56, math.Inf(1), "1230"},
		{1e-9, 1e-10, "0.00000000100"},
		{nan, 1, "– no finite value"},
		{math.Inf(-1), 1, "– no finite value"},
	} {
		if got := Digits(c.value, c.sigma); got != c.want {
			t.Errorf("Digits(%v, %v) is %q, expected %q", c.value, c.sigma, got, c.want)
		}
	}
}

// What is shown is within a sixth of sigma of the value, and the digit after the
// last one shown would be worth less than a thirtieth of it.
func TestDigitsKeepWhatCounts(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		sigma := math.Pow(10, rapid.Float64Range(-9, 6).Draw(t, "log sigma"))
		value := rapid.Float64Range(-1e6, 1e6).Draw(t, "value")
		s := Digits(value, sigma)
		got, err := strconv.ParseFloat(s, 64)
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(got-value) > sigma/6*(1+1e-9)+1e-9*math.Abs(value) {
			t.Fatalf("%q stands for %v with sigma %v", s, value, sigma)
		}
		if _, decimals, ok := strings.Cut(s, "."); ok {
			if last := math.Pow(10, -float64(len(decimals))); last < sigma/30*(1-1e-9) {
				t.Fatalf("%q has a digit worth %v with sigma %v", s, last, sigma)
			}
		}
	})
}

func robots() Table {
	return Table{
		Caption: "Robots",
		Note:    "After 1800 s.",
		Columns: []Column{{Name: "robot"}, {Name: "driven", Unit: "m", Right: true}, {Name: "error", Unit: "m", Right: true}, {Name: "state"}},
		Rows: [][]string{
			{"mole", "2700", "0.12", "joined"},
			{"Dächsin", "31", Missing("not joined"), "in an island of its own"},
			{"土竜", "4", "", Missing("radio lost")},
			{"x", "1", Missing("not joined"), "lost"},
		},
	}
}

func TestTextIsAligned(t *testing.T) {
	for _, c := range []struct {
		width int
		want  string
	}{
		{0, `
Robots
robot    driven  error  state
              m      m
───────  ──────  ─────  ───────────────────────
mole       2700   0.12  joined
Dächsin      31     –a  in an island of its own
土竜          4     –b  –c
x             1     –a  lost
After 1800 s.
–a not computed: not joined
–b not computed: no reason was given
–c not computed: radio lost
`}, {34, `
Robots
robot    driven  error  state
              m      m
───────  ──────  ─────  ──────────
mole       2700   0.12  joined
Dächsin      31     –a  in an isl…
土竜          4     –b  –c
x             1     –a  lost
After 1800 s.
–a not computed: not joined
–b not computed: no reason was given
–c not computed: radio lost
`}, {20, `
Robots
robot: mole
  driven: 2700 m
  error: 0.12 m
  state: joined
robot: Dächsin
  driven: 31 m
  error: –a
  state: in an island of its own
robot: 土竜
  driven: 4 m
  error: –b
  state: –c
robot: x
  driven: 1 m
  error: –a
  state: lost
After 1800 s.
–a not computed: not joined
–b not computed: no reason was given
–c not computed: radio lost
`},
	} {
		var b strings.Builder
		if err := robots().Text(&b, c.width); err != nil {
			t.Fatal(err)
		}
		if got := "\n" + b.String(); got != c.want {
			t.Errorf("width %d:%s\nexpected:%s", c.width, got, c.want)
		}
	}
}

func TestTextRefusesUnevenRows(t *testing.T) {
	u := robots()
	u.Rows[2] = u.Rows[2][:1]
	var b strings.Builder
	if err := u.Text(&b, 80); err == nil || b.Len() > 0 {
		t.Errorf("error %v after %q, expected an error and nothing written", err, b.String())
	}
}

func TestLongTablesNameTheirFile(t *testing.T) {
	u := robots()
	u.File = "robots.csv"
	for i := range 1500 {
		u.Rows = append(u.Rows, []string{"r" + strconv.Itoa(i), "1", "1", ""})
	}
	page, words := set(t, Page{Title: "t", Made: "m", Finding: "f", Tables: []Table{u}})
	if !strings.Contains(words, "The first 1000 of 1504 rows. All of them stand in robots.csv.") {
		t.Error("rows were left out without a word")
	}
	if n := strings.Count(string(page), "<tr>"); n != 1001 {
		t.Errorf("%d rows set, expected the heading and 1000", n)
	}
}
