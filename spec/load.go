package spec

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"unicode/utf8"

	"github.com/hashicorp/hcl/v2"
	"github.com/hashicorp/hcl/v2/hclsyntax"
	"github.com/zclconf/go-cty/cty"

	"batten/spec/expr"
)

// Limits on a spec file.
const (
	maxBytes   = 1 << 20
	maxNesting = 100
	maxRun     = 100  // of ! or - in a row
	maxChoices = 2000 // of ?
)

// Load reads a study's spec: a file, or a folder that holds study.hcl. What is
// wrong in it comes back as *Mistakes.
func Load(path string) (*Study, error) {
	file := path
	if fi, err := os.Stat(path); err == nil && fi.IsDir() {
		file = filepath.Join(path, "study.hcl")
	}
	fi, err := os.Stat(file)
	if err != nil {
		return nil, err
	}
	if fi.Size() > maxBytes {
		return nil, single(file, nil, fmt.Sprintf("a spec of %d bytes", fi.Size()), fmt.Sprintf("expected at most %d bytes", maxBytes))
	}
	text, err := os.ReadFile(file)
	if err != nil {
		return nil, err
	}
	return Parse(file, filepath.Dir(file), text)
}

func single(file string, text []byte, found, expected string) *Mistakes {
	at := hcl.Range{Filename: file, Start: hcl.InitialPos, End: hcl.InitialPos}
	return &Mistakes{File: file, Text: text, List: []Mistake{{at, found, expected}}}
}

// Parse reads a spec from its text. dir is the study's folder.
func Parse(file, dir string, text []byte) (*Study, error) {
	file = filepath.ToSlash(file)
	s := &Study{File: file, Dir: dir, Text: text}
	body := bytes.TrimPrefix(text, []byte("\xef\xbb\xbf"))
	if len(text) > maxBytes {
		return nil, single(file, nil, fmt.Sprintf("a spec of %d bytes", len(text)), fmt.Sprintf("expected at most %d bytes", maxBytes))
	}
	if m := tooWild(file, body); m != nil {
		return nil, m
	}
	s.Text = body
	r := &reader{study: s, consts: map[string]cty.Value{}, broken: map[string]bool{}, badReadings: map[string][]string{}}
	r.mistakes.File, r.mistakes.Text = file, body
	f, diags := hclsyntax.ParseConfig(body, file, hcl.InitialPos)
	for _, d := range diags {
		at := hcl.Range{Filename: file, Start: hcl.InitialPos, End: hcl.InitialPos}
		if d.Subject != nil {
			at = *d.Subject
		}
		r.fail(at, strings.ToLower(d.Summary[:1])+d.Summary[1:], "%s", d.Detail)
	}
	if !diags.HasErrors() {
		r.read(f.Body.(*hclsyntax.Body))
	}
	s.Text = text
	if len(r.mistakes.List) > 0 {
		r.mistakes.sorted()
		return nil, &r.mistakes
	}
	return s, nil
}

// tooWild refuses text that no parser should be given: what is not UTF-8, and
// nesting that only a hostile file has, for the parser recurses on it.
func tooWild(file string, text []byte) *Mistakes {
	line, col := 1, 1
	at := func(found, expected string) *Mistakes {
		p := hcl.Pos{Line: line, Column: col}
		return &Mistakes{File: file, Text: text, List: []Mistake{{hcl.Range{Filename: file, Start: p, End: p}, found, expected}}}
	}
	depth, run, choices := 0, 0, 0
	for i := 0; i < len(text); {
		c, n := utf8.DecodeRune(text[i:])
		if c == utf8.RuneError && n == 1 {
			return at(fmt.Sprintf("the byte 0x%02x, which is no UTF-8", text[i]), "expected a UTF-8 file; save it as UTF-8")
		}
		switch c {
		case '(', '[', '{':
			if depth++; depth > maxNesting {
				return at("brackets nested too deep", fmt.Sprintf("expected at most %d levels", maxNesting))
			}
		case ')', ']', '}':
			depth = max(0, depth-1)
		case '?':
			if choices++; choices > maxChoices {
				return at("too many conditional expressions", fmt.Sprintf("expected at most %d question marks in a spec", maxChoices))
			}
		}
		if c == '!' || c == '-' {
			if run++; run > maxRun && !onCommentLine(text, i) {
				return at("a long run of signs", fmt.Sprintf("expected at most %d in a row", maxRun))
			}
		} else if c != ' ' {
			run = 0
		}
		i += n
		col++
		if c == '\n' {
			line, col = line+1, 1
		}
	}
	return nil
}

