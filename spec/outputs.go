package spec

import (
	"fmt"
	"path"
	"slices"
	"strings"

	"github.com/hashicorp/hcl/v2"

	"batten/spec/expr"
)

// curveNamed finds the curve that a name stands for, or reports that it is
// none. ok is false too where the curve itself could not be read.
func (r *reader) curveNamed(n Name, kinds map[string]string) *Curve {
	if n.Text == "" {
		return nil
	}
	if c := r.study.CurveByName(n.Text); c != nil {
		return c
	}
	r.wrongKind(n, kinds, "a curve", "curve")
	return nil
}

func (r *reader) wrongKind(n Name, kinds map[string]string, want string, types ...string) {
	var all []string
	for name, k := range kinds {
		if slices.Contains(types, k) {
			all = append(all, name)
		}
	}
	if k := kinds[n.Text]; k != "" {
		r.fail(n.Range, fmt.Sprintf("%q is %s %s", n.Text, article(k), k), "expected %s: %s", want, strings.Join(sorted(all), ", "))
		return
	}
	r.fail(n.Range, fmt.Sprintf("unknown name %q", n.Text), "expected %s: %s%s", want, strings.Join(sorted(all), ", "), expr.Suggest(n.Text, all))
}

func article(noun string) string {
	if strings.ContainsRune("aeiou", rune(noun[0])) {
		return "an"
	}
	return "a"
}

func (r *reader) contrast(b *block, name Name, kinds map[string]string) {
	c := &Contrast{Name: name}
	r.study.Contrasts = append(r.study.Contrasts, c)
	of := b.word("of", true, "a curve")
	c.Of = of.Text
	across := b.word("across", true, "one of the curve's by columns")
	c.Across = across.Text
	if def := r.curveNamed(of, kinds); def != nil && across.Text != "" {
		if len(def.By) == 0 {
			r.fail(across.Range, fmt.Sprintf("a contrast of the curve %q, which has no groups", of.Text), "expected a curve with by = [...]")
		} else {
			r.column(across, def.By)
		}
	}
	two, at := b.texts("minus", true, "two values of the across column, as text in quotes")
	if a := b.attrs["minus"]; a != nil {
		switch {
		case len(two) != 2:
			r.fail(a.Expr.Range(), fmt.Sprintf("%d values in minus", len(two)), "expected two: the first minus the second")
		case two[0] == two[1]:
			r.fail(at[1], fmt.Sprintf("%q minus itself", two[0]), "expected two different values")
		default:
			c.Minus = [2]string{two[0], two[1]}
		}
	}
	b.finish()
}

var exportKinds = []string{ExportGrid, ExportFits, ExportReadings, ExportEvidence, ExportResiduals, ExportCoefficients, ExportTests}

func (r *reader) export(b *block, name Name, kinds map[string]string) {
	e := &Export{Name: name, Range: b.at}
	r.study.Exports = append(r.study.Exports, e)
	of := b.word("of", true, "a curve")
	e.Of = of.Text
	what := b.word("what", true, "one of "+strings.Join(exportKinds, ", "))
	e.What = what.Text
	if what.Text != "" && !slices.Contains(exportKinds, what.Text) {
		r.fail(what.Range, fmt.Sprintf("unknown kind of export %q", what.Text), "expected one of %s%s", strings.Join(exportKinds, ", "), expr.Suggest(what.Text, slices.Clone(exportKinds)))
	}
	if r.study.ContrastByName(of.Text) != nil {
		if what.Text != "" && what.Text != ExportGrid && what.Text != ExportTests {
			r.fail(what.Range, fmt.Sprintf("%s of a contrast", what.Text), "expected what = grid or tests, for a contrast has no other table")
		}
	} else if what.Text == ExportTests {
		r.fail(what.Range, "tests of something that is no contrast", "expected of = a contrast")
	} else if of.Text != "" && r.study.CurveByName(of.Text) == nil {
		r.wrongKind(of, kinds, "a curve or a contrast", "curve", "contrast")
	} else if c := r.study.CurveByName(of.Text); c != nil && what.Text == ExportReadings && len(c.Readings) == 0 {
		r.fail(what.Range, fmt.Sprintf("readings of the curve %q, which has none", of.Text), "expected reading blocks in the curve")
	}
	if a := b.take("file", true); a != nil {
		e.Range = a.Expr.Range()
		if s, ok := r.textOf(a.Expr, "a path in quotes"); ok {
			e.File = r.output(s, a.Expr.Range(), ".csv")
		}
	}
	e.Schema = b.flag("schema")
	if e.SafeCells = true; b.take("safe_cells", false) != nil {
		e.SafeCells = b.flag("safe_cells")
	}
	b.finish()
}

