package ledger

import (
	"bytes"
	"encoding/json"
	"errors"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// entry draws an entry.
func entry(t *rapid.T, group string, readings []string) Entry {
	number := func() float64 {
		return rapid.OneOf(rapid.Float64(), rapid.Just(math.NaN()), rapid.Float64Range(-10, 10)).Draw(t, "v")
	}
	e := Entry{Group: []string{group, "x,\"y\""}, N: rapid.IntRange(0, 1e6).Draw(t, "n"), Distinct: 3, Rule: "gcv", Exception: rapid.SampledFrom([]string{"", "a b", "say \"so\""}).Draw(t, "e"),
		Lambda: rapid.Float64().Draw(t, "lambda"), EDF: rapid.Float64().Draw(t, "edf"), Sigma: math.NaN(), GCV: math.Inf(1), From: -1, To: 2.5, Key: "0123456789abcdef"}
	if rapid.Bool().Draw(t, "flagged") {
		e.Flags = []string{"at_bound", "wiggly"}
	}
	for _, r := range readings {
		e.Readings = append(e.Readings, Value{r, number(), number(), number()})
	}
	for range 3 {
		e.Curve, e.HalfWidth = append(e.Curve, number()), append(e.HalfWidth, number())
	}
	return e
}

// TestSameBytesBack: what is read from the ledger is written as it was, to the
// byte, so that a fit that nobody accepts keeps its line.
func TestSameBytesBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		a := &Accepted{By: []string{"n", "store"}}
		for _, g := range []string{"", "A", "Å ü", "b\nc"} {
			a.Entries = append(a.Entries, entry(t, g, []string{"peak", "peak_at"}))
		}
		want, err := a.Encode()
		if err != nil {
			t.Fatal(err)
		}
		dir, err := os.MkdirTemp("", "ledger")
		if err != nil {
			t.Fatal(err)
		}
		defer os.RemoveAll(dir)
		if err := os.WriteFile(filepath.Join(dir, "c.csv"), want, 0o666); err != nil {
			t.Fatal(err)
		}
		back, err := ReadCurve(dir, "c")
		if err != nil {
			t.Fatal(err)
		}
		got, err := back.Encode()
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(got, want) {
			t.Fatalf("read and written again:\n%s\nwas\n%s", got, want)
		}
	})
}

func plainEntry(group string, edf float64) Entry {
	return Entry{Group: []string{group}, N: 10, Distinct: 9, Rule: "gcv", Lambda: 1, EDF: edf, From: 0, To: 1,
		Curve: []float64{1, 2}, HalfWidth: []float64{0.5, 0.25}, Key: "k" + group}
}

// TestReadingsThatCome: an entry that was accepted before a reading was asked
// for stands beside one that has it.
func TestReadingsThatCome(t *testing.T) {
	old, now := plainEntry("a", 3), plainEntry("b", 4)
	old.Readings = []Value{{"peak", 1, 0.5, 1.5}}
	now.Readings = []Value{{"start", 7, 6, 8}, {"peak", 2, 1, 3}}
	dir := t.TempDir()
	b, err := (&Accepted{By: []string{"g"}, Entries: []Entry{now, old}}).Encode()
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "c.csv"), b, 0o666); err != nil {
		t.Fatal(err)
	}
	a, err := ReadCurve(dir, "c")
	if err != nil {
		t.Fatal(err)
	}
	got := a.Entries[1].Readings
	if len(got) != 2 || got[0].Name != "start" || !math.IsNaN(got[0].Value) || got[1] != old.Readings[0] {
		t.Errorf("the old entry's readings: %v", got)
	}
	if !reflect.DeepEqual(a.Entries[0].Readings, now.Readings) {
		t.Errorf("the new entry's readings: %v", a.Entries[0].Readings)
	}
}

func accept(t *testing.T, dir string, by string, edf ...float64) error {
	t.Helper()
	s, err := ReadState(dir)
	if err != nil {
		return err
	}
	if s == nil {
		s = &State{Study: "A test <of> & nothing (invented)"}
	}
	s.Curves = []CurveHeader{{Name: "c", Along: "x", Response: "y", By: []string{"g"}}}
	a := &Accepted{By: []string{"g"}}
	for i, v := range edf {
		a.Entries = append(a.Entries, plainEntry(string(rune('a'+i)), v))
	}
	if err := s.Append(Acceptance{Who: by, When: "2026-03-01T00:00:00Z", Why: "x < y && \"so\"", Run: "000001-0", Fits: len(edf)}); err != nil {
		return err
	}
	return Write(dir, Change{State: s, Curves: map[string]*Accepted{"c": a}})
}

