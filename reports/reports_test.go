package reports

import (
	"bytes"
	"encoding/xml"
	"flag"
	"io"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"regexp"
	"strconv"
	"strings"
	"testing"

	"github.com/yuin/goldmark"
	"github.com/yuin/goldmark/extension"
)

var update = flag.Bool("update", false, "write golden files anew")

// document is a small report with everything in it.
func document() *Document {
	c := Curve{
		Name: "firmness", X: Axis{Name: "day", Unit: "d"}, Y: Axis{Name: "firmness", Unit: "N"}, By: []string{"cultivar", "store"},
		Weight: "fruit", Rule: "gcv", Level: 0.95, BandFor: "the curve",
		Rows:       RowCount{Read: 30, Used: 24, ZeroWeight: 1, Dropped: []Count{{"bruised", "bruised fruit", 3}}, SetAside: []Count{{"firmness", "firmness is missing", 2}}},
		Exceptions: []Exception{{"pilot", `cultivar == "Pilot"`, "fixed_df, df = 4", "four visits only", []string{"cultivar=B, store=air"}}},
		Guards:     []Guard{{Name: "enough", On: "firmness", Require: "n >= 8", Otherwise: "skip", Reason: "too few", Judged: 3, Failed: []string{"cultivar=C, store=air (n = 3)"}}},
		Readings:   []string{"release", "peak"},
		Skipped:    []Skipped{{Group: "cultivar=C, store=air", N: 3, Distinct: 2, Why: "2 distinct x, a curve needs 3"}},
	}
	for k, g := range [][]string{{"A", "air"}, {"B", "air"}} {
		f := Fit{Name: "firmness[cultivar=" + g[0] + ", store=air]", Group: g, N: 12, Distinct: 12, Rule: "gcv", Lambda: 1.5e6, EDF: 4.123, RSS: 2.5, Sigma: 0.5634,
			GCV: 0.3, LOOCV: 0.31, REML: 12, Score: 0.3}
		for i := range 12 {
			x := float64(i * 10)
			y := 60 - 0.4*x + 3*math.Cos(x/20+float64(k))
			f.Points = append(f.Points, Point{X: x, Y: y, Weight: 1 + float64(i%3), Fitted: y - 0.1, Residual: 0.1, Leverage: 0.3})
			f.Grid = append(f.Grid, GridPoint{X: x, Fit: y - 0.1, SE: 0.5, Lower: y - 1.1, Upper: y + 0.9, Slope: -0.4, Extrapolated: i > 9})
			e := 2 + float64(i)
			f.Evidence.Candidates = append(f.Evidence.Candidates, Candidate{Lambda: 1e8 / e, EDF: e, Score: 0.3 + (e-4)*(e-4)/50})
		}
		f.Evidence.Criterion = "GCV"
		f.Evidence.Why = "GCV was smallest at edf 4.12."
		f.Evidence.Minima = []Minimum{{1.5e6, 4.123, 0.3, false, true}, {1e5, 9, 0.31, false, false}}
		f.Evidence.Others = []Other{{"reml", 2e6, 3.9, 0.12}, {"loocv", 1e6, 4.4, math.NaN()}}
		f.Readings = []Reading{
			{Name: "release", Kind: "crossing", At: 40, Value: 51.37, Lower: 48.2, Upper: math.Inf(1), Unit: "d", ValueIsX: true, Note: "open above"},
			{Name: "peak", Kind: "maximum", At: 0, Value: 63.02, Lower: 61.9, Upper: 64.1, Unit: "N", AtIsX: true},
			{Name: "peak", Kind: "maximum_at", At: 63.02, Value: math.NaN(), Lower: math.NaN(), Upper: math.NaN(), Unit: "d", ValueIsX: true, Note: "none in the observed range"},
		}
		if k == 1 {
			f.Exception = "pilot"
			f.Flags = []Flag{{"several_minima", "Two minima score alike."}, {"guard no wiggle", "It warns."}}
		}
		c.Fits = append(c.Fits, f)
	}
	return &Document{
		Title: "Pears, week by week", Study: "Stored pears (invented)", Owner: "Trials", Dated: "2026-03-01", Curves: []Curve{c},
		Contrasts: []Contrast{{Name: "store_effect", Of: "firmness", Across: "store", Minus: [2]string{"air", "low"}, X: c.X, Y: c.Y, Level: 0.95,
			Pairs:   []Pair{{Group: "cultivar=A", Grid: c.Fits[0].Grid, SurelyNot: [][2]float64{{0, 40}}}},
			Missing: []string{"cultivar=B: there is no fit for store=low"}}},
		Guards: []Guard{
			{Name: "whole season", On: "input readings", Require: "files == 2", Otherwise: "refuse", Judged: 1},
			{Name: "few drops", On: "the study", Require: "share_dropped < 0.05", Otherwise: "warn", Reason: "ask the\nfield team", Judged: 1, Failed: []string{"share_dropped = 0.1"}},
			{Name: "stores differ", On: "contrast store_effect", Require: "p_none < 0.01", Otherwise: "refuse", Judged: 1, Failed: []string{"store_effect[cultivar=A] (p_none = 0.2)"}},
			{Name: "no pairs", On: "contrast store_effect", Require: "largest > 0", Otherwise: "warn"},
		},
		Record: Record{Program: "batten 0.1.0", Go: "go1.26", Spec: File{"study.hcl", strings.Repeat("ab", 32), 900, 0},
			Inputs: []File{{"data/a.csv", strings.Repeat("cd", 32), 4000, 30}}, Seed: 7, Run: "3f9ac2", Methods: []string{"spline 1"}},
		Summary: Summary{Total: 3, Fitted: 2, Skipped: 1, Ledger: "accepted 2026-02-01 by A. Analyst: first",
			Moved: []Move{{Fit: "firmness[cultivar=A, store=air]", What: "shifted", Shift: 1.25, At: 30, AtText: "30 d", OldEDF: 4, NewEDF: 4.123}}},
	}
}

