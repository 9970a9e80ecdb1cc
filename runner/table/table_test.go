package table

import (
	"bytes"
	"compress/gzip"
	"context"
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"reflect"
	"strconv"
	"strings"
	"testing"

	"batten/spec/expr"
)

// source is a study folder with one file.
func folderWith(t testing.TB, name string, text []byte, cols ...Column) Source {
	t.Helper()
	dir := t.TempDir()
	if err := os.WriteFile(filepath.Join(dir, name), text, 0o666); err != nil {
		t.Fatal(err)
	}
	return Source{Name: "d", Root: dir, Pattern: name, Columns: cols, Missing: []string{""}, Decimal: '.', At: "study.hcl:3:13"}
}

func col(name string, k expr.Kind) Column {
	return Column{Name: name, Header: name, Kind: k, At: "study.hcl:4:5"}
}

func read(t testing.TB, s Source) (*Table, error) {
	t.Helper()
	return Read(context.Background(), s, 2)
}

// TestRead: what is accepted, and how it is read.
func TestRead(t *testing.T) {
	text := "\xef\xbb\xbfg,x,when,skipped\r\na, 1.5 ,2026-03-01,zz\r\n\"b, \"\"quoted\"\"\nline\",-2e3,2026-03-02T12:00,\r\n\r\n,,,\r\n"
	s := folderWith(t, "d.csv", []byte(text), col("g", expr.Text), col("x", expr.Number), col("when", expr.Date))
	tab, err := read(t, s)
	if err != nil {
		t.Fatal(err)
	}
	if tab.N != 3 || !reflect.DeepEqual(tab.Line, []int32{2, 3, 6}) {
		t.Errorf("%d rows at lines %v", tab.N, tab.Line)
	}
	g, x, w := tab.Cols["g"], tab.Cols["x"], tab.Cols["when"]
	if g.Dict[g.Code[1]] != "b, \"quoted\"\nline" || g.Code[2] != expr.NoText {
		t.Errorf("text: %q %v", g.Dict, g.Code)
	}
	if x.Num[0] != 1.5 || x.Num[1] != -2000 || !math.IsNaN(x.Num[2]) {
		t.Errorf("numbers: %v", x.Num)
	}
	if expr.FormatDate(w.Num[0]) != "2026-03-01" || w.Num[1]-w.Num[0] != 1.5 {
		t.Errorf("dates: %v", w.Num)
	}
	if tab.Files[0].SHA256 != SHA256([]byte(text)) || tab.Files[0].Bytes != int64(len(text)) {
		t.Errorf("digest: %+v", tab.Files[0])
	}
	// the same rows, gzipped, tabs, a decimal comma
	var z bytes.Buffer
	zw := gzip.NewWriter(&z)
	_, _ = io.WriteString(zw, "x;g\n1,5;a\n-999;b\n")
	_ = zw.Close()
	s = folderWith(t, "d.csv.gz", z.Bytes(), col("x", expr.Number))
	s.Separator, s.Decimal, s.Missing = ';', ',', []string{"-999"}
	if tab, err = read(t, s); err != nil || tab.Cols["x"].Num[0] != 1.5 || !math.IsNaN(tab.Cols["x"].Num[1]) {
		t.Errorf("%v %v", tab, err)
	}
	s = folderWith(t, "d.csv", []byte("x\n-999\n4\n"), col("x", expr.Number))
	s.Missing = []string{"-999"}
	if tab, err = read(t, s); err != nil || !math.IsNaN(tab.Cols["x"].Num[0]) || tab.Cols["x"].Num[1] != 4 {
		t.Errorf("a number that means missing: %v %v", tab, err)
	}
}

