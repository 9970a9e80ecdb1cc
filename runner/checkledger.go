package runner

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"strings"
	"time"

	"batten/runner/ledger"
	"batten/runner/signature"
	"batten/spec"
)

// LedgerCheck is what a look at the ledger found.
type LedgerCheck struct {
	Sound       bool                `json:"sound"`
	Acceptances int                 `json:"acceptances"`
	Curves      int                 `json:"curves"`
	Fits        int                 `json:"fits"`
	Signed      *signature.Verified `json:"signed"` // nil: not signed, or not soundly
	Findings    []LedgerFinding     `json:"findings"`
}

// LedgerFinding is one thing that is not as it was accepted.
type LedgerFinding struct {
	File string `json:"file"` // under the study's folder
	Line int    `json:"line,omitempty"`
	Fit  string `json:"fit,omitempty"`
	Text string `json:"text"`
}

func (f LedgerFinding) String() string {
	s := f.File
	if f.Line > 0 {
		s += fmt.Sprintf(":%d", f.Line)
	}
	if f.Fit != "" {
		s += ": " + f.Fit
	}
	return s + ": " + f.Text
}

// UnsoundError says that the ledger is not as it was accepted or signed.
type UnsoundError struct{ Findings []LedgerFinding }

func (e *UnsoundError) Error() string {
	s := "the ledger is not as it was accepted:"
	for _, f := range e.Findings {
		s += "\n  " + f.String()
	}
	return s
}

// CheckLedger holds the ledger's files to the digests that were recorded when
// they were accepted, and the signature, where there is one, to a list of
// allowed signers: ledger/allowed_signers where signers is "". It reads no
// data and writes nothing. With an *UnsoundError what was found is returned
// too.
func CheckLedger(s *spec.Study, signers string) (*LedgerCheck, error) {
	a, err := ledger.Examine(ledgerDir(s))
	if err != nil {
		return nil, err
	}
	if a == nil {
		return nil, usagef("nothing has been accepted yet, so there is no ledger to check: batten accept %s --reason TEXT", s.File)
	}
	out := &LedgerCheck{Fits: a.Fits, Findings: []LedgerFinding{}}
	for _, f := range a.Findings {
		q := LedgerFinding{File: path.Join("ledger", f.File), Line: f.Line, Text: f.Text}
		if f.Line > 0 && f.Curve != "" {
			q.Fit = fitName(f.Curve, label(f.By, f.Group))
		}
		out.Findings = append(out.Findings, q)
	}
	if a.State != nil {
		out.Acceptances, out.Curves = len(a.State.Accepted), len(a.State.Curves)
		f, err := out.signature(s, a, signers)
		if err != nil {
			return nil, err
		}
		if f != "" {
			out.Findings = append(out.Findings, LedgerFinding{File: "ledger/study.json.sig", Text: f})
		}
	}
	if out.Sound = len(out.Findings) == 0; !out.Sound {
		return out, &UnsoundError{out.Findings}
	}
	return out, nil
}

// signature looks at the ledger's signature and returns what is wrong with it.
func (c *LedgerCheck) signature(s *spec.Study, a *ledger.Audit, signers string) (string, error) {
	last := a.State.Last()
	armoured, err := os.ReadFile(ledger.SignaturePath(ledgerDir(s)))
	if errors.Is(err, fs.ErrNotExist) {
		switch {
		case last != nil && last.Signer != "":
			return fmt.Sprintf("is missing: study.json says that the ledger was signed by %s", last.Signer), nil
		case signers != "":
			return "is missing: the ledger was accepted without a signature (batten accept --sign KEYFILE)", nil
		}
		return "", nil
	}
	if err != nil {
		return "", err
	}
	by, err := signature.Fingerprint(armoured)
	if err != nil {
		return err.Error(), nil
	}
	if last == nil || last.Signer != by {
		who := "by nobody"
		if last != nil && last.Signer != "" {
			who = "by " + last.Signer
		}
		return fmt.Sprintf("is by the key %s, and study.json says that the ledger was signed %s", by, who), nil
	}
	file := signers
	if file == "" {
		file = filepath.Join(ledgerDir(s), "allowed_signers")
	}
	list, err := signature.ReadSigners(file)
	if errors.Is(err, fs.ErrNotExist) {
		if signers != "" {
			return "", usagef("--signers %s: no such file; expected a list of allowed signers (see ssh-keygen, ALLOWED SIGNERS)", signers)
		}
		return fmt.Sprintf("cannot be held to anybody: there is no ledger/allowed_signers; add a line with a name and the public key (%s), or name a list with --signers", by), nil
	}
	if err != nil {
		return "", err
	}
	when, err := time.Parse(time.RFC3339, last.When)
	if err != nil {
		return fmt.Sprintf("study.json bears the time %q, expected one such as 2026-03-01T12:00:00Z", last.When), nil
	}
	v, err := list.Verify(a.Manifest, armoured, when)
	if err != nil {
		return err.Error(), nil
	}
	c.Signed = v
	return "", nil
}

// Says is the outcome in a line or two for people.
func (c *LedgerCheck) Says() string {
	s := fmt.Sprintf("The ledger is sound: %s of %s, %s.", plural(c.Fits, "fit", "fits"), plural(c.Curves, "curve", "curves"), plural(c.Acceptances, "acceptance", "acceptances"))
	if c.Signed == nil {
		return s + "\nIt is not signed."
	}
	return s + fmt.Sprintf("\nSigned by %s with the key %s.", strings.Join(strings.Split(c.Signed.Principals, ","), ", "), c.Signed.Fingerprint)
}