// TestGolden holds the reports' text to files that a person has read.
func TestGolden(t *testing.T) {
	d := document()
	md, figures := Markdown(d, "page_figures")
	var term bytes.Buffer
	Terminal(&term, d, TerminalOptions{Width: 80})
	got := map[string][]byte{"report.md": md, "terminal.txt": term.Bytes(), "score_plot.txt": []byte(ScorePlot(d.Curves[0].Fits[0].Evidence, 70, 10))}
	for name, b := range got {
		path := filepath.Join("testdata", name)
		if *update {
			if err := os.MkdirAll("testdata", 0o777); err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(path, b, 0o666); err != nil {
				t.Fatal(err)
			}
		}
		want, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(b, want) {
			t.Errorf("%s differs from testdata; run with -update and read the diff\n%s", name, b)
		}
	}
	if len(figures) < 8 {
		t.Errorf("only %d figures", len(figures))
	}
	for name, svg := range figures {
		if err := xml.Unmarshal(svg, new(struct{})); err != nil {
			t.Errorf("%s is no sound XML: %v", name, err)
		}
		if !bytes.Contains(md, []byte("("+name+")")) {
			t.Errorf("the text does not show %s", name)
		}
	}
	for _, l := range strings.Split(term.String(), "\n") {
		if n := len([]rune(strings.TrimRight(l, " "))); n > 80 {
			t.Errorf("a line of %d columns: %q", n, l)
		}
	}
}

// TestSameDocumentSameBytes: no map, clock or chance reaches the bytes.
func TestSameDocumentSameBytes(t *testing.T) {
	for range 5 {
		a, fa := Markdown(document(), "f")
		b, fb := Markdown(document(), "f")
		if !bytes.Equal(a, b) || !reflect.DeepEqual(fa, fb) || !bytes.Equal(HTML(document()), HTML(document())) {
			t.Fatal("the same document gave other bytes")
		}
	}
}

const hostile = "<script>alert(1)</script>|`x`\n\n# h [a](javascript:alert(2)) <img src=x onerror=alert(3)> \"' &lt; --> ]]> \x1b[31m \x00 ![i](http://evil.example/x.png) *b* _u_"

