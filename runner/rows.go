package runner

import (
	"context"
	"errors"
	"fmt"
	"strconv"
	"strings"

	"batten/runner/table"
	"batten/spec"
	"batten/spec/expr"
)

// rowCount says what became of an input's rows on the way to a table.
type rowCount struct {
	Read    int
	Dropped []dropCount
}

type dropCount struct {
	Rows, Label, Reason string
	N                   int
}

// frame is a table in the making: columns, and the rows of the input that are
// still in it.
type frame struct {
	n     int
	cols  map[string]*expr.Column
	names []string
	input *table.Table
	row   []int32 // row[i] is the input's row; nil while none was dropped
	count rowCount
}

// place names the file and line of row i.
func (f *frame) place(i int) (path string, line int) {
	r := i
	if f.row != nil {
		r = int(f.row[i])
	}
	file := 0
	if f.input.FileOf != nil {
		file = int(f.input.FileOf[r])
	}
	return f.input.Files[file].Path, int(f.input.Line[r])
}

// tables reads inputs and makes rows, each once, on demand.
type tables struct {
	study   *spec.Study
	workers int
	frames  map[string]*frame
}

// get returns the table of that name.
func (t *tables) get(ctx context.Context, name string) (*frame, error) {
	if f := t.frames[name]; f != nil {
		return f, nil
	}
	var f *frame
	var err error
	if in := t.study.InputByName(name); in != nil {
		f, err = t.read(ctx, in)
	} else {
		r := t.study.RowsByName(name)
		var from *frame
		if from, err = t.get(ctx, r.From); err == nil {
			f, err = applySteps(from, r)
		}
	}
	if err != nil {
		return nil, err
	}
	t.frames[name] = f
	return f, nil
}

func (t *tables) read(ctx context.Context, in *spec.Input) (*frame, error) {
	tab, err := table.Read(ctx, source(t.study, in), t.workers)
	if err != nil {
		return nil, dataError(err)
	}
	f := &frame{n: tab.N, cols: tab.Cols, input: tab, count: rowCount{Read: tab.N}}
	for _, c := range in.Columns {
		f.names = append(f.names, c.Name.Text)
	}
	if err := expectations(t.study, in, f); err != nil {
		return nil, err
	}
	return f, nil
}

// source describes an input's files to the table reader.
func source(s *spec.Study, in *spec.Input) table.Source {
	src := table.Source{
		Name: in.Name.Text, Root: s.Dir, Pattern: in.File, Missing: in.Missing,
		Separator: in.Separator, Decimal: in.Decimal, Outside: in.Outside,
		At: at(s, in.FileRange.Start.Line, in.FileRange.Start.Column), Instead: in.Instead,
	}
	for _, c := range in.Columns {
		header := c.Input
		if header == "" {
			header = c.Name.Text
		}
		src.Columns = append(src.Columns, table.Column{
			Name: c.Name.Text, Header: header, Kind: c.Kind,
			At: at(s, c.Name.Range.Start.Line, c.Name.Range.Start.Column),
		})
	}
	return src
}

func at(s *spec.Study, line, col int) string {
	return fmt.Sprintf("%s:%d:%d", s.File, line, col)
}

// dataError turns the reader's problems into a DataError and leaves other
// errors (a missing file, an unreadable folder) as they are.
func dataError(err error) error {
	var ps *table.Problems
	if errors.As(err, &ps) {
		return &DataError{Problems: strings.Split(ps.Error(), "\n")}
	}
	var p *table.Problem
	if errors.As(err, &p) {
		return &DataError{Problems: []string{p.Error()}}
	}
	return err
}

// problemCap is how many broken rows are listed before the rest is counted.
const problemCap = 20

