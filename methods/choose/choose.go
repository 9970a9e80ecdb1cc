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
	"slices"

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
	AICc        = "aicc"

	// KnownSigma minimises the unbiased risk at a stated sigma; ResidualTarget
	// takes the smoothest curve whose RSS does not exceed n sigma^2.
	KnownSigma     = "known_sigma"
	ResidualTarget = "residual_target"
)

// Compared are the rules that evidence always tells of, whatever was chosen.
var Compared = []string{GCV, LOOCV, REML, AICc}

// Bounds of the search where a rule sets none.
const (
	LeastDF   = 2 + leastAbove // order 2
	MostShare = 0.9            // of the distinct x

	leastAbove = 0.01 // above the edf of the null space
)

// Rule is a smoothness rule with its settings; those of other rules are
// ignored.
type Rule struct {
	Name      string
	DF        float64 // fixed_df: edf wanted, from 2 (the straight line) to below the distinct x
	Lambda    float64 // fixed_lambda
	Inflate   float64 // gcv: the factor on edf; 0 means 1
	Sigma     float64 // known_sigma, residual_target: of a reading of weight 1
	Folds     int     // kfold; 0 with Block: one fold a block value
	Block     []int32 // kfold: block of each of the caller's rows; nil: rows are drawn
	Stretches bool    // kfold: folds are stretches of neighbours in x, not drawn
	Gap       float64 // kfold: rows this near (in x) to a held-out row do not train its fold
	OneSE     bool    // kfold, loocv: the smoothest candidate within one standard error of the best
	DFAtLeast float64 // 0: LeastDF
	DFAtMost  float64 // 0: MostShare of the distinct x
	Follow    string  // SharedLambda, SharedEDF: take Shared, which the groups have in common
	Shared    float64 // log lambda, or edf
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
	Constant      = "constant"       // order 1: the choice is a constant, or nearly so
	Parabola      = "parabola"       // order 3: the choice is a parabola, or nearly so
	SeveralMinima = "several_minima" // minima that score within 1% of each other

	TargetUnreached = "target_unreached" // residual_target: no curve in the range comes as near the data as sigma says
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
	defer s.done()
	switch r.Name {
	case FixedLambda:
		if !(r.Lambda > 0) {
			return nil, fmt.Errorf("lambda = %g, expected more than 0", r.Lambda)
		}
		return s.fixed(r.Lambda), nil
	case FixedDF:
		m, null := len(d.X), float64(d.Null())
		if r.DF < null {
			return nil, fmt.Errorf("df = %g, expected %g or more", r.DF, null)
		}
		if r.DF >= float64(m) {
			return nil, RangeError{fmt.Sprintf("df = %g needs more than %g distinct x, there are %d", r.DF, r.DF, m)}
		}
		if r.DF == null {
			return s.fixed(math.Inf(1)), nil
		}
		return s.fixed(s.solve(r.DF, exactly)), nil
	case GCV, LOOCV, REML, AICc:
		return s.minimum()
	case KnownSigma, ResidualTarget:
		if !(r.Sigma > 0) {
			return nil, fmt.Errorf("sigma = %g, expected more than 0", r.Sigma)
		}
		if r.Name == ResidualTarget {
			return s.target()
		}
		return s.minimum()
	case KFold:
		if err := s.drawFolds(); err != nil {
			return nil, err
		}
		return s.minimum()
	}
	return nil, fmt.Errorf("unknown rule %q", r.Name)
}

// minimum takes the group's own minimum, or what it shares with others.
func (s *search) minimum() (*Evidence, error) {
	if s.rule.Follow != "" {
		return s.follow()
	}
	return s.automatic()
}

// fixed records a lambda that no criterion chose. The score of such a rule is
// its GCV, for comparison only.
func (s *search) fixed(lambda float64) *Evidence {
	c := s.atLambda(lambda).Candidate
	e := &Evidence{Rule: s.rule.Name, Chosen: c, Candidates: []Candidate{c}}
	e.Flags = s.endFlags(c, inner)
	return e
}

// Others returns what the rules of Compared would have taken, over their
// default range of edf. It uses e's candidates as a lattice where they cover
// it.
func Others(ws *spline.Workspace, d *spline.Data, r Rule, e *Evidence) []Other {
	var out []Other
	var shared []point
	covers := len(e.Candidates) > 4 && r.DFAtLeast == 0 && r.DFAtMost == 0 && !(r.Inflate > 1) && r.Name != AICc && r.Name != ResidualTarget
	same := covers && !r.OneSE && r.Follow == ""
	if covers {
		shared = pointsOf(e.Candidates)
	}
	for _, name := range Compared {
		if same && name == r.Name {
			out = append(out, Other{name, e.Chosen.Lambda, e.Chosen.EDF, e.Chosen.Score})
			continue
		}
		if o, ok := other(ws, d, name, &shared); ok {
			out = append(out, o)
		}
	}
	return out
}

// other is what one rule would have taken. The first to walk leaves its
// lattice for the others.
func other(ws *spline.Workspace, d *spline.Data, name string, shared *[]point) (Other, bool) {
	s := newSearch(ws, d, Rule{Name: name})
	defer s.done()
	if *shared == nil {
		if s.walk() != nil {
			return Other{}, false // too few rows for this rule; another may do
		}
		*shared = slices.Clone(s.lattice)
	}
	if !s.adopt(*shared) {
		return Other{}, false
	}
	best := s.lattice[len(s.lattice)-1]
	if !s.perfect() {
		best = s.best(s.minima(true))
	}
	return Other{name, best.Lambda, best.EDF, best.Score}, true
}
