package spec

import (
	"fmt"
	"path"
	"strings"

	"github.com/hashicorp/hcl/v2"
	"github.com/hashicorp/hcl/v2/hclsyntax"

	"batten/spec/expr"
)

// input reads an input block.
func (r *reader) input(b *block, name Name) {
	in := &Input{Name: name, Missing: []string{""}, Decimal: '.'}
	r.study.Inputs = append(r.study.Inputs, in)
	in.Outside = b.flag("outside")
	if a := b.take("file", true); a != nil {
		in.FileRange = a.Expr.Range()
		if s, ok := r.textOf(a.Expr, "a path in quotes"); ok {
			in.File = r.path(s, a.Expr.Range(), in.Outside)
		}
	}
	if a := b.attrs["missing"]; a != nil {
		in.Missing, _ = b.texts("missing", false, "a list of texts such as [\"\", \"NA\"]")
	}
	b.take("missing", false)
	if s := b.text("separator", false); s != "" {
		if len(s) != 1 || strings.ContainsAny(s, "\"\r\n") || s[0] >= 0x80 {
			r.fail(b.attrs["separator"].Expr.Range(), fmt.Sprintf("the separator %q", s), "expected one character such as \",\" or \";\" or \"\\t\"")
		} else {
			in.Separator = s[0]
		}
	}
	if s := b.text("decimal", false); s != "" {
		if s != "." && s != "," {
			r.fail(b.attrs["decimal"].Expr.Range(), fmt.Sprintf("the decimal sign %q", s), "expected \".\" or \",\"")
		} else {
			in.Decimal = s[0]
		}
	}
	if in.Decimal == ',' && (in.Separator == ',' || in.Separator == 0 && !strings.HasSuffix(strings.TrimSuffix(in.File, ".gz"), ".tsv")) {
		r.fail(b.attrs["decimal"].Expr.Range(), "a decimal comma in a file separated by commas", "expected separator = \";\" beside decimal = \",\"")
	}
	if a := b.take("columns", true); a != nil {
		in.Columns = r.columns(a.Expr)
	}
	if a := b.take("headers", false); a != nil {
		r.headers(a.Expr, in.Columns)
	}
	cols := schema(in.Columns)
	r.shadows(in.Columns)
	expects, names := b.named("expect")
	for i, e := range expects {
		x := Expect{Name: names[i], Range: e.at}
		x.That = e.program("that", false, cols, expr.Bool)
		for _, n := range e.words("unique", false, "columns") {
			if r.column(n, in.Columns) != nil {
				x.Unique = append(x.Unique, n.Text)
			}
		}
		if (e.attrs["that"] == nil) == (e.attrs["unique"] == nil) {
			r.fail(e.at, fmt.Sprintf("the expect %q", names[i].Text), "expected either that = condition or unique = [columns] inside")
		}
		e.finish()
		in.Expects = append(in.Expects, x)
	}
	b.finish("expect")
}

// shadows reports constants that a column of the same name would hide.
func (r *reader) shadows(cols []Column) {
	for _, c := range cols {
		if _, ok := r.consts[c.Name.Text]; ok {
			r.fail(c.Name.Range, fmt.Sprintf("the column %q has the name of a constant", c.Name.Text), "expected names that are told apart; rename the one in let")
		}
	}
}

