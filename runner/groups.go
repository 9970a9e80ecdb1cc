package runner

import (
	"fmt"
	"math"
	"sort"
	"strconv"
	"strings"

	"batten/runner/table"
	"batten/spec"
	"batten/spec/expr"
)

// group is one combination of the by columns' values, with its rows.
type group struct {
	values []value
	rows   []int32 // of the frame
}

// value is one by column's value: text, or a number (dates as days).
type value struct {
	text string
	num  float64
	kind expr.Kind
}

func (v value) String() string {
	switch v.kind {
	case expr.Number:
		return table.FormatNumber(v.num)
	case expr.Date:
		return expr.FormatDate(v.num)
	default:
		return v.text
	}
}

// less orders numbers and dates as numbers, text by bytes.
func (v value) compare(w value) int {
	if v.kind == expr.Text || v.kind == expr.Bool {
		return strings.Compare(v.text, w.text)
	}
	switch {
	case v.num < w.num:
		return -1
	case v.num > w.num:
		return 1
	}
	return 0
}

// setAside counts the rows that lack a value the curve needs.
type setAside struct {
	Column string
	N      int
}

// form sorts a frame's rows into the groups of a curve: groups in the order
// of their values, rows in the order of the frame. Rows with a missing by, x,
// response, weight or block are set aside under the first that is missing.
func form(c *spec.Curve, f *frame, study *spec.Study) ([]group, []setAside, error) {
	var needed []string
	for _, b := range c.By {
		needed = append(needed, b.Name.Text)
	}
	needed = append(needed, c.Along.Name.Text, c.Response.Name.Text)
	if c.Weight != nil {
		needed = append(needed, c.Weight.Name.Text)
	}
	if c.Sigma != nil {
		needed = append(needed, c.Sigma.Name.Text)
	}
	for _, b := range blocks(c) {
		needed = append(needed, b.Name.Text)
	}
	keep := make([]bool, f.n)
	for i := range keep {
		keep[i] = true
	}
	var aside []setAside
	done := make(map[string]bool)
	for _, name := range needed {
		if done[name] {
			continue
		}
		done[name] = true
		col, lost := f.cols[name], 0
		for i := range keep {
			if keep[i] && col.Missing(i) {
				keep[i] = false
				lost++
			}
		}
		if lost > 0 {
			aside = append(aside, setAside{name, lost})
		}
	}
	if c.Weight != nil {
		err := holdTo(c.Weight, c, f, keep, study, func(w float64) bool { return w >= 0 }, "weight %q is negative (%s), expected 0 or more")
		if err != nil {
			return nil, nil, err
		}
	}
	if c.Sigma != nil {
		err := holdTo(c.Sigma, c, f, keep, study, func(s float64) bool { return s > 0 && usable(1/float64(s*s)) }, "standard deviation %q is %s, expected more than 0")
		if err != nil {
			return nil, nil, err
		}
	}

	id := make([]int32, f.n)
	groups := []group{{}}
	for _, b := range c.By {
		groups = split(groups, id, keep, f.cols[b.Name.Text])
	}
	count := make([]int, len(groups))
	for i, g := range id {
		if keep[i] {
			count[g]++
		}
	}
	for g := range groups {
		groups[g].rows = make([]int32, 0, count[g])
	}
	for i, g := range id {
		if keep[i] {
			groups[g].rows = append(groups[g].rows, int32(i))
		}
	}
	kept := groups[:0]
	for _, g := range groups {
		if len(g.rows) > 0 {
			kept = append(kept, g)
		}
	}
	sort.Slice(kept, func(a, b int) bool { return compareValues(kept[a].values, kept[b].values) < 0 })
	return kept, aside, nil
}

func compareValues(a, b []value) int {
	for k := range a {
		if c := a[k].compare(b[k]); c != 0 {
			return c
		}
	}
	return 0
}

// split refines the groups by one more column: id[i] is row i's group before
// and after.
func split(groups []group, id []int32, keep []bool, col *expr.Column) []group {
	var out []group
	code := func(i int) uint64 {
		switch col.Kind {
		case expr.Text:
			return uint64(col.Code[i])
		case expr.Bool:
			return uint64(col.Truth[i])
		default:
			return math.Float64bits(col.Num[i] + 0) // -0 and 0 are one group
		}
	}
	find := func(i int) int32 {
		g := group{values: append(append([]value(nil), groups[id[i]].values...), valueAt(col, i))}
		out = append(out, g)
		return int32(len(out) - 1)
	}
	const dense = 1 << 22
	if size := len(groups) * len(col.Dict); col.Kind == expr.Text && size <= dense {
		slot := make([]int32, size) // new group plus one
		for i := range id {
			if !keep[i] {
				continue
			}
			s := &slot[int(id[i])*len(col.Dict)+int(col.Code[i])]
			if *s == 0 {
				*s = find(i) + 1
			}
			id[i] = *s - 1
		}
		return out
	}
	type key struct {
		group int32
		code  uint64
	}
	slot := make(map[key]int32)
	for i := range id {
		if !keep[i] {
			continue
		}
		k := key{id[i], code(i)}
		s, ok := slot[k]
		if !ok {
			s = find(i)
			slot[k] = s
		}
		id[i] = s
	}
	return out
}

func valueAt(c *expr.Column, i int) value {
	switch c.Kind {
	case expr.Text:
		return value{text: c.Dict[c.Code[i]], kind: expr.Text}
	case expr.Bool:
		return value{text: strconv.FormatBool(c.Truth[i] == expr.True), kind: expr.Bool}
	default:
		return value{num: c.Num[i] + 0, kind: c.Kind}
	}
}

// usable tells whether a weight is an ordinary positive number.
func usable(w float64) bool { return w > 0 && !math.IsInf(w, 1) }

// holdTo makes sure that a column's values are what weights can be made of;
// what says how they fail, given the column's name and the value.
func holdTo(col *spec.Column, c *spec.Curve, f *frame, keep []bool, study *spec.Study, good func(float64) bool, what string) error {
	var out DataError
	name := col.Name
	for i, v := range f.cols[name.Text].Num {
		if !keep[i] || good(v) {
			continue
		}
		if len(out.Problems) >= problemCap {
			out.More++
			continue
		}
		path, line := f.place(i)
		out.Problems = append(out.Problems, fmt.Sprintf(
			"%s:%d: "+what+"; mend the row or drop it with a reason (curve %q, %s)",
			path, line, name.Text, table.FormatNumber(v), c.Name.Text, at(study, name.Range.Start.Line, name.Range.Start.Column)))
	}
	if len(out.Problems) > 0 {
		return &out
	}
	return nil
}

// blocks lists the block columns that the curve's rules use.
func blocks(c *spec.Curve) []*spec.Column {
	var out []*spec.Column
	if c.Rule.Block != nil {
		out = append(out, c.Rule.Block)
	}
	for i := range c.Exceptions {
		if b := c.Exceptions[i].Rule.Block; b != nil {
			out = append(out, b)
		}
	}
	return out
}

// label writes a group as "cultivar=Aroma, store=air".
func label(by []string, values []string) string {
	var b strings.Builder
	for k, v := range values {
		if k > 0 {
			b.WriteString(", ")
		}
		if v == "" || strings.ContainsAny(v, ",]=\"\n\r\t") {
			v = strconv.Quote(v)
		}
		b.WriteString(by[k] + "=" + v)
	}
	return b.String()
}

// fitName writes a fit as "firmness[cultivar=Aroma, store=air]".
func fitName(curve, group string) string {
	if group == "" {
		return curve
	}
	return curve + "[" + group + "]"
}