// fill puts hostile text into every string of a value.
func fill(v reflect.Value) {
	switch v.Kind() {
	case reflect.Pointer, reflect.Interface:
		fill(v.Elem())
	case reflect.Struct:
		for i := range v.NumField() {
			fill(v.Field(i))
		}
	case reflect.Slice, reflect.Array:
		for i := range v.Len() {
			fill(v.Index(i))
		}
	case reflect.String:
		if v.CanSet() && v.String() != "crossing" && v.String() != "value" { // kinds that figures look for stay
			v.SetString(hostile)
		}
	}
}

// TestHostileText: text from a stranger's file stays text, everywhere.
func TestHostileText(t *testing.T) {
	d := document()
	fill(reflect.ValueOf(d))
	check := func(what, page string) {
		t.Helper()
		for _, bad := range []string{"<script", "<img", "onerror=alert(3)>", "href=\"javascript", "src=\"http", "\x1b", "\x00"} {
			if strings.Contains(page, bad) {
				i := strings.Index(page, bad)
				t.Errorf("%s holds %q: ...%q", what, bad, page[max(0, i-60):min(len(page), i+60)])
			}
		}
		// every tag is one that the writers make, and attributes come from a short list
		for _, m := range regexp.MustCompile(`<([a-zA-Z!/][^>]*)>`).FindAllStringSubmatch(page, -1) {
			name := strings.Fields(strings.TrimPrefix(m[1], "/"))[0]
			if !strings.Contains(" !doctype html head meta title style body a nav ol ul li main h1 h2 h3 h4 p div table caption thead tbody tr th td code details summary figure figcaption svg desc g path text rect em strong img br blockquote hr pre ", " "+strings.TrimSuffix(name, "/")+" ") {
				t.Errorf("%s: an unexpected tag %q", what, m[0])
			}
		}
	}
	check("HTML", string(HTML(d)))
	md, figures := Markdown(d, "f")
	var page bytes.Buffer
	if err := goldmark.New(goldmark.WithExtensions(extension.GFM)).Convert(md, &page); err != nil {
		t.Fatal(err)
	}
	rendered := regexp.MustCompile(`<img src="f/[0-9A-Za-z_.]*" alt="[^"]*">`).ReplaceAllString(page.String(), "")
	rendered = regexp.MustCompile(`<!-- raw HTML omitted -->`).ReplaceAllString(rendered, "RAW")
	if strings.Contains(rendered, "RAW") {
		t.Error("raw HTML reached the Markdown")
	}
	for _, bad := range []string{"<h1>h", "<code>x</code>", "<a href", "<em>", "<strong>"} {
		if strings.Contains(rendered, bad) {
			i := strings.Index(rendered, bad)
			t.Errorf("Markdown renders %q: ...%q", bad, rendered[max(0, i-80):min(len(rendered), i+80)])
		}
	}
	for name, svg := range figures {
		check(name, string(svg))
		dec := xml.NewDecoder(bytes.NewReader(svg))
		for {
			if _, err := dec.Token(); err == io.EOF {
				break
			} else if err != nil {
				t.Fatalf("%s: %v", name, err)
			}
		}
	}
	var term bytes.Buffer
	Terminal(&term, d, TerminalOptions{Width: 80})
	if strings.ContainsAny(term.String(), "\x1b\x00") {
		t.Error("control characters reached the terminal")
	}
}

// TestOneFile: the page asks for nothing and runs nothing.
func TestOneFile(t *testing.T) {
	page := string(HTML(document()))
	for _, bad := range []string{"<script", "<link", "@import", "url(", "src=", "<iframe", "<object"} {
		if strings.Contains(page, bad) {
			t.Errorf("the page holds %q", bad)
		}
	}
	for _, need := range []string{"Content-Security-Policy", "default-src 'none'", "<main", "<caption>", `lang="en"`, "<h1>", "prefers-color-scheme:dark"} {
		if !strings.Contains(page, need) {
			t.Errorf("the page lacks %q", need)
		}
	}
	if n := strings.Count(page, "http"); n != strings.Count(page, `xmlns="http`)+strings.Count(page, "http-equiv") {
		t.Error("the page names an address")
	}
}