// path checks an input's path and returns it in slash form.
func (r *reader) path(s string, at hcl.Range, outside bool) string {
	switch {
	case s == "":
		r.fail(at, "an empty path", "expected a file under the study's folder")
	case strings.Contains(s, `\`):
		r.fail(at, fmt.Sprintf("a backslash in the path %q", s), "expected forward slashes: %q", strings.ReplaceAll(s, `\`, "/"))
	case strings.ContainsRune(s, 0):
		r.fail(at, "a NUL in a path", "expected a file's path")
	case !outside && (path.IsAbs(s) || leaves(s) || len(s) > 1 && s[1] == ':'):
		r.fail(at, fmt.Sprintf("the path %q leads out of the study's folder", s), "expected a file under it; write outside = true in the input if that is on purpose")
	default:
		if _, err := path.Match(s, "x"); err != nil {
			r.fail(at, fmt.Sprintf("the pattern %q", s), "expected a path in which * and ? stand for any characters, and [ and ] come in pairs")
		}
		return path.Clean(s)
	}
	return ""
}

// leaves tells whether a relative path leads above where it starts.
func leaves(s string) bool {
	c := path.Clean(s)
	return c == ".." || strings.HasPrefix(c, "../")
}

// columns reads { name = type, ... }.
func (r *reader) columns(e hclsyntax.Expression) []Column {
	obj, ok := e.(*hclsyntax.ObjectConsExpr)
	if !ok {
		r.fail(e.Range(), "columns that are no object", "expected columns = { name = text, other = number(\"unit\"), day = date }")
		return nil
	}
	var out []Column
	seen := map[string]Name{}
	for _, item := range obj.Items {
		n, ok := r.key(item.KeyExpr)
		if !ok {
			continue
		}
		r.identifier(n, "column")
		if first, dup := seen[n.Text]; dup {
			r.fail(n.Range, fmt.Sprintf("a second column %q", n.Text), "expected another name; the first stands at line %d", first.Range.Start.Line)
			continue
		}
		seen[n.Text] = n
		c := Column{Name: n}
		c.Kind, c.Unit, ok = r.columnType(item.ValueExpr)
		if ok {
			out = append(out, c)
		} else {
			out = append(out, Column{Name: n, Kind: expr.Number}) // so that its uses are not reported too
		}
	}
	if len(obj.Items) == 0 {
		r.fail(e.Range(), "no columns", "expected at least the columns that the study uses")
	}
	return out
}

func (r *reader) key(e hclsyntax.Expression) (Name, bool) {
	k, ok := e.(*hclsyntax.ObjectConsKeyExpr)
	if ok {
		if w := hcl.ExprAsKeyword(k.Wrapped); w != "" {
			return Name{w, k.Range()}, true
		}
		if t, ok := k.Wrapped.(*hclsyntax.TemplateExpr); ok && t.IsStringLiteral() {
			v, _ := t.Value(nil)
			return Name{v.AsString(), k.Range()}, true
		}
	}
	r.fail(e.Range(), "something that is no name", "expected a column's name")
	return Name{}, false
}

var typeNames = []string{"text", "number", "date"}

func (r *reader) columnType(e hclsyntax.Expression) (expr.Kind, string, bool) {
	const expected = "expected text, number, number(\"unit\") or date"
	if c, ok := e.(*hclsyntax.FunctionCallExpr); ok {
		if c.Name != "number" || len(c.Args) != 1 {
			r.fail(e.Range(), fmt.Sprintf("the type %s(...)", c.Name), expected+"%s", expr.Suggest(c.Name, append([]string(nil), typeNames...)))
			return 0, "", false
		}
		u, ok := r.textOf(c.Args[0], "a unit in quotes, such as number(\"mm\")")
		return expr.Number, u, ok
	}
	switch w := hcl.ExprAsKeyword(e); w {
	case "text":
		return expr.Text, "", true
	case "number":
		return expr.Number, "", true
	case "date":
		return expr.Date, "d", true
	case "":
		r.fail(e.Range(), "something that is no type", expected)
	default:
		r.fail(e.Range(), fmt.Sprintf("unknown type %q", w), expected+"%s", expr.Suggest(w, append([]string(nil), typeNames...)))
	}
	return 0, "", false
}

// headers reads { name = "header in the file" }.
func (r *reader) headers(e hclsyntax.Expression, cols []Column) {
	obj, ok := e.(*hclsyntax.ObjectConsExpr)
	if !ok {
		r.fail(e.Range(), "headers that are no object", "expected headers = { name = \"header in the file\" }")
		return
	}
	for _, item := range obj.Items {
		n, ok := r.key(item.KeyExpr)
		if !ok {
			continue
		}
		c := r.column(n, cols)
		if s, ok := r.textOf(item.ValueExpr, "the column's header in the file, in quotes"); ok && c != nil {
			c.Input = s
		}
	}
}

// column finds a column by name, or reports that there is none.
func (r *reader) column(n Name, cols []Column) *Column {
	if n.Text == "" {
		return nil
	}
	var all []string
	for i := range cols {
		if cols[i].Name.Text == n.Text {
			return &cols[i]
		}
		all = append(all, cols[i].Name.Text)
	}
	if len(all) > 0 {
		r.fail(n.Range, fmt.Sprintf("unknown column %q", n.Text), "expected one of %s%s", strings.Join(sorted(all), ", "), expr.Suggest(n.Text, all))
	}
	return nil
}

// rows reads the rows blocks, each after what it is made from.
func (r *reader) rows(list []*hclsyntax.Block, names map[*hclsyntax.Block]Name, kinds map[string]string) {
	byName := map[string]*hclsyntax.Block{}
	for _, k := range list {
		byName[names[k].Text] = k
	}
	state := map[string]int{} // 1 being read, 2 read
	made := map[string]*Rows{}
	var read func(k *hclsyntax.Block) *Rows
	read = func(k *hclsyntax.Block) *Rows {
		n := names[k]
		if state[n.Text] == 2 {
			return made[n.Text]
		}
		state[n.Text] = 1
		b := r.open(k)
		out := &Rows{Name: n}
		from := b.word("from", true, "the name of an input or of rows")
		out.From = from.Text
		if src := byName[from.Text]; src != nil {
			if state[from.Text] == 1 {
				r.fail(from.Range, fmt.Sprintf("rows %q are made from themselves", n.Text), "expected a chain of rows that starts at an input; this one comes back by way of %q", from.Text)
				r.broken[n.Text], r.broken[from.Text] = true, true
			} else if f := read(src); f != nil {
				out.Columns = append([]Column(nil), f.Columns...)
				r.broken[n.Text] = r.broken[n.Text] || r.broken[from.Text]
			}
		} else {
			out.Columns = append([]Column(nil), r.tableColumns(from, kinds)...)
			r.broken[n.Text] = len(out.Columns) == 0
		}
		r.steps(b, out)
		state[n.Text] = 2
		made[n.Text] = out
		return out
	}
	for _, k := range list {
		r.study.Rows = append(r.study.Rows, read(k))
	}
}

// tableColumns returns the columns of a table, or reports that the name is
// none.
func (r *reader) tableColumns(from Name, kinds map[string]string) []Column {
	if from.Text == "" {
		return nil
	}
	if in := r.study.InputByName(from.Text); in != nil {
		return in.Columns
	}
	if rows := r.study.RowsByName(from.Text); rows != nil {
		if r.broken[from.Text] {
			return nil
		}
		return rows.Columns
	}
	var all []string
	for n, k := range kinds {
		if k == "input" || k == "rows" {
			all = append(all, n)
		}
	}
	if k := kinds[from.Text]; k != "" {
		r.fail(from.Range, fmt.Sprintf("%q is a %s", from.Text, k), "expected an input or rows: %s", strings.Join(sorted(all), ", "))
		return nil
	}
	r.fail(from.Range, fmt.Sprintf("unknown name %q", from.Text), "expected an input or rows: %s%s", strings.Join(sorted(all), ", "), expr.Suggest(from.Text, all))
	return nil
}

// steps reads add and drop blocks in the order of the file.
func (r *reader) steps(b *block, out *Rows) {
	seen := map[string]Name{}
	for _, k := range b.kids {
		if k.Type != "add" && k.Type != "drop" {
			continue
		}
		n, ok := r.label(k)
		if !ok {
			continue
		}
		s := r.open(k)
		st := Step{Name: n, Range: k.TypeRange}
		if first, dup := seen[k.Type+n.Text]; dup {
			r.fail(n.Range, fmt.Sprintf("a second %s %q", k.Type, n.Text), "expected another name; the first stands at line %d", first.Range.Start.Line)
		}
		seen[k.Type+n.Text] = n
		cols := schema(out.Columns)
		if k.Type == "add" {
			r.identifier(n, "column")
			if _, dup := cols[n.Text]; dup {
				r.fail(n.Range, fmt.Sprintf("the column %q is there already", n.Text), "expected a new name")
			}
			if !r.broken[out.Name.Text] || s.attrs["value"] == nil {
				st.Add = s.program("value", true, cols, 0)
			}
			s.take("value", false)
			st.Unit = s.text("unit", false)
			c := Column{Name: n, Kind: expr.Number, Unit: st.Unit}
			if st.Add != nil {
				c.Kind = st.Add.Kind()
			}
			if c.Kind == expr.Date && c.Unit == "" {
				c.Unit = "d"
			}
			r.shadows([]Column{c})
			out.Columns = append(out.Columns, c)
		} else {
			if !r.broken[out.Name.Text] || s.attrs["when"] == nil {
				st.When = s.program("when", true, cols, expr.Bool)
			}
			s.take("when", false)
			st.Reason = s.text("reason", true)
		}
		s.finish()
		if st.Add != nil || st.When != nil {
			out.Steps = append(out.Steps, st)
		}
	}
	b.finish("add", "drop")
}