// TestHistoryOnlyGrows: every acceptance that was ever written stays word for
// word, also what this version knows nothing of.
func TestHistoryOnlyGrows(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "study.json")
	history := func() []json.RawMessage {
		b, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		var s struct {
			Accepted []json.RawMessage `json:"accepted"`
		}
		if err := json.Unmarshal(b, &s); err != nil {
			t.Fatal(err)
		}
		return s.Accepted
	}
	if err := accept(t, dir, "first", 3, 4); err != nil {
		t.Fatal(err)
	}
	// as if another version had written more, and numbers in its own manner
	b, _ := os.ReadFile(path)
	b = bytes.Replace(b, []byte(`"who": "first"`), []byte(`"board": {"vote": 1.50, "note": "a\u003cb"}, "who": "first"`), 1)
	if err := os.WriteFile(path, b, 0o666); err != nil {
		t.Fatal(err)
	}
	var before []json.RawMessage
	for n, who := range []string{"second", "third", "fourth"} {
		before = history()
		if err := accept(t, dir, who, 3, 4+float64(n)); err != nil {
			t.Fatal(err)
		}
		now := history()
		if len(now) != len(before)+1 {
			t.Fatalf("%d acceptances after %d", len(now), len(before))
		}
		for i := range before {
			// white space alone is laid out anew
			if tight(t, now[i]) != tight(t, before[i]) {
				t.Errorf("acceptance %d was\n%s\nis\n%s", i, before[i], now[i])
			}
		}
	}
	if a, err := Examine(dir); err != nil || len(a.Findings) != 0 {
		t.Fatalf("%v, %+v", err, a)
	}
	// an edit of an old acceptance is seen
	b, _ = os.ReadFile(path)
	if err := os.WriteFile(path, bytes.Replace(b, []byte(`"second"`), []byte(`"nobody"`), 1), 0o666); err != nil {
		t.Fatal(err)
	}
	a, err := Examine(dir)
	if err != nil || len(a.Findings) != 1 || !strings.Contains(a.Findings[0].Text, "by nobody (the 2nd of 4) is not as it was") {
		t.Errorf("%v, %+v", err, a.Findings)
	}
	// and a history that is cut short is not written
	s, _ := ReadState(dir)
	s.Accepted = s.Accepted[:2]
	err = Write(dir, Change{State: s, Curves: map[string]*Accepted{}})
	if err == nil || !strings.Contains(err.Error(), "would lose that of 2026-03-01T00:00:00Z by third") {
		t.Errorf("a shorter history was written: %v", err)
	}
	s, _ = ReadState(dir)
	s.Accepted[0], s.Accepted[1] = s.Accepted[1], s.Accepted[0]
	if err := Write(dir, Change{State: s}); err == nil {
		t.Error("a history in another order was written")
	}
}

func tight(t *testing.T, b []byte) string {
	var c bytes.Buffer
	if err := json.Compact(&c, b); err != nil {
		t.Fatal(err)
	}
	return c.String()
}

// TestNothingEditedIsOverwritten: a curve's file that is not the accepted one
// stays, and so does all the rest.
func TestNothingEditedIsOverwritten(t *testing.T) {
	dir := t.TempDir()
	if err := accept(t, dir, "first", 3, 4); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(dir, "c.csv")
	b, _ := os.ReadFile(path)
	edited := bytes.Replace(b, []byte("b,10,9"), []byte("b,11,9"), 1)
	if bytes.Equal(b, edited) {
		t.Fatalf("nothing to edit in\n%s", b)
	}
	if err := os.WriteFile(path, edited, 0o666); err != nil {
		t.Fatal(err)
	}
	study, _ := os.ReadFile(filepath.Join(dir, "study.json"))
	var corrupt *CorruptError
	if err := accept(t, dir, "second", 3, 5); !errors.As(err, &corrupt) {
		t.Errorf("an edited file was written over: %v", err)
	}
	now, _ := os.ReadFile(path)
	later, _ := os.ReadFile(filepath.Join(dir, "study.json"))
	if !bytes.Equal(now, edited) || !bytes.Equal(study, later) {
		t.Error("something was written all the same")
	}
	if err := os.Remove(path); err != nil {
		t.Fatal(err)
	}
	if err := accept(t, dir, "second", 3, 5); !errors.As(err, &corrupt) {
		t.Errorf("a missing file was made good: %v", err)
	}
}

