// Package choose settles lambda by a smoothness rule and keeps the evidence:
// the candidates tried, the minima found, the one taken, what other rules
// would have taken.
//
// Steps of an automatic rule: walk a lattice in log lambda from one bound of
// edf to the other; find every local minimum of the criterion on it, the ends
// included; refine each; take the best, the smoother of equals. The package
// fits through methods/spline and knows no groups, files or tables.
package choose

import (
	"fmt"
	"math"

	"batten/methods/spline"
)

// Version is raised when a choice's bytes change; caches depend on it.
const Version = 1

// Rule names.
const (
	FixedDF     = "fixed_df"
	FixedLambda = "fixed_lambda"
	GCV         = "gcv"
	LOOCV       = "loocv"
	KFold       = "kfold"
	REML        = "reml"
)

// Bounds of the search where a rule sets none.
const (
	LeastDF   = 2.01
	MostShare = 0.9 // of the distinct x
)

// Rule is a smoothness rule with its settings; those of other rules are
// ignored.
type Rule struct {
	Name      string
	DF        float64 // fixed_df: edf wanted, from 2 (the straight line) to below the distinct x
	Lambda    float64 // fixed_lambda
	Inflate   float64 // gcv: the factor on edf; 0 means 1
	Folds     int     // kfold; 0 with Block: one fold a block value
	Block     []int32 // kfold: block of each of the caller's rows; nil: rows are drawn
	OneSE     bool    // kfold: the smoothest candidate within one standard error of the best
	DFAtLeast float64 // 0: LeastDF
	DFAtMost  float64 // 0: MostShare of the distinct x
	Seed      int64   // kfold
	Group     string  // kfold: the group's name, which the draw depends on
}

// Candidate is one lambda with what it gives. Score is the rule's own.
type Candidate struct{ Lambda, EDF, RSS, GCV, LOOCV, REML, Score float64 }

// Minimum is a local minimum of the criterion. End tells where it is an end
// of the searched range: "smooth" or "rough".
type Minimum struct {
	Candidate
	End    string
	Chosen bool
}

// Other is what another rule would have taken.
type Other struct {
	Rule               string
	Lambda, EDF, Score float64
}

// Flags of a choice.
const (
	AtBound       = "at_bound"       // the minimum is an end of the range
	StraightLine  = "straight_line"  // the choice is a straight line, or nearly so
	SeveralMinima = "several_minima" // minima that score within 1% of each other
)

// Evidence is the record of one choice.
type Evidence struct {
	Rule       string
	Chosen     Candidate
	Candidates []Candidate // in order of edf
	Minima     []Minimum   // best first
	Folds      []int32     // kfold: fold of each row of Data
	Flags      []string
}

// RangeError says that a group's data leave a rule no room.
type RangeError struct{ Text string }

func (e RangeError) Error() string { return e.Text }

// CausedByData tells whether an error of this package says something of one
// group's data, so that other groups may go on.
func CausedByData(err error) bool {
	switch err.(type) {
	case RangeError:
		return true
	}
	return false
}

// Lambda chooses lambda for d by rule r.
func Lambda(ws *spline.Workspace, d *spline.Data, r Rule) (*Evidence, error) {
	s := newSearch(ws, d, r)
	switch r.Name {
	case FixedLambda:
		if !(r.Lambda > 0) {
			return nil, fmt.Errorf("lambda = %g, expected more than 0", r.Lambda)
		}
		return s.fixed(r.Lambda), nil
	case FixedDF:
		m := len(d.X)
		if r.DF < 2 {
			return nil, fmt.Errorf("df = %g, expected 2 or more", r.DF)
		}
		if r.DF >= float64(m) {
			return nil, RangeError{fmt.Sprintf("df = %g needs more than %g distinct x, there are %d", r.DF, r.DF, m)}
		}
		if r.DF == 2 {
			return s.fixed(math.Inf(1)), nil
		}
		return s.fixed(s.solve(r.DF, exactly)), nil
	case GCV, LOOCV, REML:
		return s.automatic()
	case KFold:
		if err := s.drawFolds(); err != nil {
			return nil, err
		}
		return s.automatic()
	}
	return nil, fmt.Errorf("unknown rule %q", r.Name)
}

// fixed records a lambda that no criterion chose. The score of such a rule is
// its GCV, for comparison only.
func (s *search) fixed(lambda float64) *Evidence {
	c := s.candidate(lambda)
	c.Score = c.GCV
	e := &Evidence{Rule: s.rule.Name, Chosen: c, Candidates: []Candidate{c}}
	if c.EDF <= LeastDF+1e-3 {
		e.Flags = append(e.Flags, StraightLine)
	}
	return e
}

// Others returns what gcv, loocv and reml would have taken, over their default
// range of edf. It uses e's candidates as a lattice where they cover it.
func Others(ws *spline.Workspace, d *spline.Data, r Rule, e *Evidence) []Other {
	var out []Other
	var shared []point
	plain := r.Name != FixedDF && r.Name != FixedLambda && r.DFAtLeast == 0 && r.DFAtMost == 0 && (r.Inflate == 0 || r.Inflate == 1)
	for _, name := range []string{GCV, LOOCV, REML} {
		if plain && name == r.Name {
			out = append(out, Other{name, e.Chosen.Lambda, e.Chosen.EDF, e.Chosen.Score})
			continue
		}
		s := newSearch(ws, d, Rule{Name: name})
		if shared == nil {
			if plain && len(e.Candidates) > 4 {
				shared = pointsOf(e.Candidates)
			} else if err := s.walk(); err == nil {
				shared = s.lattice
			} else {
				return nil
			}
		}
		s.adopt(shared)
		best := s.best(s.minima())
		out = append(out, Other{name, best.Lambda, best.EDF, best.Score})
	}
	return out
}
