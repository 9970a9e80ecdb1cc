package runner

import (
	"bytes"
	"context"
	"errors"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"batten/runner/ledger"
	"batten/spec"
)

// raise lifts one reading of a group, so that its fit moves and no other does.
func raise(t *testing.T, dir, group string) {
	t.Helper()
	path := filepath.Join(dir, "d.csv")
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(string(b), "\n")
	for i, l := range lines {
		if f := strings.Split(l, ","); f[0] == group && strings.HasPrefix(f[2], "3") {
			f[2] = "5.399"
			lines[i] = strings.Join(f, ",")
			put(t, dir, "d.csv", strings.Join(lines, "\n"))
			return
		}
	}
	t.Fatalf("no reading of %s to raise", group)
}

func ledgerLines(t *testing.T, dir string) []string {
	t.Helper()
	b, err := os.ReadFile(filepath.Join(dir, "ledger", "c.csv"))
	if err != nil {
		t.Fatal(err)
	}
	return strings.SplitAfter(string(b), "\n")
}

// differing lists the lines that differ between two files of as many lines.
func differing(t *testing.T, a, b []string) []int {
	t.Helper()
	if len(a) != len(b) {
		t.Fatalf("%d lines, were %d", len(b), len(a))
	}
	var out []int
	for i := range a {
		if a[i] != b[i] {
			out = append(out, i)
		}
	}
	return out
}

func acceptOnly(t *testing.T, dir string, only ...string) (*ledger.Acceptance, error) {
	t.Helper()
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	return AcceptAs(context.Background(), s, Consent{Reason: "looked at", Only: only}, Options{})
}

func mustAccept(t *testing.T, dir string, only ...string) *ledger.Acceptance {
	t.Helper()
	a, err := acceptOnly(t, dir, only...)
	if err != nil {
		t.Fatal(err)
	}
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	if c, err := CheckLedger(s, ""); err != nil {
		t.Fatalf("after an acceptance: %v, %+v", err, c)
	}
	return a
}

func movesOf(r *Run) map[string]string {
	out := map[string]string{}
	for i := range r.Record.Moved {
		m := &r.Record.Moved[i]
		out[m.Fit] = strings.Join(m.words(), "+")
	}
	return out
}

// TestOneGroupOneLine: a change of one row of one group is one changed line of
// the ledger.
func TestOneGroupOneLine(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(12, 30)})
	execute(t, dir, 2)
	mustAccept(t, dir)
	before := ledgerLines(t, dir)
	raise(t, dir, "g05")
	execute(t, dir, 2)
	mustAccept(t, dir)
	after := ledgerLines(t, dir)
	d := differing(t, before, after)
	if len(d) != 1 || !strings.HasPrefix(after[d[0]], "g05,") {
		t.Errorf("lines %v differ, expected that of g05 alone", d)
	}
	body := after[1 : len(after)-1]
	if !slices.IsSorted(body) {
		t.Error("the ledger is not sorted")
	}
	for _, l := range body {
		if len(l) > 1200 {
			t.Errorf("a line of %d bytes is not small", len(l))
		}
	}
}