func (r *reader) report(b *block, name Name, kinds map[string]string) {
	out := &Report{Name: name, Range: b.at}
	r.study.Reports = append(r.study.Reports, out)
	if out.Title = b.text("title", false); out.Title == "" {
		out.Title = r.study.Title
	}
	files, at := b.texts("files", true, "paths in quotes, ending in .md or .html")
	for i, f := range files {
		out.Range = at[0]
		if p := r.output(f, at[i], ".md", ".html"); p != "" {
			out.Files = append(out.Files, p)
		}
	}
	if a := b.attrs["files"]; a != nil && len(files) == 0 && !r.failedAt(a.Expr.Range()) {
		r.fail(a.Expr.Range(), "a report without files", "expected files = [\"out/name.md\", \"out/name.html\"]")
	}
	for _, n := range b.words("show", false, "curves and contrasts") {
		if r.study.CurveByName(n.Text) == nil && r.study.ContrastByName(n.Text) == nil {
			r.wrongKind(n, kinds, "a curve or a contrast", "curve", "contrast")
			continue
		}
		out.Show = append(out.Show, n.Text)
	}
	if b.attrs["show"] == nil {
		for _, c := range r.study.Curves {
			out.Show = append(out.Show, c.Name.Text)
		}
		for _, c := range r.study.Contrasts {
			out.Show = append(out.Show, c.Name.Text)
		}
	}
	b.finish()
}

// output checks the path of a file that the study makes, and returns it clean.
func (r *reader) output(s string, at hcl.Range, endings ...string) string {
	clean := path.Clean(s)
	first, _, _ := strings.Cut(strings.ToLower(clean), "/")
	switch {
	case strings.Contains(s, `\`):
		r.fail(at, fmt.Sprintf("a backslash in the path %q", s), "expected forward slashes: %q", strings.ReplaceAll(s, `\`, "/"))
	case s == "" || strings.ContainsFunc(s, func(c rune) bool { return c < ' ' || c == 0x7f }) || strings.ContainsAny(s, `<>"|?*`):
		r.fail(at, fmt.Sprintf("the path %q", s), "expected a file name without control characters and without < > \" | ? *")
	case path.IsAbs(s) || leaves(s) || len(s) > 1 && s[1] == ':':
		r.fail(at, fmt.Sprintf("the path %q leads out of the study's folder", s), "expected a file under it, such as out/name%s", endings[0])
	case first == ".batten" || first == "ledger":
		r.fail(at, fmt.Sprintf("an output in %s/", first), "expected another folder, for %s/ is kept by the program", first)
	case !slices.ContainsFunc(endings, func(e string) bool { return strings.HasSuffix(clean, e) && path.Base(clean) != e }):
		r.fail(at, fmt.Sprintf("the file %q", s), "expected a name ending in %s", strings.Join(endings, " or "))
	default:
		return clean
	}
	return ""
}

// outputs reports files that two outputs would write, or that are inputs.
func (r *reader) outputs() {
	type place struct {
		at   hcl.Range
		what string
	}
	seen := map[string]place{}
	for _, in := range r.study.Inputs {
		if in.File != "" {
			seen[strings.ToLower(in.File)] = place{in.FileRange, fmt.Sprintf("input %q", in.Name.Text)}
		}
	}
	add := func(file string, at hcl.Range, what string) (free bool) {
		if file == "" {
			return false
		}
		k := strings.ToLower(file)
		if first, dup := seen[k]; dup {
			r.fail(at, fmt.Sprintf("the file %q, which %s has already (line %d)", file, first.what, first.at.Start.Line), "expected a file of its own for each")
			return false
		}
		for _, in := range r.study.Inputs {
			if ok, _ := path.Match(in.File, file); ok {
				r.fail(at, fmt.Sprintf("the file %q, which input %q would read in the next run", file, in.Name.Text), "expected a name that %q does not match", in.File)
				return false
			}
		}
		seen[k] = place{at, what}
		return true
	}
	for _, e := range r.study.Exports {
		// two exports to one file would have one schema file too: that is said once
		if add(e.File, e.Range, fmt.Sprintf("export %q", e.Name.Text)) {
			add(e.SchemaFile(), e.Range, fmt.Sprintf("the schema of export %q", e.Name.Text))
		}
	}
	for _, rep := range r.study.Reports {
		for _, f := range rep.Files {
			add(f, rep.Range, fmt.Sprintf("report %q", rep.Name.Text))
		}
	}
}
