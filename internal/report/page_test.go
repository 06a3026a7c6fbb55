package report

import (
	"bytes"
	"encoding/xml"
	"errors"
	"io"
	"math"
	"strings"
	"testing"
)

// set writes a page and parses it as strict XML, returning the bytes and all
// of its character data.
func set(t *testing.T, p Page) (page []byte, words string) {
	t.Helper()
	var b bytes.Buffer
	if err := Write(&b, p); err != nil {
		t.Fatal(err)
	}
	ids := map[string]bool{}
	var refs []string
	var text strings.Builder
	dec := xml.NewDecoder(bytes.NewReader(b.Bytes()))
	for {
		tok, err := dec.Token()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			t.Fatalf("not well-formed: %v", err)
		}
		switch tok := tok.(type) {
		case xml.CharData:
			text.Write(tok)
		case xml.StartElement:
			switch tok.Name.Local {
			case "script", "img", "link", "iframe", "object", "image", "foreignObject":
				t.Errorf("element %s in the page", tok.Name.Local)
			}
			for _, a := range tok.Attr {
				switch {
				case a.Name.Local == "id":
					if ids[a.Value] {
						t.Errorf("id %q given twice", a.Value)
					}
					ids[a.Value] = true
				case a.Name.Local == "href":
					if !strings.HasPrefix(a.Value, "#") {
						t.Errorf("reference to %q outside the page", a.Value)
					}
					refs = append(refs, strings.TrimPrefix(a.Value, "#"))
				case strings.HasPrefix(a.Name.Local, "aria-labelledby"):
					refs = append(refs, strings.Fields(a.Value)...)
				case strings.HasPrefix(a.Name.Local, "on"):
					t.Errorf("event attribute %s", a.Name.Local)
				}
				if strings.Contains(a.Value, "NaN") || strings.Contains(a.Value, "Inf") {
					t.Errorf("attribute %s of %s holds %.60q", a.Name.Local, tok.Name.Local, a.Value)
				}
			}
		}
	}
	for _, r := range refs {
		if !ids[r] {
			t.Errorf("nothing has the id %q", r)
		}
	}
	return b.Bytes(), text.String()
}

func TestPageHoldsWhatItWasGiven(t *testing.T) {
	p := drift(6, 900, 60, true)
	page, words := set(t, p)
	for _, want := range []string{
		p.Finding, p.Cautions[0], Safety, p.Attention[2], "portal pillar 2", "212", p.Made, p.Version,
		"hare: not joined to the datum", "times too large", "not computed: not joined to the datum",
		"accepted up to 0.35 m", "verdicts.csv", "Profile: z against x, in m; heights",
	} {
		if !strings.Contains(words, want) {
			t.Errorf("the page does not say %q", want)
		}
	}
	if i, j := strings.Index(words, p.Finding), strings.Index(words, p.Method[0]); i > j {
		t.Error("the method stands before the finding")
	}
	for i := 0; i < 3; i++ {
		var again bytes.Buffer
		if err := Write(&again, drift(6, 900, 60, true)); err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(page, again.Bytes()) {
			t.Fatal("the same page gave other bytes")
		}
	}
}

func TestHostileTextStaysText(t *testing.T) {
	evil := "<script>alert('x')</script>\"&]]>\x00\x1b[31m\u202Egnp\xff" + strings.Repeat("W", 400)
	p := drift(3, 100, 8, false)
	p.Title, p.Kind, p.Made, p.Version, p.Finding = evil, evil, evil, evil, evil
	p.Cautions, p.Attention, p.Method = []string{evil}, []string{evil}, []string{evil}
	p.Files = []File{{evil, evil}}
	pl := &p.Plans[0]
	pl.Title, pl.Datum, pl.Epoch = evil, evil, evil
	for i := range pl.Tracks {
		pl.Tracks[i].Robot = evil
	}
	for i := range pl.Ties {
		pl.Ties[i].ID = evil
	}
	c := &p.Charts[0].Charts[0]
	c.Title, c.XLabel, c.YLabel, c.ThresholdLabel, c.Series[0].Label = evil, evil, evil, evil, evil
	p.Charts[0].Title, p.Charts[0].Note = evil, evil
	p.Tables = []Table{{Caption: evil, Note: evil, Columns: []Column{{evil, evil, true}, {evil, evil, false}}, Rows: [][]string{{evil, Missing(evil)}}}}
	page, words := set(t, p)
	if !strings.Contains(words, "<script>alert('x')</script>\"&]]>") {
		t.Error("the text did not come through")
	}
	if bytes.ContainsAny(page, "\x00\x1b\u202e") {
		t.Error("control or direction characters reached the page")
	}
	var b bytes.Buffer
	if err := p.Tables[0].Text(&b, 80); err != nil {
		t.Fatal(err)
	}
	if strings.ContainsAny(b.String(), "\x00\x1b\u202e") {
		t.Error("control characters reached the terminal")
	}
}

