package table

import (
	"bytes"
	"fmt"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"

	"batten/spec/expr"
)

// part is one block of a file, parsed.
type part struct {
	file  int
	lines int32   // lines it took
	line  []int32 // of each row, within the block
	cols  []builder
	quick bool // plain decimals need no look at what is missing
	probs Problems
}

// builder collects one column of a block.
type builder struct {
	num  []float64
	code []uint32
	dict []string
	at   map[string]uint32
	last uint32 // code of the last cell: neighbours are often alike
}

// block parses one block of rows.
func (s *Source) block(h *header, text []byte) *part {
	p := &part{cols: make([]builder, len(s.Columns))}
	rows := bytes.Count(text, []byte{'\n'}) + 1
	p.line = make([]int32, 0, rows)
	for k, c := range s.Columns {
		if c.Kind == expr.Text {
			p.cols[k].code = make([]uint32, 0, rows)
			p.cols[k].at = map[string]uint32{}
			p.cols[k].last = expr.NoText
		} else {
			p.cols[k].num = make([]float64, 0, rows)
		}
	}
	missing := map[string]bool{}
	p.quick = s.Decimal != ','
	for _, m := range s.Missing {
		missing[m] = true
		if _, isNumber := quick([]byte(m)); isNumber {
			p.quick = false // such as -999: every number must be looked up
		}
	}
	sc := scanner{text: text, sep: h.sep}
	for {
		start := int32(sc.line + 1)
		fields, ok := sc.record()
		if sc.bad != "" {
			p.probs.add(&Problem{Path: h.path, Line: int(start), Text: sc.bad})
			break
		}
		if !ok {
			break
		}
		if len(fields) == 1 && len(bytes.TrimSpace(fields[0])) == 0 && (len(h.names) > 1 || !sc.quoted[0]) {
			continue // a blank line
		}
		if len(fields) != len(h.names) {
			why := ""
			if bytes.IndexByte(fields[len(fields)-1], '\r') >= 0 {
				why = "; the lines seem to end in lone CR: save the file with LF or CRLF"
			}
			p.probs.add(&Problem{Path: h.path, Line: int(start),
				Text: fmt.Sprintf("a row of %d cells, expected %d as in the header%s", len(fields), len(h.names), why)})
			continue
		}
		p.line = append(p.line, start)
		for i, f := range fields {
			if k := h.want[i]; k >= 0 {
				s.cell(p, h, k, i, int(start), f, missing)
			}
		}
	}
	p.lines = int32(sc.line)
	return p
}

// cell parses one cell into its column.
func (s *Source) cell(p *part, h *header, k, i, line int, f []byte, missing map[string]bool) {
	c, b := &s.Columns[k], &p.cols[k]
	if c.Kind == expr.Text {
		if b.last != expr.NoText && string(f) == b.dict[b.last] {
			b.code = append(b.code, b.last)
			return
		}
		if missing[string(f)] {
			b.code = append(b.code, expr.NoText)
			return
		}
		code, ok := b.at[string(f)]
		if !ok {
			bad := ""
			switch {
			case len(f) > maxCell:
				bad = fmt.Sprintf("holds %d bytes, at most %d are read in one cell", len(f), maxCell)
			case !utf8.Valid(f):
				bad = "holds text that is no UTF-8; save the file as UTF-8"
			case bytes.IndexByte(f, 0) >= 0:
				bad = "holds a NUL byte; the file may be damaged, or no text at all"
			case bytes.IndexByte(f, '\r') >= 0 && bytes.IndexByte(f, '\n') < 0:
				bad = "holds a lone CR; save the file with LF or CRLF at the ends of lines"
			}
			if bad != "" {
				p.probs.add(&Problem{Path: h.path, Line: line, Col: i + 1, Text: fmt.Sprintf("column %q %s", c.Header, bad)})
				b.code = append(b.code, expr.NoText)
				return
			}
			code = uint32(len(b.dict))
			v := string(f)
			b.dict = append(b.dict, v)
			b.at[v] = code
		}
		b.last = code
		b.code = append(b.code, code)
		return
	}
	if c.Kind == expr.Number && p.quick {
		if v, ok := quick(f); ok {
			b.num = append(b.num, v)
			return
		}
	}
	if missing[string(f)] {
		b.num = append(b.num, math.NaN())
		return
	}
	t := bytes.TrimSpace(f)
	if missing[string(t)] {
		b.num = append(b.num, math.NaN())
		return
	}
	if c.Kind == expr.Date {
		if v, ok := expr.ParseDate(string(t)); ok && len(t) < 40 {
			b.num = append(b.num, v)
			return
		}
	} else if v, ok := s.number(t); ok {
		b.num = append(b.num, v)
		return
	}
	b.num = append(b.num, math.NaN())
	what, hint := "a number", s.hint(t)
	if c.Kind == expr.Date {
		what, hint = "an ISO date such as 2026-03-01", ""
	}
	p.probs.add(&Problem{Path: h.path, Line: line, Col: i + 1,
		Text: fmt.Sprintf("column %q holds %q, expected %s; %sdrop the row from the file or list %q under missing (%s)",
			c.Header, shorten(string(t), 40), what, hint, shorten(string(t), 40), s.At)})
}

