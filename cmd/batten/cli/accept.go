package cli

import (
	"errors"
	"fmt"
	"os"

	"github.com/spf13/cobra"

	"batten/runner"
	"batten/runner/ledger"
	"batten/runner/signature"
	"batten/spec"
)

func (e *env) accept() *cobra.Command {
	var reason, keyFile string
	var only []string
	c := &cobra.Command{
		Use:   "accept STUDY --reason TEXT",
		Short: "Make the last run the ledger: the curves of record",
		Long: `Accept writes the last run's fits to ledger/, one CSV a curve and study.json,
small sorted text files to be kept in git. It refuses when spec or data have
changed since that run, and when a guard refused.

With --only it takes some fits and leaves the others as they are on record; those
that differ are then pending. With --sign it signs the ledger with an SSH key: a
private key's file (BATTEN_KEY_PASSPHRASE opens one that is encrypted), or the
.pub file of a key in ssh-agent.

Who accepts is taken from BATTEN_WHO, else from git's user.name.`,
		Example: `  batten accept study.hcl --reason "first full season, checked with the trial board"
  batten accept study.hcl --reason "air store recounted" --only 'firmness[store=air]'
  batten accept study.hcl --reason "season 2026" --sign ~/.ssh/id_ed25519.pub`,
		Args: cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			s, err := load(args[0])
			if err != nil {
				return err
			}
			consent := runner.Consent{Reason: reason, Only: only}
			if c.Flags().Changed("sign") {
				consent.Key, err = signature.Open(keyFile, os.Getenv("BATTEN_KEY_PASSPHRASE"), os.Getenv("SSH_AUTH_SOCK"))
				if err != nil {
					return err
				}
				defer consent.Key.Close()
			}
			a, err := runner.AcceptAs(c.Context(), s, consent, runner.Options{Progress: e.progress(), Program: version()})
			if err != nil {
				return err
			}
			if e.json {
				return e.printJSON(a)
			}
			e.printAcceptance(a)
			return nil
		},
	}
	c.Flags().StringVar(&reason, "reason", "", "why these curves are to stand (required)")
	c.Flags().StringArrayVar(&only, "only", nil, "accept only CURVE or 'CURVE[col=value, ...]'; may be given several times")
	c.Flags().StringVar(&keyFile, "sign", "", "sign the ledger with this SSH key")
	return c
}

// mostPending is how many pending fits are listed.
const mostPending = 20

func (e *env) printAcceptance(a *ledger.Acceptance) {
	if e.quiet {
		return
	}
	part := ""
	if len(a.Only) > 0 {
		part = " in part"
	}
	fmt.Fprintf(e.out, "Accepted run %s%s: %s, by %s.\n", a.Run, part, count(a.Fits, "fit", "fits"), a.Who)
	if n := len(a.Gone); n > 0 {
		fmt.Fprintf(e.out, "%s out of the ledger.\n", count(n, "fit that is gone went", "fits that are gone went"))
	}
	if n := len(a.Pending); n > 0 {
		fmt.Fprintf(e.out, "Pending, as they were on record before: %s.\n", count(n, "fit", "fits"))
		for _, f := range a.Pending[:min(n, mostPending)] {
			fmt.Fprintf(e.out, "  %s\n", f)
		}
		if n > mostPending {
			fmt.Fprintf(e.out, "  ... and %d more\n", n-mostPending)
		}
	}
	if a.Signer != "" {
		fmt.Fprintf(e.out, "Signed with the key %s.\n", a.Signer)
	}
	fmt.Fprintln(e.out, "The ledger is in ledger/; commit it with the spec.")
}

// checkLedger is check --ledger.
func (e *env) checkLedger(s *spec.Study, signers string) error {
	found, err := runner.CheckLedger(s, signers)
	var unsound *runner.UnsoundError
	if err != nil && !errors.As(err, &unsound) {
		return err
	}
	if e.json {
		if perr := e.printJSON(found); perr != nil {
			return perr
		}
		return err
	}
	if err == nil && !e.quiet {
		fmt.Fprintln(e.out, found.Says())
	}
	return err
}
