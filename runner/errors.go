package runner

import (
	"fmt"
	"strings"
)

// DataError says that the data are wrong: cells that cannot be read, an
// expectation that rows break, weights below zero. Nothing has been written
// when it is returned.
type DataError struct {
	Problems []string // one a line, each with its place
	More     int      // further ones that are not listed
}

func (e *DataError) Error() string {
	s := strings.Join(e.Problems, "\n")
	if e.More > 0 {
		s += fmt.Sprintf("\n... and %d more", e.More)
	}
	return s
}

// RefusedError says that guards refused. The run has its record, but
// exports and reports were left as they were.
type RefusedError struct {
	Run     string
	Refused []string // fits, pairs, inputs, the study: each with the guard and its reason
}

func (e *RefusedError) Error() string {
	return fmt.Sprintf("%s; exports and reports were left as they were:\n  %s",
		plural(len(e.Refused), "refusal by a guard", "refusals by guards"), strings.Join(e.Refused, "\n  "))
}

// MovedError says that fits differ from the ledger where the caller asked
// for none to.
type MovedError struct{ N int }

func (e *MovedError) Error() string {
	verb := "differ"
	if e.N == 1 {
		verb = "differs"
	}
	return fmt.Sprintf("%s %s from the ledger (run --hold)", plural(e.N, "fit", "fits"), verb)
}

// UsageError says that what was asked for does not exist in the study or its
// record.
type UsageError struct{ Text string }

func (e *UsageError) Error() string { return e.Text }

func usagef(format string, a ...any) error { return &UsageError{fmt.Sprintf(format, a...)} }

// StoppedError says that a run was interrupted; what was done is kept.
type StoppedError struct{ Done, Total int }

func (e *StoppedError) Error() string {
	return fmt.Sprintf("stopped: %d of %d parts are done and kept; run again to go on from there", e.Done, e.Total)
}

func plural(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}