// TestCutShort: an acceptance that was stopped between its files is made good
// by the same acceptance.
func TestCutShort(t *testing.T) {
	dir := t.TempDir()
	if err := accept(t, dir, "first", 3, 4); err != nil {
		t.Fatal(err)
	}
	study, _ := os.ReadFile(filepath.Join(dir, "study.json"))
	if err := accept(t, dir, "second", 3, 5); err != nil {
		t.Fatal(err)
	}
	// the curve's file is the new one, study.json still the old one
	if err := os.WriteFile(filepath.Join(dir, "study.json"), study, 0o666); err != nil {
		t.Fatal(err)
	}
	if a, err := Examine(dir); err != nil || len(a.Findings) == 0 {
		t.Errorf("half an acceptance is sound: %v", err)
	}
	if err := accept(t, dir, "second", 3, 5); err != nil {
		t.Fatal(err)
	}
	if a, err := Examine(dir); err != nil || len(a.Findings) != 0 {
		t.Errorf("%v, %+v", err, a.Findings)
	}
}

// TestSignBeforeWriting: where the key does not sign, nothing is written.
func TestSignBeforeWriting(t *testing.T) {
	dir := t.TempDir()
	s := &State{Curves: []CurveHeader{{Name: "c", By: []string{"g"}}}}
	if err := s.Append(Acceptance{Who: "x"}); err != nil {
		t.Fatal(err)
	}
	no := errors.New("no")
	err := Write(dir, Change{State: s, Curves: map[string]*Accepted{"c": {By: []string{"g"}}}, Sign: func([]byte) ([]byte, error) { return nil, no }})
	if es, _ := os.ReadDir(dir); !errors.Is(err, no) || len(es) != 0 {
		t.Errorf("%v; written: %v", err, es)
	}
}

// TestExamine: what is said of each kind of change to the files.
func TestExamine(t *testing.T) {
	edit := func(old, new string) func(string) string {
		return func(s string) string { return strings.Replace(s, old, new, 1) }
	}
	line := func(s string, n int) string { return strings.SplitAfter(s, "\n")[n] }
	for name, c := range map[string]struct {
		change func(string) string // of c.csv
		want   []string            // File:Line: text, in part
	}{
		"a cell":         {edit("b,10,9", "b,12,9"), []string{"c.csv:0:is not the file that was accepted", "c.csv:3:this line was edited"}},
		"the last digit": {edit("kc,", "kd,"), []string{"c.csv:0:is not", "c.csv:4:this line was edited"}},
		"a line out": {func(s string) string { return strings.Replace(s, line(s, 2), "", 1) },
			[]string{"c.csv:0:is not", "c.csv:0:holds 2 fits, study.json records 3"}},
		"a line twice": {func(s string) string { return s + line(s, 1) },
			[]string{"c.csv:0:is not", "c.csv:5:this fit stands on line 2 already", "c.csv:0:holds 4 fits"}},
		"the order": {func(s string) string { return line(s, 0) + line(s, 2) + line(s, 1) + line(s, 3) },
			[]string{"c.csv:0:is not", "c.csv:0:every line agrees with its own check"}},
		"line ends": {func(s string) string { return strings.ReplaceAll(s, "\n", "\r\n") }, []string{"c.csv:0:has CRLF"}},
		"no table":  {func(s string) string { return s + "\"" }, []string{"c.csv:0:is not", "c.csv:5:"}},
		"emptied":   {func(string) string { return "" }, []string{"c.csv:0:is not", "c.csv:0:is empty"}},
	} {
		t.Run(name, func(t *testing.T) {
			dir := t.TempDir()
			if err := accept(t, dir, "first", 3, 4, 5); err != nil {
				t.Fatal(err)
			}
			path := filepath.Join(dir, "c.csv")
			b, _ := os.ReadFile(path)
			if err := os.WriteFile(path, []byte(c.change(string(b))), 0o666); err != nil {
				t.Fatal(err)
			}
			a, err := Examine(dir)
			if err != nil {
				t.Fatal(err)
			}
			for i, f := range a.Findings {
				got := f.File + ":" + string(rune('0'+f.Line)) + ":" + f.Text
				if i >= len(c.want) || !strings.HasPrefix(got, c.want[i]) {
					t.Errorf("found %q, want %q", got, c.want)
				}
			}
			if len(a.Findings) != len(c.want) {
				t.Errorf("found %+v, want %q", a.Findings, c.want)
			}
		})
	}
	dir := t.TempDir()
	if a, err := Examine(dir); a != nil || err != nil {
		t.Errorf("an empty folder: %+v, %v", a, err)
	}
	if err := accept(t, dir, "first", 3); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "extra.csv"), nil, 0o666); err != nil {
		t.Fatal(err)
	}
	if a, err := Examine(dir); err != nil || len(a.Findings) != 1 || a.Findings[0].File != "extra.csv" {
		t.Errorf("%+v, %v", a, err)
	}
	if err := os.WriteFile(filepath.Join(dir, "study.json"), []byte("{"), 0o666); err != nil {
		t.Fatal(err)
	}
	if a, err := Examine(dir); err != nil || len(a.Findings) != 1 || a.Findings[0].File != "study.json" {
		t.Errorf("%+v, %v", a, err)
	}
}