// TestAcceptSome: some fits are accepted, the others keep their record and are
// pending until they are accepted too.
func TestAcceptSome(t *testing.T) {
	t.Setenv("BATTEN_WHO", "A. Tester")
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(6, 30)})
	execute(t, dir, 2)
	mustAccept(t, dir)
	before := ledgerLines(t, dir)
	for _, g := range []string{"g02", "g03", "g04"} {
		raise(t, dir, g)
	}
	// a group goes, another comes
	b, _ := os.ReadFile(filepath.Join(dir, "d.csv"))
	text := strings.ReplaceAll(string(b), "g00,", "g99,")
	put(t, dir, "d.csv", text)
	r := execute(t, dir, 2)
	if m := movesOf(r); len(m) != 5 || m["c[g=g00]"] != "gone" || m["c[g=g99]"] != "new" {
		t.Fatalf("moved: %v", m)
	}
	a := mustAccept(t, dir, "c[g=g03]", " c[g=g99] ")
	if !slices.Equal(a.Took, []string{"c[g=g03]", "c[g=g99]"}) || a.Fits != 2 || a.Moved != 2 || len(a.Gone) != 0 ||
		!slices.Equal(a.Only, []string{"c[g=g03]", "c[g=g99]"}) || !slices.Equal(a.Pending, []string{"c[g=g02]", "c[g=g04]", "c[g=g00]"}) {
		t.Errorf("%+v", a)
	}
	after := ledgerLines(t, dir)
	if !strings.HasPrefix(after[len(after)-2], "g99,") || !strings.HasPrefix(after[1], "g00,") {
		t.Error("g99 does not stand last, or g00 not first")
	}
	if d := differing(t, before, slices.Delete(slices.Clone(after), len(after)-2, len(after)-1)); len(d) != 1 || d[0] != 4 {
		t.Errorf("lines %v differ, expected that of g03 alone", d)
	}
	// a run says what is left
	r = execute(t, dir, 2)
	m := movesOf(r)
	for _, g := range []string{"g02", "g04", "g00"} {
		if !strings.HasSuffix(m["c[g="+g+"]"], "+pending") {
			t.Errorf("%s is not pending: %v", g, m)
		}
	}
	if len(m) != 3 || !strings.Contains(r.Ledger(), "accepted in part") {
		t.Errorf("moved: %v; %s", m, r.Ledger())
	}
	doc, err := r.Document(context.Background(), "", nil, true)
	if err != nil || len(doc.Summary.Moved) != 3 || !doc.Summary.Moved[0].Pending || !strings.Contains(doc.Summary.Moved[0].What, "pending") {
		t.Errorf("%+v, %v", doc.Summary, err)
	}
	page, err := os.ReadFile(filepath.Join(dir, "out", "page.md"))
	if err != nil || !strings.Contains(string(page), "3 of them are pending") {
		t.Errorf("the report does not say what is pending: %v", err)
	}
	// a comparison too
	cmp, err := Compare(context.Background(), r.Study, "", "", Options{})
	if err != nil {
		t.Fatal(err)
	}
	for _, m := range cmp.Moves {
		if !slices.Contains(m.What, "pending") {
			t.Errorf("%s: %v", m.Fit, m.What)
		}
	}
	// why says by which acceptance a fit stands
	last, err := Reopen(r.Study, "")
	if err != nil {
		t.Fatal(err)
	}
	for g, want := range map[string][2]string{
		"g01": {"accepted 20", ": looked at"},
		"g02": {"accepted 20", "A. Tester left it as it was"},
		"g03": {"accepted in part 20", ": looked at"},
	} {
		l := fitLine(last.state, "c", "c[g="+g+"]")
		if !strings.HasPrefix(l, want[0]) || !strings.HasSuffix(l, want[1]) {
			t.Errorf("%s: %s", g, l)
		}
	}
	// what moves only now is not pending
	raise(t, dir, "g05")
	if m := movesOf(execute(t, dir, 2)); len(m) != 4 || m["c[g=g05]"] == "" || strings.Contains(m["c[g=g05]"], "pending") {
		t.Errorf("moved: %v", m)
	}
	// the one that is gone, then all the rest
	if a = mustAccept(t, dir, "c[g=g00]"); !slices.Equal(a.Gone, []string{"c[g=g00]"}) || a.Fits != 0 || len(a.Pending) != 3 {
		t.Errorf("%+v", a)
	}
	if strings.HasPrefix(ledgerLines(t, dir)[1], "g00,") {
		t.Error("g00 is still in the ledger")
	}
	if a = mustAccept(t, dir, "c"); !slices.Equal(a.Took, []string{"c"}) || a.Fits != 6 || len(a.Pending) != 0 {
		t.Errorf("%+v", a)
	}
	r = execute(t, dir, 2)
	if len(r.Record.Moved) != 0 {
		t.Errorf("after all was accepted, moved: %v", movesOf(r))
	}
	if n := len(r.state.Accepted); n != 4 {
		t.Errorf("%d acceptances, expected 4", n)
	}
	// the same fits in parts or at once are the same lines
	parts := ledgerLines(t, dir)
	mustAccept(t, dir)
	if d := differing(t, parts, ledgerLines(t, dir)); len(d) != 0 {
		t.Errorf("lines %v differ between acceptance in parts and at once", d)
	}
}

// TestAcceptSomeFirst: what is not accepted stays out of a ledger that was not
// there.
func TestAcceptSomeFirst(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(3, 30)})
	execute(t, dir, 2)
	a := mustAccept(t, dir, `c[g="g01"]`)
	if a.Fits != 1 || a.Moved != 0 || len(a.Pending) != 2 {
		t.Errorf("%+v", a)
	}
	if l := ledgerLines(t, dir); len(l) != 3 || !strings.HasPrefix(l[1], "g01,") {
		t.Errorf("%q", l)
	}
	if m := movesOf(execute(t, dir, 2)); m["c[g=g00]"] != "new+pending" || m["c[g=g02]"] != "new+pending" || len(m) != 2 {
		t.Errorf("moved: %v", m)
	}
}

