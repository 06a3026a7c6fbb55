package report

import (
	"bytes"
	"context"
	"fmt"
	"math"
	"net/url"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
	"time"

	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/page"
	"github.com/chromedp/chromedp"
)

// browser opens a page in a headless browser. Without one the test is skipped,
// unless SELVAGE_CI=1 says that there has to be one.
func browser(t *testing.T, p Page) context.Context {
	t.Helper()
	path, err := exec.LookPath("chromium")
	if err != nil {
		if os.Getenv("SELVAGE_CI") == "1" {
			t.Fatal("no chromium to look at the page with")
		}
		t.Skip("no chromium to look at the page with")
	}
	file := filepath.Join(t.TempDir(), "report.html")
	var b bytes.Buffer
	if err := Write(&b, p); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(file, b.Bytes(), 0o644); err != nil {
		t.Fatal(err)
	}
	opts := append(chromedp.DefaultExecAllocatorOptions[:], chromedp.ExecPath(path), chromedp.NoSandbox,
		chromedp.Flag("disable-dev-shm-usage", true), chromedp.UserDataDir(t.TempDir()))
	ctx, stop := context.WithTimeout(context.Background(), 90*time.Second)
	t.Cleanup(stop)
	ctx, stopAlloc := chromedp.NewExecAllocator(ctx, opts...)
	t.Cleanup(stopAlloc)
	ctx, stopTab := chromedp.NewContext(ctx)
	t.Cleanup(stopTab)
	address := url.URL{Scheme: "file", Path: file}
	if err := chromedp.Do(ctx, chromedp.Navigate(address.String())); err != nil {
		t.Fatal(err)
	}
	return ctx
}

// keep stores a picture for a person to look at, where REPORT_PICTURES names a
// folder.
func keep(t *testing.T, name string, picture []byte) {
	t.Helper()
	dir := os.Getenv("REPORT_PICTURES")
	if dir == "" {
		return
	}
	if err := os.WriteFile(filepath.Join(dir, name), picture, 0o644); err != nil {
		t.Fatal(err)
	}
}