// TestProblems: each has its place and says what to do.
func TestProblems(t *testing.T) {
	big := strings.Repeat("z", 10<<20)
	for _, c := range []struct{ name, text, want string }{
		{"none", "x,g\n1,a\nabc,b\n", `d.csv:3:1: column "x" holds "abc", expected a number`},
		{"nan", "x,g\nNaN,a\n", "only finite numbers"},
		{"infinite", "x,g\n-inf,a\n", "expected a number"},
		{"overflow", "x,g\n1e400,a\n", "expected a number"},
		{"hex", "x,g\n0x1p3,a\n", "expected a number"},
		{"underscore", "x,g\n1_000,a\n", "expected a number"},
		{"thousands", "x,g\n\"1,234\",a\n", "decimal comma"},
		{"ragged", "x,g\n1,a\n1\n2,b,c\n", "d.csv:3: a row of 1 cells, expected 2"},
		{"empty", "", "is empty"},
		{"blank", "\n\n  \n", "is empty"},
		{"header only", "x,g\n", "no rows"},
		{"no such column", "xx,g\n1,a\n", `there is no column "x"`},
		{"twice", "x,g,x\n1,a,2\n", `names "x" twice`},
		{"no UTF-8", "x,g\n1,\xff\xfe\n", "no UTF-8"},
		{"NUL", "x,g\n1,a\x00b\n", "NUL byte"},
		{"open quote", "x,g\n1,\"abc\n2,d\n", "never closed"},
		{"after a quote", "x,g\n1,\"abc\"d\n", "after a closing quote"},
		{"lone CR", "x,g\r1,a\r2,b\r", "lone CR"},
		{"UTF-16", "\xff\xfex\x00,\x00", "UTF-16"},
		{"10 MB in a cell", "x,g\n1," + big + "\n", "at most 1048576 are read in one cell"},
		{"10 MB number", "x,g\n" + big + ",a\n", "expected a number"},
	} {
		t.Run(c.name, func(t *testing.T) {
			_, err := read(t, folderWith(t, "d.csv", []byte(c.text), col("x", expr.Number), col("g", expr.Text)))
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Fatalf("said %v, want %q", err, c.want)
			}
			if len(err.Error()) > 2000 {
				t.Errorf("the message is %d bytes long", len(err.Error()))
			}
		})
	}
	many := "x\n" + strings.Repeat("bad\n", 100)
	_, err := read(t, folderWith(t, "d.csv", []byte(many), col("x", expr.Number)))
	if n := strings.Count(err.Error(), "\n"); n != 20 || !strings.Contains(err.Error(), "and 80 more") {
		t.Errorf("%d lines: %v", n, err)
	}
}

