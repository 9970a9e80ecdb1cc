package spec

import (
	"bytes"
	"errors"
	"flag"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"batten/spec/expr"
)

var update = flag.Bool("update", false, "write golden files anew")

// TestPears reads the full example of the language, field by field.
func TestPears(t *testing.T) {
	s, err := Load("testdata/pears.hcl")
	if err != nil {
		t.Fatal(err)
	}
	if s.Title != "Firmness of stored pears" || s.Owner != "Cold-store trials" || s.Seed != 4711 {
		t.Errorf("study: %q %q %d", s.Title, s.Owner, s.Seed)
	}
	in := s.InputByName("readings")
	if in.File != "data/readings.csv" || len(in.Missing) != 2 || len(in.Columns) != 8 || len(in.Expects) != 2 {
		t.Errorf("input: %+v", in)
	}
	if c := in.Columns[3]; c.Name.Text != "day" || c.Kind != expr.Number || c.Unit != "d" || in.Columns[6].Kind != expr.Date {
		t.Errorf("columns: %+v", in.Columns)
	}
	if in.Expects[0].That == nil || strings.Join(in.Expects[1].Unique, " ") != "lot day" {
		t.Errorf("expects: %+v", in.Expects)
	}
	r := s.RowsByName("usable")
	if r.From != "readings" || len(r.Steps) != 2 || r.Steps[0].Add == nil || r.Steps[1].When == nil || r.Steps[1].Reason == "" || len(r.Columns) != 9 {
		t.Errorf("rows: %+v", r)
	}
	c := s.CurveByName("firmness")
	if c.From != "usable" || c.Response.Unit != "N" || c.Along.Name.Text != "day" || len(c.By) != 2 || c.Weight.Name.Text != "fruit" {
		t.Errorf("curve: %+v", c)
	}
	if c.Rule.Name != GCV || c.Rule.Inflate != 1 || len(c.Exceptions) != 1 {
		t.Errorf("rule: %+v", c.Rule)
	}
	if e := c.Exceptions[0]; e.Name.Text != "pilot lots" || e.Rule.DF != 4 || e.Source != `cultivar == "Pilot"` || !strings.HasPrefix(e.Reason, "four visits") {
		t.Errorf("exception: %+v", e)
	}
	if c.Band.Level != 0.95 || c.Grid.Points != 101 || len(c.Readings) != 5 {
		t.Errorf("band, grid, readings: %+v %+v %+v", c.Band, c.Grid, c.Readings)
	}
	want := []Reading{{Kind: Crossing, At: 18, Direction: "falling"}, {Kind: SlopeAt, At: 60}, {Kind: ValueAt}, {Kind: Maximum}, {Kind: Area, To: 60}}
	for i, w := range want {
		got := c.Readings[i]
		got.Name = Name{}
		if got != w {
			t.Errorf("reading %d: %+v, want %+v", i, got, w)
		}
	}
	if x := s.Contrasts[0]; x.Of != "firmness" || x.Across != "store" || x.Minus != [2]string{"air", "low_oxygen"} {
		t.Errorf("contrast: %+v", x)
	}
	if g := s.Guards; len(g) != 2 || !g[0].BeforeFit || g[1].BeforeFit || g[0].Otherwise != Skip || g[1].Source != "edf <= n / 3" {
		t.Errorf("guards: %+v", g)
	}
	if e := s.Exports[0]; e.Of != "firmness" || e.What != ExportGrid || e.File != "out/firmness_grid.csv" {
		t.Errorf("export: %+v", e)
	}
	if r := s.Reports[0]; len(r.Files) != 2 || strings.Join(r.Show, " ") != "firmness store_effect" {
		t.Errorf("report: %+v", r)
	}
}

