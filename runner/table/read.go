package table

import (
	"bufio"
	"bytes"
	"context"
	"fmt"
	"io"
	"math"
	"os"
	"strconv"
	"strings"
	"unicode/utf8"

	"github.com/klauspost/compress/gzip"
	"golang.org/x/sync/errgroup"

	"batten/spec/expr"
)

// Limits on what a file may hold.
const (
	maxCell    = 1 << 20 // bytes
	maxText    = 4 << 30 // bytes of a file, decompressed
	maxListed  = 20      // problems that are listed
	maxRatio   = 200     // of unpacked to packed bytes, from unpackFree on
	unpackFree = 64 << 20
	maxRows    = math.MaxInt32 - 1
	maxHeader  = 1 << 20
)

// Table is a source's rows, column by column.
type Table struct {
	N      int
	Cols   map[string]*expr.Column
	Files  []File
	FileOf []uint16 // file of each row; nil where there is one
	Line   []int32  // line of each row in its file, the header being line 1
}

// Read reads all of a source's files, in the order of their names. Digests
// are of the very bytes that were parsed.
func Read(ctx context.Context, src Source, workers int) (*Table, error) {
	paths, err := Find(src)
	if err != nil {
		return nil, err
	}
	if len(paths) > math.MaxUint16 {
		return nil, fmt.Errorf("%s: %d files match %q, at most %d are read", src.At, len(paths), src.Pattern, math.MaxUint16)
	}
	t := &Table{Cols: map[string]*expr.Column{}}
	var parts []*part
	var probs Problems
	var first *header
	for fi, p := range paths {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		raw, err := os.ReadFile(src.full(p))
		if err != nil {
			return nil, err
		}
		f := File{Path: p, SHA256: SHA256(raw), Bytes: int64(len(raw))}
		text, err := plain(p, raw)
		if err != nil {
			return nil, err
		}
		h, rest, prob := src.header(p, text)
		if prob == nil && first != nil {
			prob = first.differs(h)
		}
		if prob != nil {
			probs.add(prob)
			t.Files = append(t.Files, f)
			continue
		}
		if first == nil {
			first = h
		}
		ps, err := src.parse(ctx, h, rest, workers)
		if err != nil {
			return nil, err
		}
		for _, x := range ps {
			x.file = fi
			f.Rows += len(x.line)
			for _, q := range x.probs.List {
				probs.add(q)
			}
			probs.More += x.probs.More
		}
		parts = append(parts, ps...)
		t.Files = append(t.Files, f)
		t.N += f.Rows
	}
	if len(probs.List) > 0 {
		return nil, &probs
	}
	if t.N == 0 {
		return nil, &Problems{List: []*Problem{{Path: paths[0], Text: "has a header line and no rows; expected at least one row"}}}
	}
	if t.N > maxRows {
		return nil, fmt.Errorf("%s: %d rows, at most %d are read", src.At, t.N, maxRows)
	}
	t.join(src, parts, len(paths) > 1)
	return t, nil
}

func (p *Problems) add(x *Problem) {
	if len(p.List) < maxListed {
		p.List = append(p.List, x)
	} else {
		p.More++
	}
}

// plain returns a file's text: decompressed, without a byte-order mark.
func plain(path string, raw []byte) ([]byte, error) {
	if strings.HasSuffix(path, ".gz") {
		z, err := gzip.NewReader(bytes.NewReader(raw))
		if err == nil {
			most := max(unpackFree, maxRatio*int64(len(raw)))
			packed := len(raw)
			raw, err = io.ReadAll(io.LimitReader(z, min(most, maxText)+1))
			if int64(len(raw)) > most {
				return nil, &Problems{List: []*Problem{{Path: path, Text: fmt.Sprintf(
					"unpacks from %d bytes to more than %d times as many; unpack it yourself and look at it, then name the plain file", packed, maxRatio)}}}
			}
		}
		if err != nil {
			return nil, &Problems{List: []*Problem{{Path: path, Text: fmt.Sprintf("is no sound gzip file (%v); expected one, whole; copy or compress it again", err)}}}
		}
	}
	if int64(len(raw)) > maxText {
		return nil, &Problems{List: []*Problem{{Path: path, Text: fmt.Sprintf("holds more than %d GiB of text; split it into several files and use a pattern", maxText>>30)}}}
	}
	if bytes.HasPrefix(raw, []byte("\xff\xfe")) || bytes.HasPrefix(raw, []byte("\xfe\xff")) {
		return nil, &Problems{List: []*Problem{{Path: path, Line: 1, Text: "is UTF-16 text; expected UTF-8, save it so"}}}
	}
	return bytes.TrimPrefix(raw, []byte("\xef\xbb\xbf")), nil
}