// onCommentLine tells whether a # or // stands before i on its line: rulers of
// dashes are common in comments.
func onCommentLine(text []byte, i int) bool {
	start := bytes.LastIndexByte(text[:i], '\n') + 1
	l := bytes.TrimSpace(text[start:i])
	return bytes.HasPrefix(l, []byte("#")) || bytes.HasPrefix(l, []byte("//"))
}

// Hash is the SHA-256 of the spec file, in hexadecimal.
func (s *Study) Hash() string {
	h := sha256.Sum256(s.Text)
	return hex.EncodeToString(h[:])
}

// InputByName returns the input of that name, or nil.
func (s *Study) InputByName(name string) *Input {
	return find(s.Inputs, name, func(x *Input) Name { return x.Name })
}

// RowsByName returns the rows of that name, or nil.
func (s *Study) RowsByName(name string) *Rows {
	return find(s.Rows, name, func(x *Rows) Name { return x.Name })
}

// CurveByName returns the curve of that name, or nil.
func (s *Study) CurveByName(name string) *Curve {
	return find(s.Curves, name, func(x *Curve) Name { return x.Name })
}

// ContrastByName returns the contrast of that name, or nil.
func (s *Study) ContrastByName(name string) *Contrast {
	return find(s.Contrasts, name, func(x *Contrast) Name { return x.Name })
}

func find[T any](list []*T, name string, of func(*T) Name) *T {
	for _, x := range list {
		if of(x).Text == name {
			return x
		}
	}
	return nil
}

// RowsInOrder returns the rows so that each stands after what it is made from.
func (s *Study) RowsInOrder() []*Rows {
	var out []*Rows
	done := map[string]bool{}
	var add func(r *Rows)
	add = func(r *Rows) {
		if r == nil || done[r.Name.Text] {
			return
		}
		done[r.Name.Text] = true
		add(s.RowsByName(r.From))
		out = append(out, r)
	}
	for _, r := range s.Rows {
		add(r)
	}
	return out
}

// blockTypes are the blocks of a study, those that may stand once first.
var blockTypes = []string{"study", "let", "input", "rows", "curve", "contrast", "guard", "export", "report"}

// read checks the whole spec.
func (r *reader) read(body *hclsyntax.Body) {
	top := &block{r: r, what: "the spec", attrs: body.Attributes, kids: body.Blocks, at: body.MissingItemRange()}
	for _, a := range body.Attributes {
		r.fail(a.NameRange, fmt.Sprintf("the argument %q outside every block", a.Name), "expected it inside a block: study, let, input, rows, curve ...")
	}
	top.attrs = nil
	top.finish(blockTypes...)
	r.lets(top)
	r.header(top)

	// One namespace: what is referred to must be told apart by its name.
	seen := map[string]Name{}
	kinds := map[string]string{}
	byType := map[string][]*hclsyntax.Block{}
	names := map[*hclsyntax.Block]Name{}
	for _, k := range body.Blocks {
		if k.Type == "study" || k.Type == "let" || !contains(blockTypes, k.Type) {
			continue
		}
		n, ok := r.label(k)
		if !ok {
			continue
		}
		if k.Type == "input" || k.Type == "rows" || k.Type == "curve" || k.Type == "contrast" {
			r.identifier(n, k.Type)
		}
		if first, dup := seen[n.Text]; dup {
			r.fail(n.Range, fmt.Sprintf("a second block named %q", n.Text), "expected another name, for all blocks share one namespace; the %s %q stands at line %d",
				kinds[n.Text], n.Text, first.Range.Start.Line)
			continue
		}
		seen[n.Text], kinds[n.Text] = n, k.Type
		byType[k.Type] = append(byType[k.Type], k)
		names[k] = n
	}
	for _, k := range byType["input"] {
		r.input(r.open(k), names[k])
	}
	r.rows(byType["rows"], names, kinds)
	for _, k := range byType["curve"] {
		r.curve(r.open(k), names[k], kinds)
	}
	for _, k := range byType["contrast"] {
		r.contrast(r.open(k), names[k], kinds)
	}
	for _, k := range byType["guard"] {
		r.guard(r.open(k), names[k], kinds)
	}
	for _, k := range byType["export"] {
		r.export(r.open(k), names[k], kinds)
	}
	for _, k := range byType["report"] {
		r.report(r.open(k), names[k], kinds)
	}
	r.outputs()
	if len(byType["curve"]) == 0 {
		r.fail(hcl.Range{Filename: r.study.File, Start: hcl.InitialPos, End: hcl.InitialPos}, "a study without a curve", "expected at least one block curve \"name\" { ... }")
	}
}