// ask evaluates an expression in the page.
func ask[T any](t *testing.T, ctx context.Context, expression string) T {
	t.Helper()
	v, err := chromedp.Run(ctx, chromedp.Evaluate[T](expression))
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// outOfFrame lists drawn letters that stick out of their drawing, and letters
// that lie on other letters, as the browser measures them.
const outOfFrame = `(() => {
	const bad = [];
	for (const svg of document.querySelectorAll('svg[role=img]')) {
		const f = svg.getBoundingClientRect();
		if (f.width === 0) continue;
		if (f.right > document.documentElement.clientWidth + 1) bad.push('drawing wider than the page: ' + svg.querySelector('title').textContent);
		const all = [...svg.querySelectorAll('text')].map(t => [t.textContent, t.getBoundingClientRect()]);
		all.forEach(([s, r], i) => {
			if (r.left < f.left - 1 || r.right > f.right + 1 || r.top < f.top - 1 || r.bottom > f.bottom + 1)
				bad.push(svg.querySelector('title').textContent + ': "' + s + '" sticks out');
			for (const [o, q] of all.slice(i + 1)) {
				const w = Math.min(r.right, q.right) - Math.max(r.left, q.left), h = Math.min(r.bottom, q.bottom) - Math.max(r.top, q.top);
				if (w > 1.5 && h > 4) bad.push(svg.querySelector('title').textContent + ': "' + s + '" lies on "' + o + '"');
			}
		});
	}
	for (const e of document.querySelectorAll('main *')) {
		if (e.scrollWidth > e.clientWidth + 1 && getComputedStyle(e).overflowX === 'auto' && e.tabIndex < 0) bad.push('cannot be scrolled by keyboard: ' + e.className);
	}
	if (document.documentElement.scrollWidth > document.documentElement.clientWidth) bad.push('the page scrolls sideways: ' + document.documentElement.scrollWidth);
	return bad;
})()`

// faint lists words whose contrast with the paper is less than 4.5 to 1, and
// lines of tracks whose contrast is less than 3 to 1.
const faint = `(() => {
	const rgb = s => s.match(/[\d.]+/g).map(Number);
	const lum = c => { const [r, g, b] = c.slice(0, 3).map(v => (v /= 255) <= .04045 ? v / 12.92 : ((v + .055) / 1.055) ** 2.4); return .2126 * r + .7152 * g + .0722 * b; };
	const ratio = (a, b) => { const x = lum(a), y = lum(b); return (Math.max(x, y) + .05) / (Math.min(x, y) + .05); };
	const paper = rgb(getComputedStyle(document.documentElement).backgroundColor);
	const bad = [];
	for (const e of document.querySelectorAll('body *')) {
		if (e.closest('title,desc,style')) continue;
		if ([...e.childNodes].some(n => n.nodeType === 3 && n.textContent.trim())) {
			const s = getComputedStyle(e), q = ratio(rgb(e.namespaceURI.endsWith('svg') ? s.fill : s.color), paper);
			if (q < 4.5) bad.push(e.tagName + ' "' + e.textContent.slice(0, 30) + '" ' + q.toFixed(2));
		}
		if (e.matches('.line') && !e.classList.contains('edge')) {
			const before = e.previousElementSibling, edged = before && before.classList.contains('edge');
			const q = Math.max(ratio(rgb(getComputedStyle(e).stroke), paper), edged ? ratio(rgb(getComputedStyle(before).stroke), paper) : 0);
			if (q < 3) bad.push('line ' + e.getAttribute('class') + ' ' + q.toFixed(2));
		}
	}
	return [...new Set(bad)];
})()`

func TestPageAsAReaderSeesIt(t *testing.T) {
	few := drift(6, 3000, 60, true)
	few.Plans[0].Tracks[0].Hue = 7 // also the palest hue
	many := drift(30, 1000, 200, false)
	for i := range many.Plans[0].Tracks {
		if i%9 == 8 {
			many.Plans[0].Tracks[i].Island = i
		}
	}
	for _, c := range []struct {
		name string
		page Page
	}{{"few", few}, {"many", many}} {
		ctx := browser(t, c.page)
		for _, scheme := range []string{"light", "dark"} {
			for _, width := range []int64{1100, 390} {
				name := fmt.Sprintf("%s-%s-%d", c.name, scheme, width)
				t.Run(name, func(t *testing.T) { look(t, ctx, scheme, width, name+".png") })
			}
		}
	}
}

// look opens the page at one width and scheme, and has the browser measure it.
func look(t *testing.T, ctx context.Context, scheme string, width int64, name string) {
	if _, err := chromedp.Call(ctx, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{
		Features: []*emulation.MediaFeature{{Name: "prefers-color-scheme", Value: scheme}},
	}); err != nil {
		t.Fatal(err)
	}
	if err := chromedp.Do(ctx, chromedp.EmulateViewport(width, 900, chromedp.EmulateScale(2))); err != nil {
		t.Fatal(err)
	}
	for _, s := range append(ask[[]string](t, ctx, outOfFrame), ask[[]string](t, ctx, faint)...) {
		t.Error(s)
	}
	if os.Getenv("REPORT_PICTURES") == "" {
		return
	}
	picture, err := chromedp.Run(ctx, chromedp.FullScreenshot(100))
	if err != nil {
		t.Fatal(err)
	}
	keep(t, name, picture)
}

// On A4 nothing is cut: no drawing is larger than a sheet has room for, and
// every piece that must stay whole says so.
func TestPageOnPaper(t *testing.T) {
	p := drift(6, 3000, 60, true)
	shaft := Plan{Title: "shaft", Tracks: []Track{{Robot: "mole"}}}
	for i := range 200 {
		s, c := math.Sincos(float64(i) / 9)
		shaft.Tracks[0].Points = append(shaft.Tracks[0].Points, [3]float64{4 * c, 9 * s, -float64(i) / 2})
	}
	p.Plans = append(p.Plans, shaft)
	ctx := browser(t, p)
	const wide, high = (210 - 30) / 25.4 * 96, (297 - 28) / 25.4 * 96 // px within the margins
	if _, err := chromedp.Call(ctx, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{Media: "print"}); err != nil {
		t.Fatal(err)
	}
	if err := chromedp.Do(ctx, chromedp.EmulateViewport(int64(math.Floor(wide)), 1000)); err != nil {
		t.Fatal(err)
	}
	sizes := ask[[]struct {
		Name string
		W, H float64
		Keep string
	}](t, ctx, `[...document.querySelectorAll('svg[role=img],table,.titleblock')].map(e => ({
		Name: e.tagName + ' ' + (e.getAttribute('class') || ''), W: e.scrollWidth || e.getBoundingClientRect().width, H: e.getBoundingClientRect().height,
		Keep: getComputedStyle(e).breakInside})).filter(e => e.H > 0)`)
	if len(sizes) != 4+1+8+2+2 {
		t.Fatalf("%d pieces on paper, expected two plans with profiles and title blocks, an island, 8 charts and 2 tables", len(sizes))
	}
	for _, s := range sizes {
		if s.W > wide+0.5 {
			t.Errorf("%s is %.0f px wide, a sheet has %.0f", s.Name, s.W, wide)
		}
		if s.Name != "TABLE " && (s.H > high || s.Keep != "avoid") {
			t.Errorf("%s is %.0f px high and breaks inside: %s; a sheet has %.0f", s.Name, s.H, s.Keep, high)
		}
	}
	yes := true
	pdf, err := chromedp.Call(ctx, page.PrintToPDF, page.PrintToPDFParams{PreferCSSPageSize: &yes, PrintBackground: &yes})
	if err != nil {
		t.Fatal(err)
	}
	keep(t, "paper.pdf", pdf.Data)
}