// Heads looks at the header line of every file of a source.
func Heads(src Source) error {
	paths, err := Find(src)
	if err != nil {
		return err
	}
	var probs Problems
	var first *header
	for _, p := range paths {
		text, err := head(src.full(p), p)
		if err != nil {
			return err
		}
		h, _, prob := src.header(p, text)
		if prob == nil && first != nil {
			prob = first.differs(h)
		}
		if prob != nil {
			probs.add(prob)
			continue
		}
		if first == nil {
			first = h
		}
	}
	if len(probs.List) > 0 {
		return &probs
	}
	return nil
}

// head reads the first lines of a file, as text.
func head(full, path string) ([]byte, error) {
	f, err := os.Open(full)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	var r io.Reader = bufio.NewReader(f)
	if strings.HasSuffix(path, ".gz") {
		z, err := gzip.NewReader(r)
		if err != nil {
			return nil, &Problems{List: []*Problem{{Path: path, Text: fmt.Sprintf("is no sound gzip file (%v); expected one, whole", err)}}}
		}
		r = z
	}
	b, err := io.ReadAll(io.LimitReader(r, maxHeader))
	if err != nil && len(b) == 0 {
		return nil, &Problems{List: []*Problem{{Path: path, Text: fmt.Sprintf("cannot be read: %v", err)}}}
	}
	return plain(strings.TrimSuffix(path, ".gz"), b)
}

// header is a file's first line: where each wanted column stands.
type header struct {
	path   string
	names  []string
	want   []int // column of src.Columns at each place; -1: not wanted
	sep    byte
	before int // lines before the first row
}

func (s *Source) sep(path string) byte {
	switch {
	case s.Separator != 0:
		return s.Separator
	case strings.HasSuffix(strings.TrimSuffix(path, ".gz"), ".tsv"):
		return '\t'
	}
	return ','
}

// header reads the first line and finds the wanted columns in it.
func (s *Source) header(path string, text []byte) (*header, []byte, *Problem) {
	fail := func(col int, format string, a ...any) (*header, []byte, *Problem) {
		line := 1
		return nil, nil, &Problem{Path: path, Line: line, Col: col, Text: fmt.Sprintf(format, a...)}
	}
	if len(bytes.TrimSpace(text)) == 0 {
		return nil, nil, &Problem{Path: path, Text: "is empty; expected a header line and rows"}
	}
	if i := bytes.IndexByte(text, '\r'); i >= 0 && bytes.IndexByte(text, '\n') < 0 {
		return fail(0, "the lines end in lone CR; save the file with LF or CRLF at the ends of lines")
	}
	h := &header{path: path, sep: s.sep(path)}
	sc := scanner{text: text, sep: h.sep}
	for {
		fields, ok := sc.record()
		if sc.bad != "" {
			return fail(0, "%s", sc.bad)
		}
		if !ok {
			return nil, nil, &Problem{Path: path, Text: "is empty; expected a header line and rows"}
		}
		if len(fields) == 1 && len(bytes.TrimSpace(fields[0])) == 0 {
			continue // a blank line before the header
		}
		for _, f := range fields {
			if len(f) > maxCell {
				return fail(0, "a header of %d bytes, at most %d are read", len(f), maxCell)
			}
			if !utf8.Valid(f) {
				return fail(len(h.names)+1, "the header is no UTF-8; save the file as UTF-8")
			}
			h.names = append(h.names, strings.TrimSpace(string(f)))
		}
		break
	}
	h.before = sc.line
	h.want = make([]int, len(h.names))
	for i := range h.want {
		h.want[i] = -1
	}
	for k, c := range s.Columns {
		at := -1
		for i, n := range h.names {
			if n != c.Header {
				continue
			}
			if at >= 0 {
				return fail(i+1, "the header names %q twice (columns %d and %d); expected it once, rename one", c.Header, at+1, i+1)
			}
			at = i
		}
		if at < 0 {
			hint := expr.Suggest(c.Header, append([]string(nil), h.names...))
			if len(h.names) == 1 && strings.ContainsAny(h.names[0], ";\t,") {
				hint = fmt.Sprintf("; the line has no %q in it: set separator in the input", string(h.sep))
			}
			return fail(0, "there is no column %q (%s); the header has: %s%s", c.Header, c.At, shorten(strings.Join(h.names, ", "), 200), hint)
		}
		h.want[at] = k
	}
	return h, sc.text[sc.pos:], nil
}

// differs compares the headers of two files of one input: the same columns,
// in any order.
func (h *header) differs(o *header) *Problem {
	have := map[string]bool{}
	for _, n := range h.names {
		have[n] = true
	}
	for i, n := range o.names {
		if !have[n] {
			return &Problem{Path: o.path, Line: 1, Col: i + 1, Text: fmt.Sprintf("the column %q is not in %s; expected the same columns in all files of an input", shorten(n, 60), h.path)}
		}
	}
	have = map[string]bool{}
	for _, n := range o.names {
		have[n] = true
	}
	for _, n := range h.names {
		if !have[n] {
			return &Problem{Path: o.path, Line: 1, Text: fmt.Sprintf("the column %q of %s is missing here; expected the same columns in all files of an input", shorten(n, 60), h.path)}
		}
	}
	return nil
}