func contains(list []string, s string) bool {
	for _, x := range list {
		if x == s {
			return true
		}
	}
	return false
}

// lets evaluates the constants. They may use those written before them.
func (r *reader) lets(top *block) {
	for _, k := range top.kids {
		if k.Type != "let" {
			continue
		}
		b := r.open(k)
		if len(k.Labels) > 0 {
			r.fail(k.LabelRanges[0], "let with a name", "expected let { name = value }")
		}
		for _, x := range b.kids {
			r.fail(x.TypeRange, fmt.Sprintf("the block %q in let", x.Type), "expected name = value")
		}
		for _, a := range inOrder(b.attrs) {
			if _, dup := r.consts[a.Name]; dup {
				r.fail(a.NameRange, fmt.Sprintf("a second constant %q", a.Name), "expected another name")
				continue
			}
			v, ok := r.value(a.Expr, "a number, text or true and false")
			if !ok {
				// known, so that its uses are not reported too
				v = cty.NumberIntVal(0)
			} else if t := v.Type(); t != cty.Number && t != cty.String && t != cty.Bool {
				r.fail(a.Expr.Range(), describe(v), "expected a number, text or true and false")
				v = cty.NumberIntVal(0)
			} else if t == cty.Number {
				if f, _ := v.AsBigFloat().Float64(); math.IsInf(f, 0) {
					r.fail(a.Expr.Range(), "a number beyond 1e308", "expected a number that a double can hold")
					v = cty.NumberIntVal(0)
				}
			}
			r.consts[a.Name] = v
		}
	}
}

// inOrder returns arguments in the order of the file: HCL keeps them in a map.
func inOrder(attrs hclsyntax.Attributes) []*hclsyntax.Attribute {
	out := make([]*hclsyntax.Attribute, 0, len(attrs))
	for _, a := range attrs {
		out = append(out, a)
	}
	for i := range out {
		for j := i; j > 0 && out[j].NameRange.Start.Byte < out[j-1].NameRange.Start.Byte; j-- {
			out[j], out[j-1] = out[j-1], out[j]
		}
	}
	return out
}

func (r *reader) header(top *block) {
	b := top.one("study")
	if b == nil {
		r.fail(hcl.Range{Filename: r.study.File, Start: hcl.InitialPos, End: hcl.InitialPos}, "a spec without a study block", "expected study { title = \"...\" }")
		return
	}
	r.study.Title = b.text("title", true)
	r.study.Owner = b.text("owner", false)
	r.study.Licence = strings.TrimSpace(b.text("licence", false))
	seed, _ := b.whole("seed", false, 0, 1<<53, "a whole number from 0 to 2^53")
	r.study.Seed = int64(seed)
	b.finish()
}

// schema is the columns that an expression may name. A constant of the same
// name would be hidden, so it is a mistake.
func schema(cols []Column) map[string]expr.Kind {
	out := make(map[string]expr.Kind, len(cols))
	for _, c := range cols {
		out[c.Name.Text] = c.Kind
	}
	return out
}