func TestOddNumbersAreDrawnOrLeftOut(t *testing.T) {
	nan, inf := math.NaN(), math.Inf(1)
	limit := nan
	p := Page{
		Title: "t", Made: "m", Finding: "f",
		Plans: []Plan{
			{},
			{Tracks: []Track{{Robot: "a", Points: [][3]float64{{nan, 0, 0}, {inf, 1, 0}}}}},
			{Tracks: []Track{{Robot: "a", Points: [][3]float64{{1, 1, 1}}, Truth: [][3]float64{{1, 1, 1}}}}},
			{Tracks: []Track{{Robot: "a", Points: [][3]float64{{1e12, -1e12, 0}, {1e12 + 1, -1e12, 0}}}}, Ties: []TieMark{{Verdict: Open, From: [3]float64{nan, 0, 0}}}},
			{Tracks: []Track{{Robot: "a", Points: [][3]float64{{0, 0, 0}, {0, 0, -300}, {0.1, 0, -900}}}}, Ellipses: []Ellipse{{}}},
			{Tracks: []Track{{Robot: "a", Points: [][3]float64{{-1e300, 0, 0}, {1e300, 1e300, 1e300}}}}},
		},
		Charts: []ChartGroup{{Charts: []Chart{
			{Title: "none"},
			{Title: "one", YLabel: "y", Series: []Series{{Label: "s", X: []float64{3}, Y: []float64{0}}}},
			{Title: "gap", YLabel: "y", LogY: true, Threshold: &limit, Series: []Series{{Label: "s", X: []float64{1, 2, 3, 4}, Y: []float64{nan, -1, 1e-9, inf}}}},
		}}},
	}
	set(t, p)
}

func TestPageStaysUnderItsSize(t *testing.T) {
	p := drift(6, 100_000/6, 60, true)
	page, words := set(t, p)
	t.Logf("100 000 poses: %d bytes", len(page))
	if len(page) > MaxBytes {
		t.Errorf("%d bytes, expected at most %d", len(page), MaxBytes)
	}
	if !strings.Contains(words, "within 0.5 pixel") {
		t.Error("100 000 poses in drifts should not need coarser lines")
	}

	// Noise cannot be simplified: the drawing gets coarser until it fits, and says so.
	limit := 1.0
	for r := range 90 {
		s := Series{Label: "n"}
		for i := range 1_600 {
			s.X, s.Y = append(s.X, float64(i)), append(s.Y, math.Sin(float64(i*i+r)))
		}
		p.Charts[0].Charts = append(p.Charts[0].Charts, Chart{Title: "noise", Threshold: &limit, Series: []Series{s, s, s, s}})
	}
	page, words = set(t, p)
	if len(page) > MaxBytes || strings.Contains(words, "within 0.5 pixel") {
		t.Errorf("%d bytes, not drawn coarser", len(page))
	}

	p.Method = []string{strings.Repeat("long ", MaxBytes/5)}
	var b bytes.Buffer
	if err := Write(&b, p); !errors.Is(err, ErrTooLarge) || b.Len() > 0 {
		t.Errorf("error %v after %d bytes, expected ErrTooLarge and nothing written", err, b.Len())
	}
}

func TestInconsistentPagesAreRefused(t *testing.T) {
	good := func() Page { return drift(3, 100, 8, false) }
	for _, c := range []struct {
		spoil func(*Page)
		want  string
	}{
		{func(p *Page) { p.Finding = "" }, "Finding is empty"},
		{func(p *Page) { p.Plans[0].Ties[2].Verdict = "maybe" }, `tie "t102": verdict "maybe", expected held, refused or open`},
		{func(p *Page) { p.Plans[0].Tracks[0].Hue = -1 }, "hue -1"},
		{func(p *Page) { p.Plans[0].Ellipses[0].Cov = [3]float64{1, 2, 1} }, "positive semidefinite"},
		{func(p *Page) { p.Plans[0].EllipseMagnification = -2 }, "magnification -2"},
		{func(p *Page) { p.Charts[0].Charts[0].Series[0].X[4] = -5 }, "X[4] is -5, expected finite values in ascending order"},
		{func(p *Page) { p.Charts[0].Charts[0].Series[0].Y = nil }, "Y 0, expected as many"},
		{func(p *Page) { p.Tables[0].Rows[1] = p.Tables[0].Rows[1][:2] }, "row 2 has 2 cells, expected 7"},
		{func(p *Page) { p.Tables[0].Caption = "" }, "no caption"},
	} {
		p := good()
		c.spoil(&p)
		var b bytes.Buffer
		if err := Write(&b, p); err == nil || !strings.Contains(err.Error(), c.want) || b.Len() > 0 {
			t.Errorf("error %v after %d bytes, expected one that says %q", err, b.Len(), c.want)
		}
	}
}

// A page of six robots with 100 000 poses, all its drawings in it.
func BenchmarkWrite100kPoses(b *testing.B) {
	p := drift(6, 100_000/6, 60, true)
	for b.Loop() {
		if err := Write(io.Discard, p); err != nil {
			b.Fatal(err)
		}
	}
}