// shorten fits text from a file into a message: control characters escaped,
// long text cut.
func shorten(s string, most int) string {
	if len(s) > most {
		s = strings.ToValidUTF8(s[:most], "") + "..."
	}
	q := strconv.Quote(s)
	return q[1 : len(q)-1]
}

// scanner splits text into records: RFC 4180, with LF or CRLF.
type scanner struct {
	text   []byte
	sep    byte
	pos    int
	line   int // lines consumed
	fields [][]byte
	quoted []bool
	buf    []byte
	bad    string
}

// record returns the next record's fields; they stand until the next call.
// line is then the number of lines consumed, start lines included.
func (s *scanner) record() ([][]byte, bool) {
	if s.pos >= len(s.text) {
		return nil, false
	}
	s.fields, s.quoted, s.buf = s.fields[:0], s.quoted[:0], s.buf[:0]
	s.line++
	for {
		if s.pos < len(s.text) && s.text[s.pos] == '"' {
			if !s.quote() {
				return nil, false
			}
		} else {
			rest := s.text[s.pos:]
			n := 0
			for n < len(rest) && rest[n] != s.sep && rest[n] != '\n' {
				n++
			}
			f := rest[:n]
			if n < len(rest) && rest[n] == '\n' || n == len(rest) {
				f = bytes.TrimSuffix(f, []byte{'\r'})
			}
			s.fields, s.quoted = append(s.fields, f), append(s.quoted, false)
			s.pos += n
		}
		if s.pos >= len(s.text) {
			return s.fields, true
		}
		c := s.text[s.pos]
		s.pos++
		if c == '\n' {
			return s.fields, true
		}
		if s.pos >= len(s.text) { // a separator at the very end: one more empty field
			s.fields, s.quoted = append(s.fields, nil), append(s.quoted, false)
			return s.fields, true
		}
	}
}

// quote reads a quoted field and leaves pos at what ends it.
func (s *scanner) quote() bool {
	s.pos++
	start := len(s.buf)
	for {
		i := bytes.IndexByte(s.text[s.pos:], '"')
		if i < 0 {
			s.bad = "a quote that is never closed; expected \" at the end of the cell"
			return false
		}
		s.buf = append(s.buf, s.text[s.pos:s.pos+i]...)
		s.line += bytes.Count(s.text[s.pos:s.pos+i], []byte{'\n'})
		s.pos += i + 1
		if s.pos < len(s.text) && s.text[s.pos] == '"' {
			s.buf = append(s.buf, '"')
			s.pos++
			continue
		}
		break
	}
	if s.pos < len(s.text) && s.text[s.pos] == '\r' && (s.pos+1 == len(s.text) || s.text[s.pos+1] == '\n') {
		s.pos++
	}
	if s.pos < len(s.text) && s.text[s.pos] != s.sep && s.text[s.pos] != '\n' {
		s.bad = "text after a closing quote; expected the separator or the end of the line (a quote inside a cell is written twice)"
		return false
	}
	s.fields, s.quoted = append(s.fields, s.buf[start:len(s.buf):len(s.buf)]), append(s.quoted, true)
	return true
}

// parse reads the rows after the header, in parallel where the text has no
// quotes, for then every line end is a record's end.
func (s *Source) parse(ctx context.Context, h *header, text []byte, workers int) ([]*part, error) {
	var blocks [][]byte
	const size = 4 << 20
	if bytes.IndexByte(text, '"') >= 0 {
		blocks = [][]byte{text}
	} else {
		for len(text) > 0 {
			n := min(size, len(text))
			if i := bytes.IndexByte(text[n-1:], '\n'); i >= 0 {
				n += i
			} else {
				n = len(text)
			}
			blocks = append(blocks, text[:n])
			text = text[n:]
		}
	}
	parts := make([]*part, len(blocks))
	eg, ctx := errgroup.WithContext(ctx)
	eg.SetLimit(max(1, workers))
	for i, b := range blocks {
		eg.Go(func() error {
			if err := ctx.Err(); err != nil {
				return err
			}
			parts[i] = s.block(h, b)
			return nil
		})
	}
	if err := eg.Wait(); err != nil {
		return nil, err
	}
	base := int32(h.before)
	for _, p := range parts {
		for i := range p.line {
			p.line[i] += base
		}
		for _, q := range p.probs.List {
			q.Line += int(base)
		}
		base += p.lines
	}
	return parts, nil
}
