package runner

import (
	"context"
	"os"
	"path/filepath"
	"testing"

	"batten/spec"
)

// FuzzStoredPart: no bytes of a store make the runner panic; what is taken for a
// fit can be opened and read.
func FuzzStoredPart(f *testing.F) {
	dir := f.TempDir()
	text := "g,x,y,w,lot\n"
	for _, r := range rowsOf(3, 12) {
		text += r + "\n"
	}
	for name, body := range map[string]string{"d.csv": text, "study.hcl": `study { title = "t" }
input "d" {
  file    = "d.csv"
  columns = { g = text, x = number, y = number, w = number }
}
curve "c" {
  from     = d
  response = y
  along    = x
  by       = [g]
  weight   = w
  smoothness { rule = gcv }
  reading "top" { maximum = true }
}
`} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(body), 0o666); err != nil {
			f.Fatal(err)
		}
	}
	s, err := spec.Load(dir)
	if err != nil {
		f.Fatal(err)
	}
	r, err := Execute(context.Background(), s, Options{Workers: 1})
	if err != nil {
		f.Fatal(err)
	}
	objects, _ := filepath.Glob(filepath.Join(dir, ".batten", "objects", "*", "*"))
	for _, p := range objects {
		if b, err := os.ReadFile(p); err == nil {
			f.Add(b)
		}
	}
	cf := r.curves["c"]
	f.Fuzz(func(t *testing.T, b []byte) {
		var p storedPart
		if readPart(b, 1, &p) != nil {
			return
		}
		one := &curveFits{def: cf.def, by: cf.by}
		for _, fit := range p.Fits {
			if len(fit.X) > 1000 {
				continue
			}
			one.fits = append(one.fits, fit)
			one.values = append(one.values, []value{{text: fit.Group[0]}})
		}
		if err := judge(context.Background(), s, one, 1); err != nil {
			return
		}
		ft := &fitter{}
		for i := range one.fits {
			if one.verdict[i].fits() {
				_, _ = ft.derive(one, i, wants{grid: true, readings: true})
				_ = whyText(one.fits[i])
			}
		}
	})
}

// FuzzRecord: no bytes of a record make a command panic.
func FuzzRecord(f *testing.F) {
	f.Add([]byte(`{"format":1,"run":"000001-abc","curves":[{"name":"c","object":"00"}],"inputs":[{"name":"d","files":[{"path":"d.csv"}]}],"spec":{"path":"study.hcl","text":"study { title = \"t\" }"}}`))
	f.Add([]byte(`{"format":99}`))
	f.Add([]byte(`{`))
	dir := f.TempDir()
	if err := os.MkdirAll(runsDir(dir), 0o777); err != nil {
		f.Fatal(err)
	}
	s := &spec.Study{Dir: dir, File: filepath.Join(dir, "study.hcl")}
	f.Fuzz(func(t *testing.T, b []byte) {
		if err := os.WriteFile(filepath.Join(runsDir(dir), "000001-abcdefabcdef.json"), b, 0o666); err != nil {
			t.Fatal(err)
		}
		r, err := Reopen(s, "")
		if err != nil {
			return
		}
		for _, c := range r.Study.Curves {
			_, _ = r.curve(c.Name.Text)
		}
		_, _ = Replay(context.Background(), s, "", "", Options{})
		_, _ = Compare(context.Background(), s, "1", "1", Options{})
	})
}