// TestFormatOne: a ledger of the first format, whose lines bear no check, is
// read as before.
func TestFormatOne(t *testing.T) {
	dir := t.TempDir()
	text := "g," + strings.Join(front, ",") + ",from,to,curve,half_width,key\n" +
		"a,10,9,gcv,,1,3.5,1,1,1,1,1,1,at_bound;wiggly,0,1,1 2,0.5 0.25,ka\n"
	if err := os.WriteFile(filepath.Join(dir, "c.csv"), []byte(text), 0o666); err != nil {
		t.Fatal(err)
	}
	a, err := ReadCurve(dir, "c")
	if err != nil || len(a.Entries) != 1 || a.Entries[0].EDF != 3.5 || a.Entries[0].Key != "ka" || len(a.Entries[0].Flags) != 2 {
		t.Errorf("%+v, %v", a, err)
	}
}

// TestManifest: lines in the order in which a shell lists the files (LC_ALL=C).
func TestManifest(t *testing.T) {
	s := &State{Curves: []CurveHeader{{Name: "b", SHA256: "3"}, {Name: "a", SHA256: "2"}, {Name: "a-b", SHA256: "1"}}}
	// SHA-256 of no bytes: FIPS 180-4, as known by heart and printed by sha256sum /dev/null
	want := "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855  ledger/study.json\n" +
		"1  ledger/a-b.csv\n2  ledger/a.csv\n3  ledger/b.csv\n"
	if got := string(s.manifest(nil)); got != want {
		t.Errorf("manifest\n%s\nwant\n%s", got, want)
	}
	if s.Curves[0].Name != "b" {
		t.Error("the caller's order was changed")
	}
}

// FuzzReadCurve: whatever a curve's file holds, it is read or refused, and what
// is read can be written.
func FuzzReadCurve(f *testing.F) {
	b, err := (&Accepted{By: []string{"g"}, Entries: []Entry{plainEntry("a", 3), plainEntry("b", 4)}}).Encode()
	if err != nil {
		f.Fatal(err)
	}
	f.Add(b)
	f.Add([]byte("check\n"))
	f.Add([]byte(strings.Join(front, ",") + ",from,to,curve,half_width,key\n"))
	dir := f.TempDir()
	f.Fuzz(func(t *testing.T, b []byte) {
		if err := os.WriteFile(filepath.Join(dir, "c.csv"), b, 0o666); err != nil {
			t.Fatal(err)
		}
		a, err := ReadCurve(dir, "c")
		if err != nil {
			return
		}
		if _, err := a.Encode(); err != nil {
			t.Error(err)
		}
		if _, err := (&Audit{}).curve(dir, CurveHeader{Name: "c"}); err != nil {
			t.Error(err)
		}
	})
}