// TestRendering holds a few messages, whole, to a golden file.
func TestRendering(t *testing.T) {
	var got bytes.Buffer
	for _, name := range []string{"unknown_rule", "two_exports_one_file", "rows_cycle", "type_mismatch_compare", "syntax_unclosed"} {
		text, err := os.ReadFile(filepath.Join("../testdata/badspec", name+".hcl"))
		if err != nil {
			t.Fatal(err)
		}
		_, err = Parse("study.hcl", t.TempDir(), text)
		var m *Mistakes
		if !errors.As(err, &m) {
			t.Fatal(err)
		}
		m.Render(&got, false)
		got.WriteByte('\n')
	}
	if *update {
		if err := os.WriteFile("testdata/rendering.txt", got.Bytes(), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile("testdata/rendering.txt")
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(got.Bytes(), want) {
		t.Errorf("got\n%s\nwant\n%s", got.Bytes(), want)
	}
}

// TestSameMessages: HCL keeps arguments in a map; messages must not show it.
func TestSameMessages(t *testing.T) {
	text := []byte("study { zeta = 1\n alpha = 2\n beta = 3 }\nlet { a = b\n c = d\n e = f }\ncurve \"x\" { y = 1\n z = 2 }\n")
	_, err := Parse("s.hcl", ".", text)
	for range 30 {
		if _, again := Parse("s.hcl", ".", text); again.Error() != err.Error() {
			t.Fatalf("%v\n\n%v", err, again)
		}
	}
}

const small = "study { title = \"T\" }\ninput \"d\" {\n  file = \"d.csv\"\n  columns = { x = number, y = number }\n}\n" +
	"curve \"c\" {\n  from = d\n  response = y\n  along = x\n  smoothness { rule = reml }\n}\n"

// TestAcceptedForms: a byte-order mark, CRLF, comments.
func TestAcceptedForms(t *testing.T) {
	for _, text := range []string{small, "\xef\xbb\xbf" + small, strings.ReplaceAll(small, "\n", "\r\n"),
		"# " + strings.Repeat("-", 500) + "\n" + small} {
		if _, err := Parse("s.hcl", ".", []byte(text)); err != nil {
			t.Errorf("%v", err)
		}
	}
}

// TestHostileSpecs: what no honest file holds is refused before a parser
// recurses on it, and in bounded time.
func TestHostileSpecs(t *testing.T) {
	n := 1 << 20
	for name, text := range map[string]string{
		"brackets":     small + "let { a = " + strings.Repeat("(", n/2) + " }",
		"blocks":       strings.Repeat("a {\n", n/4),
		"not":          small + "let { a = " + strings.Repeat("!", n/2) + "true }",
		"minus":        small + "let { a = " + strings.Repeat("- ", n/4) + "1 }",
		"conditionals": small + "let { a = " + strings.Repeat("true ? 1 : ", n/16) + "1 }",
		"templates":    small + "let { a = " + strings.Repeat("\"${", n/8) + " }",
		"huge":         strings.Repeat("# comment\n", n/4),
		"sum":          small + "rows \"r\" {\n from = d\n add \"z\" { value = x" + strings.Repeat("+x", n/4) + " }\n}",
		"number":       small + "let { a = 1e999999999 }",
		"no UTF-8":     small + "# \xff\n",
		"NUL":          small + "\x00",
	} {
		_, err := Parse("s.hcl", ".", []byte(text))
		var m *Mistakes
		if !errors.As(err, &m) {
			t.Errorf("%s: %v", name, err)
			continue
		}
		if s := m.Error(); len(s) > 20_000 {
			t.Errorf("%s: a message of %d bytes", name, len(s))
		}
	}
}

// FuzzParse: no text makes the reader panic, and mistakes come in order.
func FuzzParse(f *testing.F) {
	f.Add([]byte(small))
	files, _ := filepath.Glob("../testdata/badspec/*.hcl")
	for _, name := range files {
		if b, err := os.ReadFile(name); err == nil {
			f.Add(b)
		}
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		if len(text) > 1<<14 {
			return
		}
		_, err := Parse("s.hcl", ".", text)
		var m *Mistakes
		if errors.As(err, &m) {
			last := 0
			for _, x := range m.List {
				if x.Range.Start.Line < last {
					t.Fatalf("line %d after line %d", x.Range.Start.Line, last)
				}
				last = x.Range.Start.Line
			}
			_ = m.Error()
		}
	})
}