// expectations holds an input's rows to its expect blocks.
func expectations(s *spec.Study, in *spec.Input, f *frame) error {
	var out DataError
	add := func(text string) {
		if len(out.Problems) < problemCap {
			out.Problems = append(out.Problems, text)
		} else {
			out.More++
		}
	}
	for _, e := range in.Expects {
		where := at(s, e.Range.Start.Line, e.Range.Start.Column)
		if e.That != nil {
			v := e.That.Eval(func(n string) *expr.Column { return f.cols[n] }, f.n)
			for i, t := range v.Truth {
				if t == expr.True {
					continue
				}
				path, line := f.place(i)
				why := "does not hold"
				if t == expr.Unknown {
					why = "cannot be told, a value is missing"
				}
				add(fmt.Sprintf("%s:%d: expected %q (%s), which %s here: %s; mend the row, or drop it from the file",
					path, line, e.Name.Text, where, why, describe(f, e.That.Uses(), i)))
			}
		}
		if len(e.Unique) > 0 {
			seen := make(map[string]int, f.n)
			var key []byte
			for i := range f.n {
				key = key[:0]
				for _, c := range e.Unique {
					key = append(append(key, cellText(f.cols[c], i)...), 0)
				}
				if first, dup := seen[string(key)]; dup {
					path, line := f.place(i)
					p0, l0 := f.place(first)
					add(fmt.Sprintf("%s:%d: expected %q (%s), but %s stands already at %s:%d; remove one of the two rows",
						path, line, e.Name.Text, where, describe(f, e.Unique, i), p0, l0))
					continue
				}
				seen[string(key)] = i
			}
		}
	}
	if len(out.Problems) > 0 {
		return &out
	}
	return nil
}

func describe(f *frame, cols []string, i int) string {
	var b strings.Builder
	for k, c := range cols {
		if k > 0 {
			b.WriteString(", ")
		}
		text := cellText(f.cols[c], i)
		if f.cols[c].Missing(i) {
			text = "missing"
		} else if len(text) > 40 || strings.ContainsAny(text, "\n\r\t\x1b") {
			text = strconv.QuoteToASCII(text[:min(40, len(text))])
		}
		b.WriteString(c + " = " + text)
	}
	return b.String()
}

// cellText writes a cell as exports and messages show it; "" where missing.
func cellText(c *expr.Column, i int) string {
	if c.Missing(i) {
		return ""
	}
	switch c.Kind {
	case expr.Text:
		return c.Dict[c.Code[i]]
	case expr.Date:
		return expr.FormatDate(c.Num[i])
	case expr.Bool:
		return strconv.FormatBool(c.Truth[i] == expr.True)
	default:
		return table.FormatNumber(c.Num[i])
	}
}

// applySteps makes rows from a frame: its steps in the order of the file.
// The frame it starts from is left as it is.
func applySteps(from *frame, r *spec.Rows) (*frame, error) {
	f := &frame{n: from.n, cols: make(map[string]*expr.Column, len(from.cols)+len(r.Steps)),
		names: append([]string(nil), from.names...), input: from.input, row: from.row}
	f.count = rowCount{Read: from.count.Read, Dropped: append([]dropCount(nil), from.count.Dropped...)}
	for k, c := range from.cols {
		f.cols[k] = c
	}
	get := func(n string) *expr.Column { return f.cols[n] }
	for _, s := range r.Steps {
		if s.Add != nil {
			f.cols[s.Name.Text] = s.Add.Eval(get, f.n)
			f.names = append(f.names, s.Name.Text)
			continue
		}
		v := s.When.Eval(get, f.n)
		keep := make([]int32, 0, f.n)
		for i, t := range v.Truth {
			if t != expr.True { // a missing condition is not true: the row stays
				keep = append(keep, int32(i))
			}
		}
		f.count.Dropped = append(f.count.Dropped,
			dropCount{Rows: r.Name.Text, Label: s.Name.Text, Reason: s.Reason, N: f.n - len(keep)})
		if len(keep) == f.n {
			continue
		}
		for name, c := range f.cols {
			f.cols[name] = pick(c, keep)
		}
		row := make([]int32, len(keep))
		for k, i := range keep {
			row[k] = i
			if f.row != nil {
				row[k] = f.row[i]
			}
		}
		f.row, f.n = row, len(keep)
	}
	return f, nil
}

// pick returns the rows of c that keep names.
func pick(c *expr.Column, keep []int32) *expr.Column {
	out := &expr.Column{Kind: c.Kind, Dict: c.Dict}
	switch c.Kind {
	case expr.Text:
		out.Code = make([]uint32, len(keep))
		for k, i := range keep {
			out.Code[k] = c.Code[i]
		}
	case expr.Bool:
		out.Truth = make([]uint8, len(keep))
		for k, i := range keep {
			out.Truth[k] = c.Truth[i]
		}
	default:
		out.Num = make([]float64, len(keep))
		for k, i := range keep {
			out.Num[k] = c.Num[i]
		}
	}
	return out
}