// TestAcceptBesideRefused: a refusal blocks the fits it is about, and nothing
// else where the others are named.
func TestAcceptBesideRefused(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(4, 30)})
	b, _ := os.ReadFile(filepath.Join(dir, "study.hcl"))
	put(t, dir, "study.hcl", strings.Replace(strings.Replace(string(b), "edf < 40", `g != "g02"`, 1), "otherwise = warn", "otherwise = refuse", 1))
	s, err := spec.Load(dir)
	if err != nil {
		t.Fatal(err)
	}
	var refused *RefusedError
	if _, err := Execute(context.Background(), s, Options{}); !errors.As(err, &refused) {
		t.Fatal(err)
	}
	for _, only := range [][]string{nil, {"c"}, {"c[g=g02]"}, {"c[g=g00]", "c[g=g02]"}} {
		if _, err := acceptOnly(t, dir, only...); !errors.As(err, &refused) || !strings.Contains(err.Error(), "c[g=g02]") {
			t.Errorf("%q: %v", only, err)
		}
	}
	if _, err := os.Stat(filepath.Join(dir, "ledger")); err == nil {
		t.Error("a refused acceptance made a ledger")
	}
	// a refusal that is not about one fit blocks all
	guarded, _ := os.ReadFile(filepath.Join(dir, "study.hcl"))
	put(t, dir, "study.hcl", string(guarded)+`guard "all there" {
  on        = d
  require   = rows_read > 1000000
  otherwise = refuse
}
`)
	if s, err = spec.Load(dir); err != nil {
		t.Fatal(err)
	}
	if _, err := Execute(context.Background(), s, Options{}); !errors.As(err, &refused) || len(refused.Refused) != 2 {
		t.Fatal(err)
	}
	if _, err := acceptOnly(t, dir, "c[g=g00]"); !errors.As(err, &refused) || !strings.Contains(err.Error(), "all there") || strings.Contains(err.Error(), "g02") {
		t.Errorf("%v", err)
	}
	put(t, dir, "study.hcl", string(guarded))
	if s, err = spec.Load(dir); err != nil {
		t.Fatal(err)
	}
	if _, err := Execute(context.Background(), s, Options{}); !errors.As(err, &refused) {
		t.Fatal(err)
	}
	if a := mustAccept(t, dir, "c[g=g00]", "c[g=g03]"); a.Fits != 2 || !slices.Equal(a.Pending, []string{"c[g=g01]"}) {
		t.Errorf("%+v", a)
	}
}

// TestOnlyMistakes: what is said of requests that name nothing.
func TestOnlyMistakes(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": append(rowsOf(2, 30), "short,1,1,1,lot1")})
	execute(t, dir, 2)
	for only, want := range map[string]string{
		"":                  "names no curve",
		"[g=g00]":           "names no curve",
		"d":                 `has no curve "d"; it has: c; did you mean "c"?`,
		"c[g=g00":           "the bracket is not closed",
		"c[]":               "no col=value",
		"c[g00]":            "no col=value",
		"c[g=g00,]":         "no col=value",
		"c[g=g00, g=g01]":   `column "g" stands twice`,
		`c[g="g00"x]`:       `stands "x"`,
		"c[h=g00]":          `is not grouped by "h"; it is grouped by: g; did you mean "g"?`,
		"c[g=g77]":          "has no group with g=g77; its groups are: g=g00 | g=g01",
		"c[g=short]":        "there is no curve for c[g=short]:",
		"c[g=g00], c[g=g1]": `is not grouped by "c[g"`,
	} {
		_, err := acceptOnly(t, dir, only)
		var usage *UsageError
		if !errors.As(err, &usage) || !strings.Contains(err.Error(), want) {
			t.Errorf("%q: %v, want %q", only, err, want)
		}
	}
	if _, err := os.Stat(filepath.Join(dir, "ledger")); err == nil {
		t.Error("a mistake made a ledger")
	}
}