// TestFind: files stay inside the study's folder, links included.
func TestFind(t *testing.T) {
	dir, outside := t.TempDir(), t.TempDir()
	for _, f := range []string{filepath.Join(dir, "b.csv"), filepath.Join(dir, "a.csv"), filepath.Join(outside, "c.csv")} {
		if err := os.WriteFile(f, []byte("x\n1\n"), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	s := Source{Root: dir, Pattern: "*.csv", At: "s.hcl:1:1"}
	if got, err := Find(s); err != nil || !reflect.DeepEqual(got, []string{"a.csv", "b.csv"}) {
		t.Errorf("%v %v", got, err)
	}
	for _, p := range []string{"nothing*.csv", "nothing.csv", "."} {
		s.Pattern = p
		if _, err := Find(s); err == nil {
			t.Errorf("%q was found", p)
		}
	}
	if err := os.Symlink(filepath.Join(outside, "c.csv"), filepath.Join(dir, "link.csv")); err != nil {
		t.Skip("no links here")
	}
	s.Pattern = "link.csv"
	if _, err := Find(s); err == nil || !strings.Contains(err.Error(), "out of the study's folder") {
		t.Errorf("a link out of the folder: %v", err)
	}
	s.Outside = true
	if _, err := Find(s); err != nil {
		t.Errorf("a link out of the folder, on purpose: %v", err)
	}
}

// numbers draws text that looks like numbers of many forms.
func numbers(rng *rand.Rand) string {
	switch rng.IntN(6) {
	case 0:
		return strconv.Itoa(rng.IntN(2_000_000) - 1_000_000)
	case 1:
		return strconv.FormatFloat(rng.NormFloat64(), 'f', rng.IntN(18), 64)
	case 2:
		return strconv.FormatFloat(math.Float64frombits(rng.Uint64()&^(1<<62)), 'e', rng.IntN(19), 64)
	case 3:
		return fmt.Sprintf("%d.%015d", rng.IntN(1000), rng.Uint64()%1_000_000_000_000_000)
	case 4:
		return "+.5e-" + strconv.Itoa(rng.IntN(300))
	}
	return strconv.FormatFloat(rng.ExpFloat64()*math.Pow(10, float64(rng.IntN(40)-20)), 'g', -1, 64)
}

// TestNumbersExact: parsing gives the very double that strconv gives, and
// writing reads back to the same bits.
func TestNumbersExact(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	var b strings.Builder
	b.WriteString("x\n")
	var want []float64
	for len(want) < 20000 {
		s := numbers(rng)
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			continue
		}
		want = append(want, v)
		b.WriteString(s + "\n")
	}
	tab, err := read(t, folderWith(t, "d.csv", []byte(b.String()), col("x", expr.Number)))
	if err != nil {
		t.Fatal(err)
	}
	for i, v := range tab.Cols["x"].Num {
		if math.Float64bits(v) != math.Float64bits(want[i]) {
			t.Fatalf("row %d: %g, want %g", i, v, want[i])
		}
		back, err := strconv.ParseFloat(FormatNumber(v), 64)
		if err != nil || back != v {
			t.Fatalf("%g is written %q", v, FormatNumber(v))
		}
	}
}

// TestWorkers: tables do not depend on how many blocks and workers there are.
func TestWorkers(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 2))
	var b strings.Builder
	b.WriteString("g,x\n")
	for b.Len() < 10<<20 {
		fmt.Fprintf(&b, "g%d,%s\n", rng.IntN(5000), FormatNumber(rng.NormFloat64()))
	}
	s := folderWith(t, "d.csv", []byte(b.String()), col("g", expr.Text), col("x", expr.Number))
	var want *Table
	for _, w := range []int{1, 2, 7} {
		tab, err := Read(context.Background(), s, w)
		if err != nil {
			t.Fatal(err)
		}
		if want == nil {
			want = tab
		} else if !reflect.DeepEqual(tab, want) {
			t.Fatalf("%d workers give another table", w)
		}
	}
	if want.Line[want.N-1] != int32(want.N+1) {
		t.Errorf("the last of %d rows stands at line %d", want.N, want.Line[want.N-1])
	}
}

// TestWriter: quoting, formulas, odd numbers.
func TestWriter(t *testing.T) {
	w := &Writer{SafeCells: true}
	for _, s := range []string{"plain", `a"b`, "a,b", "a\nb", "=1+1", "-5", "-x", "@cmd", "+1", "", "\t=1", " =1", "＝1", "＠x"} {
		w.Text(s)
	}
	for _, v := range []float64{0, math.Copysign(0, -1), 0.1, 1e-7, 1e21, math.NaN(), math.Inf(1), math.Inf(-1), 123456.5} {
		w.Number(v)
	}
	w.End()
	want := "plain,\"a\"\"b\",\"a,b\",\"a\nb\",'=1+1,-5,'-x,'@cmd,+1,,'\t=1,' =1,'＝1,'＠x,0,0,0.1,1e-07,1e+21,,Inf,-Inf,123456.5\n"
	if got := string(w.Bytes()); got != want {
		t.Errorf("got  %q\nwant %q", got, want)
	}
}

