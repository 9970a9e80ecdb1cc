package table

import (
	"bufio"
	"io"
	"math"
	"strconv"
	"strings"

	"batten/spec/expr"
)

// AppendNumber appends v in the shortest form that reads back to the same
// bits: plain decimals for ordinary sizes (1e-5 to 1e15), an exponent beyond;
// nothing for NaN, "Inf" and "-Inf" for the ends of open intervals, 0 for -0.
func AppendNumber(dst []byte, v float64) []byte {
	a := math.Abs(v)
	switch {
	case math.IsNaN(v):
		return dst
	case math.IsInf(v, 1):
		return append(dst, "Inf"...)
	case math.IsInf(v, -1):
		return append(dst, "-Inf"...)
	case v == 0:
		return append(dst, '0')
	case a >= 1e-5 && a < 1e15:
		return strconv.AppendFloat(dst, v, 'f', -1, 64)
	}
	return strconv.AppendFloat(dst, v, 'e', -1, 64)
}

// FormatNumber is AppendNumber as a string.
func FormatNumber(v float64) string { return string(AppendNumber(nil, v)) }

// Writer builds rows of CSV in memory: one header, LF at line ends, quotes by
// RFC 4180. Text that a spreadsheet would take for a formula gets a leading
// apostrophe where SafeCells is set.
type Writer struct {
	buf       []byte
	SafeCells bool
	begun     bool // a field of this row is written
}

func (w *Writer) next() {
	if w.begun {
		w.buf = append(w.buf, ',')
	}
	w.begun = true
}

// Number writes a number; nothing for NaN.
func (w *Writer) Number(v float64) {
	w.next()
	w.buf = AppendNumber(w.buf, v)
}

// Int writes a whole number.
func (w *Writer) Int(v int) {
	w.next()
	w.buf = strconv.AppendInt(w.buf, int64(v), 10)
}

// Place writes a place on an x axis: a number, or an ISO date.
func (w *Writer) Place(v float64, date bool) {
	if !date {
		w.Number(v)
		return
	}
	w.next()
	w.buf = append(w.buf, expr.FormatDate(v)...)
}

// formula tells whether a spreadsheet might take a text for a formula: by its
// first character, in the full-width form too, behind blanks or not.
func formula(s string) bool {
	for _, r := range s {
		switch r {
		case '=', '+', '-', '@', '\t', '\r', '\n', '＝', '＋', '－', '＠':
			return true
		case ' ', '\u00a0', '\ufeff', '\u200b':
			continue
		}
		return false
	}
	return false
}

// Text writes a cell of text.
func (w *Writer) Text(s string) {
	w.next()
	if w.SafeCells && formula(s) {
		if _, err := strconv.ParseFloat(s, 64); err != nil {
			s = "'" + s
		}
	}
	if !strings.ContainsAny(s, ",\"\r\n") && !strings.HasPrefix(s, " ") && !strings.HasSuffix(s, " ") {
		w.buf = append(w.buf, s...)
		return
	}
	w.buf = append(w.buf, '"')
	w.buf = append(w.buf, strings.ReplaceAll(s, `"`, `""`)...)
	w.buf = append(w.buf, '"')
}

// End ends the row.
func (w *Writer) End() {
	w.buf = append(w.buf, '\n')
	w.begun = false
}

// Bytes returns what was written since the last Reset.
func (w *Writer) Bytes() []byte { return w.buf }

// Reset forgets what was written, keeping the memory.
func (w *Writer) Reset() { w.buf, w.begun = w.buf[:0], false }

// Header writes the header line.
func Header(out io.Writer, names []string) error {
	b := bufio.NewWriter(out)
	var w Writer
	for _, n := range names {
		w.Text(n)
	}
	w.End()
	if _, err := b.Write(w.Bytes()); err != nil {
		return err
	}
	return b.Flush()
}