// TestOtherAxes: fits of another response, axis or grouping do not stand beside
// the accepted ones; the curve is accepted whole or not at all.
func TestOtherAxes(t *testing.T) {
	for name, c := range map[string]struct{ old, new, only string }{
		"unit":     {`y = number("K")`, `y = number("mK")`, "c[g=g00]"},
		"axis":     {`x = number("h")`, `x = number("d")`, "c[g=g00]"},
		"grouping": {"by       = [g]", "by       = [g, lot]", "c[g=g00, lot=lot1]"},
	} {
		t.Run(name, func(t *testing.T) {
			dir := write(t, "reml", map[string][]string{"d.csv": rowsOf(2, 60)})
			execute(t, dir, 2)
			mustAccept(t, dir)
			b, _ := os.ReadFile(filepath.Join(dir, "study.hcl"))
			put(t, dir, "study.hcl", strings.Replace(string(b), c.old, c.new, 1))
			execute(t, dir, 2)
			was := ledgerLines(t, dir)
			if _, err := acceptOnly(t, dir, c.only); err == nil || !strings.Contains(err.Error(), "accept the curve whole, --only c") {
				t.Errorf("%v", err)
			}
			if d := differing(t, was, ledgerLines(t, dir)); len(d) != 0 {
				t.Errorf("lines %v were changed", d)
			}
			mustAccept(t, dir, "c")
			if r := execute(t, dir, 2); len(r.Record.Moved) != 0 {
				t.Errorf("moved: %v", movesOf(r))
			}
		})
	}
}

// TestCurveGone: a curve that the spec no longer has leaves the ledger where
// that is accepted, and stays pending where others are.
func TestCurveGone(t *testing.T) {
	dir := write(t, "gcv", map[string][]string{"d.csv": rowsOf(2, 30)})
	b, _ := os.ReadFile(filepath.Join(dir, "study.hcl"))
	text := string(b)
	more := strings.Replace(text[strings.Index(text, "curve "):strings.Index(text, "guard ")], `"c"`, `"extra"`, 1)
	put(t, dir, "study.hcl", text+more)
	execute(t, dir, 2)
	mustAccept(t, dir)
	put(t, dir, "study.hcl", text)
	execute(t, dir, 2)
	extra := filepath.Join(dir, "ledger", "extra.csv")
	was, err := os.ReadFile(extra)
	if err != nil {
		t.Fatal(err)
	}
	if a := mustAccept(t, dir, "c[g=g00]"); !slices.Equal(a.Pending, []string{"extra[g=g00]", "extra[g=g01]"}) {
		t.Errorf("%+v", a)
	}
	if now, _ := os.ReadFile(extra); !bytes.Equal(was, now) {
		t.Error("the curve that was not accepted as gone was touched")
	}
	if m := movesOf(execute(t, dir, 2)); m["extra[g=g00]"] != "gone+pending" {
		t.Errorf("moved: %v", m)
	}
	if a := mustAccept(t, dir, "extra"); len(a.Gone) != 2 || len(a.Pending) != 0 {
		t.Errorf("%+v", a)
	}
	if _, err := os.Stat(extra); err == nil {
		t.Error("the curve's file is still there")
	}
	if r := execute(t, dir, 2); len(r.Record.Moved) != 0 {
		t.Errorf("moved: %v", movesOf(r))
	}
}

// TestGroupOrder: kept lines stand among taken ones in the order of a run,
// numbers as numbers.
func TestGroupOrder(t *testing.T) {
	dir := t.TempDir()
	put(t, dir, "study.hcl", `study { title = "Numbers (invented)" }
input "d" {
  file    = "d.csv"
  columns = { k = number, x = number, y = number }
}
curve "c" {
  from     = d
  response = y
  along    = x
  by       = [k]
  smoothness { rule = reml }
}
`)
	rows := func(keys ...string) {
		text := "k,x,y\n"
		for _, k := range keys {
			for i, y := range []string{"1.1", "2.3", "2.9", "4.2", "4.8", "6.1"} {
				text += k + "," + string(rune('0'+i)) + "," + y + "\n"
			}
		}
		put(t, dir, "d.csv", text)
	}
	order := func() string {
		var out []string
		for _, l := range ledgerLines(t, dir)[1:] {
			if k, _, ok := strings.Cut(l, ","); ok {
				out = append(out, k)
			}
		}
		return strings.Join(out, " ")
	}
	rows("9", "10", "-2", "1.5")
	execute(t, dir, 1)
	mustAccept(t, dir)
	rows("9", "100", "1.5", "2")
	execute(t, dir, 1)
	mustAccept(t, dir, "c[k=100]", "c[k=2]")
	if got := order(); got != "-2 1.5 2 9 10 100" {
		t.Errorf("order %s", got)
	}
}