// luminance and contrast are those of WCAG 2.1.
func luminance(hex string) float64 {
	l := 0.0
	for i, w := range []float64{0.2126, 0.7152, 0.0722} {
		n, _ := strconv.ParseUint(hex[1+2*i:3+2*i], 16, 8)
		c := float64(n) / 255
		if c <= 0.04045 {
			c /= 12.92
		} else {
			c = math.Pow((c+0.055)/1.055, 2.4)
		}
		l += w * c
	}
	return l
}

func contrast(a, b string) float64 {
	x, y := luminance(a), luminance(b)
	return (math.Max(x, y) + 0.05) / (math.Min(x, y) + 0.05)
}

// TestContrast: text inks reach 4.5, marks 3 (WCAG 2.1, success criteria 1.4.3
// and 1.4.11), on both grounds.
func TestContrast(t *testing.T) {
	need := map[string]float64{"ink": 4.5, "soft": 4.5, "curve": 4.5, "mark": 4.5, "alarm": 4.5, "point": 3}
	for _, i := range inks {
		n, ok := need[i.name]
		if !ok {
			continue // rules and fills carry no meaning alone
		}
		if c := contrast(i.light, lightGround); c < n {
			t.Errorf("%s on light: %.2f, want %.1f", i.name, c, n)
		}
		if c := contrast(i.dark, darkGround); c < n {
			t.Errorf("%s on dark: %.2f, want %.1f", i.name, c, n)
		}
		if i.name == "curve" {
			for _, b := range inks {
				if b.name == "band" && (contrast(i.light, b.light) < 3 || contrast(i.dark, b.dark) < 3) {
					t.Error("the curve cannot be told from its band")
				}
			}
		}
	}
}

// TestRounded: numbers show what their interval supports.
func TestRounded(t *testing.T) {
	inf, nan := math.Inf(1), math.NaN()
	for _, c := range []struct {
		v, lo, hi float64
		want      [3]string
	}{
		{93.4321, 90.912, 96.02, [3]string{"93.4", "90.9", "96.0"}},
		{-0.00041, -0.0021, 0.0013, [3]string{"−0.0004", "−0.0021", "0.0013"}},
		{3371.4, 3322.6, 3419.9, [3]string{"3371", "3323", "3420"}},
		{151234, 149000, 153400, [3]string{"151200", "149000", "153400"}},
		{11.2, -inf, 82.4, [3]string{"11", "open", "82"}},
		{nan, nan, nan, [3]string{"none", "none", "none"}},
		{31.3224567, nan, nan, [3]string{"31.322", "none", "none"}},
		{-0.00001, -0.4, 0.4, [3]string{"0.00", "−0.40", "0.40"}},
		{5, 5, 5, [3]string{"5.0000", "5.0000", "5.0000"}},
	} {
		a, b, d := Rounded(c.v, c.lo, c.hi)
		if got := [3]string{a, b, d}; got != c.want {
			t.Errorf("Rounded(%g, %g, %g) = %q, want %q", c.v, c.lo, c.hi, got, c.want)
		}
	}
	for _, c := range []struct {
		v    float64
		n    int
		want string
	}{{1.5e6, 3, "1.50e6"}, {0.00001234, 3, "1.23e−5"}, {-12.345, 4, "−12.35"}, {999.96, 4, "1000.0"}, {0, 4, "0"}, {inf, 3, "∞"}} {
		if got := short(c.v, c.n); got != c.want {
			t.Errorf("short(%g, %d) = %q, want %q", c.v, c.n, got, c.want)
		}
	}
}

// TestPrintable: what a terminal would obey goes, what nobody would see is
// shown, and the rest stays as it is.
func TestPrintable(t *testing.T) {
	for in, want := range map[string]string{
		"Ärmel 5 µm": "Ärmel 5 µm", "a\x1b[31mb": "a [31mb", "a\u202eb": "a<U+202E>b", "a\u200bb": "a<U+200B>b", "a\u0085b": "a b", "\xff": "�", "e\u0301": "e\u0301",
	} {
		if got := printable(in); got != want {
			t.Errorf("%q is shown as %q, want %q", in, got, want)
		}
	}
}