// FuzzRead: no text makes the reader panic, and what it accepts is what
// encoding/csv makes of it.
func FuzzRead(f *testing.F) {
	for _, s := range []string{"g,x\na,1\n", "g,x\r\n\"a\"\"b\",2\r\n", "g,x\n\"a\nb\",3", "g,x\n,\n\n,\n", "g\n\"\"\n", "x,g\n1,\"", "\xef\xbb\xbfg,x\n1,2"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		if len(text) > 1<<16 {
			return
		}
		s := Source{Name: "d", Columns: []Column{col("g", expr.Text)}, Missing: []string{"\x00none"}, Decimal: '.'}
		plainText, err := plain("d.csv", text)
		if err != nil {
			return
		}
		h, rest, prob := s.header("d.csv", plainText)
		if prob != nil {
			_ = prob.Error()
			return
		}
		parts, err := s.parse(context.Background(), h, rest, 2)
		if err != nil {
			t.Fatal(err)
		}
		var got []string
		for _, p := range parts {
			if len(p.probs.List) > 0 {
				return
			}
			for _, c := range p.cols[0].code {
				got = append(got, p.cols[0].dict[c])
			}
		}
		r := csv.NewReader(bytes.NewReader(plainText))
		r.FieldsPerRecord = -1
		rows, err := r.ReadAll()
		if err != nil {
			return // the standard reader is stricter about bare quotes
		}
		at := -1
		var want []string
		for i, row := range rows {
			if len(row) == 1 && strings.TrimSpace(row[0]) == "" && (at < 0 || len(h.names) > 1) {
				continue
			}
			if at < 0 {
				for k, n := range row {
					if strings.TrimSpace(n) == "g" {
						at = k
					}
				}
				if at < 0 {
					t.Fatalf("record %d of %q is no header", i, text)
				}
				continue
			}
			want = append(want, strings.ReplaceAll(row[at], "\r\n", "\n"))
		}
		for i := range got {
			got[i] = strings.ReplaceAll(got[i], "\r\n", "\n")
		}
		if len(h.names) > 1 && !reflect.DeepEqual(got, want) && (len(got) > 0 || len(want) > 0) {
			t.Errorf("%q: got %q, encoding/csv %q", text, got, want)
		}
	})
}

func BenchmarkRead(b *testing.B) {
	rng := rand.New(rand.NewPCG(3, 3))
	var buf bytes.Buffer
	buf.WriteString("a,b,x,y,w\n")
	for i := range 300_000 {
		fmt.Fprintf(&buf, "A%03d,B%02d,%.4f,%.6f,%.3f\n", i/5000, i/50%100, 10*rng.Float64(), rng.NormFloat64(), rng.Float64())
	}
	s := folderWith(b, "d.csv", buf.Bytes(), col("a", expr.Text), col("b", expr.Text), col("x", expr.Number), col("y", expr.Number), col("w", expr.Number))
	b.Run("batten/workers=1", func(b *testing.B) {
		b.SetBytes(int64(buf.Len()))
		for b.Loop() {
			if _, err := Read(context.Background(), s, 1); err != nil {
				b.Fatal(err)
			}
		}
	})
	b.Run("encoding-csv", func(b *testing.B) {
		b.SetBytes(int64(buf.Len()))
		for b.Loop() {
			r := csv.NewReader(bytes.NewReader(buf.Bytes()))
			r.ReuseRecord = true
			sum := 0.0
			for {
				row, err := r.Read()
				if err == io.EOF {
					break
				}
				for _, c := range row[2:] {
					v, _ := strconv.ParseFloat(c, 64)
					sum += v
				}
			}
		}
	})
}

// TestPackedBomb: a small file that unpacks to far more than any table is not
// unpacked.
func TestPackedBomb(t *testing.T) {
	dir := t.TempDir()
	var b bytes.Buffer
	z := gzip.NewWriter(&b)
	_, _ = z.Write([]byte("g,x\n"))
	chunk := bytes.Repeat([]byte("a,1\n"), 1<<18)
	for range 100 { // 100 MiB
		_, _ = z.Write(chunk)
	}
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "d.csv.gz"), b.Bytes(), 0o666); err != nil {
		t.Fatal(err)
	}
	src := Source{Name: "d", Root: dir, Pattern: "d.csv.gz", Decimal: '.', Columns: []Column{{Name: "g", Header: "g", Kind: expr.Text}, {Name: "x", Header: "x", Kind: expr.Number}}}
	if _, err := Read(context.Background(), src, 1); err == nil || !strings.Contains(err.Error(), "unpacks from") {
		t.Errorf("%v", err)
	}
}