// hint says what an odd number may have meant.
func (s *Source) hint(t []byte) string {
	l := strings.ToLower(string(t))
	switch {
	case len(l) > 60:
	case s.Decimal == '.' && strings.Count(l, ",") == 1 && !strings.Contains(l, "."):
		return "for a decimal comma set decimal = \",\" in the input, without thousands separators; or "
	case strings.ContainsAny(l, ",' "):
		return "numbers are read without thousands separators; "
	case l == "nan" || strings.Contains(l, "inf"):
		return "only finite numbers are read; "
	}
	return ""
}

var tens = [...]float64{1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22}

// quick parses plain decimals of up to 15 digits exactly: the digits are a
// whole number below 2^53, and one division by an exact power of ten rounds
// once.
func quick(f []byte) (float64, bool) {
	if len(f) == 0 || len(f) > 17 {
		return 0, false
	}
	neg := false
	i := 0
	if f[0] == '-' {
		neg, i = true, 1
	}
	var n uint64
	digits, frac, point := 0, 0, false
	for ; i < len(f); i++ {
		c := f[i]
		if c == '.' && !point {
			point = true
			continue
		}
		if c -= '0'; c > 9 {
			return 0, false
		}
		n = n*10 + uint64(c)
		digits++
		if point {
			frac++
		}
	}
	if digits == 0 || digits > 15 {
		return 0, false
	}
	v := float64(n)
	if frac > 0 {
		v /= tens[frac]
	}
	if neg {
		v = -v
	}
	return v, true
}

// number parses any decimal number that a double can hold.
func (s *Source) number(t []byte) (v float64, ok bool) {
	if len(t) == 0 || len(t) > 400 {
		return 0, false
	}
	buf := make([]byte, 0, 32)
	for _, c := range t {
		switch {
		case c >= '0' && c <= '9', c == '+', c == '-', c == 'e', c == 'E':
		case c == s.Decimal:
			c = '.'
		default:
			return 0, false
		}
		buf = append(buf, c)
	}
	v, err := strconv.ParseFloat(string(buf), 64)
	return v, err == nil && !math.IsInf(v, 0)
}

// join puts the blocks together; texts get one dictionary a column, in the
// order in which values first appear.
func (t *Table) join(src Source, parts []*part, several bool) {
	t.Line = make([]int32, 0, t.N)
	if several {
		t.FileOf = make([]uint16, 0, t.N)
	}
	for _, p := range parts {
		t.Line = append(t.Line, p.line...)
		if several {
			for range p.line {
				t.FileOf = append(t.FileOf, uint16(p.file))
			}
		}
	}
	for k, c := range src.Columns {
		col := &expr.Column{Kind: c.Kind}
		if c.Kind != expr.Text {
			if len(parts) == 1 {
				col.Num = parts[0].cols[k].num
			} else {
				col.Num = make([]float64, 0, t.N)
				for _, p := range parts {
					col.Num = append(col.Num, p.cols[k].num...)
				}
			}
			t.Cols[c.Name] = col
			continue
		}
		at := map[string]uint32{}
		col.Code = make([]uint32, 0, t.N)
		for _, p := range parts {
			b := &p.cols[k]
			code := make([]uint32, len(b.dict))
			for i, v := range b.dict {
				n, ok := at[v]
				if !ok {
					n = uint32(len(col.Dict))
					at[v] = n
					col.Dict = append(col.Dict, v)
				}
				code[i] = n
			}
			for _, x := range b.code {
				if x != expr.NoText {
					x = code[x]
				}
				col.Code = append(col.Code, x)
			}
		}
		t.Cols[c.Name] = col
	}
}
