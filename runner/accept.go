package runner

import (
	"context"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"time"

	"batten/runner/ledger"
	"batten/runner/store"
	"batten/spec"
)

// Accept makes the last run the ledger. It refuses without a reason, when the
// last run is not of the present spec and data, and when a guard refused.
func Accept(ctx context.Context, s *spec.Study, reason string, opt Options) (*ledger.Acceptance, error) {
	opt.fill()
	if strings.TrimSpace(reason) == "" {
		return nil, usagef("accept needs a reason: batten accept %s --reason \"why these curves are to stand\"", s.File)
	}
	st, err := store.Open(filepath.Join(s.Dir, ".batten"))
	if err != nil {
		return nil, err
	}
	unlock, err := st.Lock(ctx, opt.Progress.Note)
	if err != nil {
		return nil, err
	}
	defer unlock()
	r, err := Reopen(s, "")
	if err != nil {
		return nil, err
	}
	rec := r.Record
	if len(rec.Refused) > 0 {
		return nil, &RefusedError{Run: rec.Run, Refused: rec.Refused}
	}
	if rec.Spec.SHA256 != s.Hash() {
		return nil, usagef("the spec has changed since run %s; run the study again, look at it, then accept", rec.Run)
	}
	files, err := hashInputs(ctx, s)
	if err != nil {
		return nil, err
	}
	for _, in := range rec.Inputs {
		now := files[in.Name]
		same := len(now) == len(in.Files)
		for i := 0; same && i < len(now); i++ {
			same = now[i].SHA256 == in.Files[i].SHA256 && now[i].Path == in.Files[i].Path
		}
		if !same {
			return nil, usagef("the data of input %q have changed since run %s; run the study again, look at it, then accept", in.Name, rec.Run)
		}
	}
	state := r.state
	if state == nil {
		state = &ledger.State{}
	}
	state.Format, state.Study, state.Curves = ledger.Format, s.Title, nil
	curves := map[string]*ledger.Accepted{}
	fits := 0
	for _, c := range s.Curves {
		cf, err := r.curve(c.Name.Text)
		if err != nil {
			return nil, err
		}
		e, err := entries(ctx, cf, opt.Workers)
		if err != nil {
			return nil, err
		}
		curves[c.Name.Text] = &ledger.Accepted{By: cf.by, Entries: e}
		fits += len(e)
		state.Curves = append(state.Curves, ledger.CurveHeader{Name: c.Name.Text, Along: c.Along.Name.Text, Unit: c.Along.Unit,
			Response: c.Response.Name.Text, RespUnit: c.Response.Unit, By: append([]string{}, cf.by...)})
	}
	a := ledger.Acceptance{
		Who: who(s.Dir), When: stamp(acceptTime(opt)), Why: strings.TrimSpace(reason), Run: rec.Run,
		Spec: ledger.Input{Path: rec.Spec.Path, SHA256: rec.Spec.SHA256}, Inputs: []ledger.Input{},
		Program: rec.Program, Methods: rec.Methods, Fits: fits, Moved: len(rec.Moved),
	}
	for _, in := range rec.Inputs {
		for _, f := range in.Files {
			a.Inputs = append(a.Inputs, ledger.Input{Path: f.Path, SHA256: f.SHA256})
		}
	}
	state.Accepted = append(state.Accepted, a)
	if err := ledger.Write(ledgerDir(s), state, curves); err != nil {
		return nil, err
	}
	return &a, nil
}

// acceptTime is now, or SOURCE_DATE_EPOCH where it is set.
func acceptTime(opt Options) time.Time {
	if t, ok := sourceDate(os.Getenv("SOURCE_DATE_EPOCH")); ok {
		return t
	}
	return opt.Now()
}

func sourceDate(s string) (time.Time, bool) {
	n, err := strconv.ParseInt(s, 10, 64)
	if err != nil || n < 0 {
		return time.Time{}, false
	}
	return time.Unix(n, 0).UTC(), true
}

// who is the person that accepts: BATTEN_WHO, else git's user, else the
// login name.
func who(dir string) string {
	if w := strings.TrimSpace(os.Getenv("BATTEN_WHO")); w != "" {
		return w
	}
	git := func(key string) string {
		cmd := exec.Command("git", "-C", dir, "config", "--get", key)
		b, err := cmd.Output()
		if err != nil {
			return ""
		}
		return strings.TrimSpace(string(b))
	}
	if name := git("user.name"); name != "" {
		if mail := git("user.email"); mail != "" {
			return fmt.Sprintf("%s <%s>", name, mail)
		}
		return name
	}
	for _, v := range []string{"USER", "USERNAME", "LOGNAME"} {
		if u := os.Getenv(v); u != "" {
			return u
		}
	}
	return "unknown"
}
