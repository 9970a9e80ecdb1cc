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
	"batten/runner/signature"
	"batten/runner/store"
	"batten/spec"
)

// Consent is what somebody accepts, and why.
type Consent struct {
	Reason string
	Only   []string // CURVE or CURVE[col=value, ...]; none: the whole run
	Key    *signature.Key
}

// Accept makes the last run the ledger, whole and unsigned.
func Accept(ctx context.Context, s *spec.Study, reason string, opt Options) (*ledger.Acceptance, error) {
	return AcceptAs(ctx, s, Consent{Reason: reason}, opt)
}

// AcceptAs makes the last run the ledger, or some of its fits; the others keep
// their record. It refuses without a reason, when the last run is not of the
// present spec and data, and when a guard refused a fit that is to be accepted.
func AcceptAs(ctx context.Context, s *spec.Study, consent Consent, opt Options) (*ledger.Acceptance, error) {
	opt.fill()
	if strings.TrimSpace(consent.Reason) == "" {
		return nil, usagef("accept needs a reason: batten accept %s --reason \"why these curves are to stand\"", s.File)
	}
	only, err := parseOnly(consent.Only)
	if err != nil {
		return nil, err
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
	if len(rec.Refused) > 0 && len(only) == 0 {
		return nil, &RefusedError{Run: rec.Run, Refused: rec.Refused}
	}
	if err := r.isPresent(ctx, s); err != nil {
		return nil, err
	}
	t := &taking{r: r, only: only, workers: opt.Workers, curves: map[string]*ledger.Accepted{},
		state: &ledger.State{Study: s.Title}, refusedElsewhere: map[string]bool{}}
	if r.state != nil {
		t.state.Accepted = append(t.state.Accepted, r.state.Accepted...)
	}
	if err := t.all(ctx); err != nil {
		return nil, err
	}
	a := t.entry
	a.Who, a.When, a.Why, a.Run = who(s.Dir), stamp(acceptTime(opt)), strings.TrimSpace(consent.Reason), rec.Run
	a.Spec, a.Inputs = ledger.Input{Path: rec.Spec.Path, SHA256: rec.Spec.SHA256}, []ledger.Input{}
	a.Program, a.Methods = rec.Program, rec.Methods
	for _, in := range rec.Inputs {
		for _, f := range in.Files {
			a.Inputs = append(a.Inputs, ledger.Input{Path: f.Path, SHA256: f.SHA256})
		}
	}
	change := ledger.Change{State: t.state, Curves: t.curves}
	if consent.Key != nil {
		a.Signer, change.Sign = consent.Key.Fingerprint(), consent.Key.Sign
	}
	if err := t.state.Append(a); err != nil {
		return nil, err
	}
	if err := ledger.Write(ledgerDir(s), change); err != nil {
		return nil, err
	}
	if last := r.state.Last(); last != nil && last.Signer != "" && consent.Key == nil {
		opt.Progress.Note("the ledger is no longer signed: the signature was of the acceptance before, and was taken away (accept --sign KEYFILE signs anew)")
	}
	return t.state.Last(), nil
}

// isPresent makes sure that the run is of the spec and data as they are.
func (r *Recorded) isPresent(ctx context.Context, s *spec.Study) error {
	rec := r.Record
	if rec.Spec.SHA256 != s.Hash() {
		return usagef("the spec has changed since run %s; run the study again, look at it, then accept", rec.Run)
	}
	files, err := hashInputs(ctx, s)
	if err != nil {
		return err
	}
	for _, in := range rec.Inputs {
		now := files[in.Name]
		same := len(now) == len(in.Files)
		for i := 0; same && i < len(now); i++ {
			same = now[i].SHA256 == in.Files[i].SHA256 && now[i].Path == in.Files[i].Path
		}
		if !same {
			return usagef("the data of input %q have changed since run %s; run the study again, look at it, then accept", in.Name, rec.Run)
		}
	}
	return nil
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
