// Package reports turns the results of a study into documents for people:
// terminal tables, Markdown, one self-contained HTML file, and the figures in
// them.
//
// Steps: the caller fills a Document; Terminal, Markdown and HTML write bytes
// from it. The package reads no files, fits nothing, knows no clock, and
// writes the same bytes for the same Document. Every string in a Document may
// come from a stranger's file and is escaped where it is written.
package reports

// Document is everything a report may show. Curves come in the order in which
// they are to be shown, fits sorted by group.
type Document struct {
	Title     string // the report's title
	Study     string // the study's title
	Owner     string
	Dated     string // ISO date, or "" (then no date is printed)
	Curves    []Curve
	Contrasts []Contrast
	Guards    []Guard // on contrasts, inputs and the study; those on curves stand with their curve
	Record    Record
	Summary   Summary
}

// Summary counts the fits of the run and says what moved against the ledger.
type Summary struct {
	Total, Fitted, Skipped, Refused int
	Ledger                          string // "" where nothing has been accepted yet; else "accepted 2026-03-01 by N.N.: reason"
	Moved                           []Move
}

// Move is one fit that differs from the ledger.
type Move struct {
	Fit            string  // firmness[cultivar=Aroma, store=air]
	What           string  // "shifted", "edf changed", "new", "gone", "pending"; several joined by ", "
	Pending        bool    // left as it was by the last acceptance, which took others
	Shift          float64 // largest |new - old| over the old band's half-width; NaN where there is none
	At             float64 // where on the x axis; NaN where there is none
	AtText         string  // At as it is to be read (a date where the axis is one)
	OldEDF, NewEDF float64 // NaN where there is none
}

// Axis names a quantity, its unit and whether it is a date (days since
// 1970-01-01).
type Axis struct {
	Name string
	Unit string
	Date bool
}

// Curve is one curve definition with its fits.
type Curve struct {
	Name       string
	X, Y       Axis
	By         []string
	Weight     string   // the weight column, or ""
	Rule       string   // the rule in words of the spec, e.g. "gcv" or "fixed_df, df = 4"
	Level      float64  // of the band
	BandFor    string   // "the curve" or "a new reading"
	BandKind   string   // pointwise, simultaneous
	Order      int      // of the penalty; 0 stands for 2
	Rows       RowCount // how the input's rows became this curve's rows
	Exceptions []Exception
	Guards     []Guard
	Readings   []string // names, in the order of the spec
	Fits       []Fit
	Skipped    []Skipped
}

// RowCount follows rows from file to fits.
type RowCount struct {
	Read       int
	Dropped    []Count // by reason, in the order of the spec
	SetAside   []Count // by what was missing: "firmness is missing"
	ZeroWeight int
	Used       int
}

// Count is a number with what it counts.
type Count struct {
	Label  string // the drop's name or the column
	Reason string
	N      int
}

// Exception is a rule for some groups with its reason.
type Exception struct {
	Name, Only, Rule, Reason string
	Fits                     []string // group labels it applied to
}

// Guard is a condition with how it went.
type Guard struct {
	Name, Require, Otherwise, Reason string
	On                               string
	Judged                           int      // fits or pairs; 1 for an input or the study
	Failed                           []string // what it does not hold for, each with what was found
}

// Skipped is a group without a fit.
type Skipped struct {
	Group       string
	N, Distinct int
	Why         string
	Refused     bool
}

// Fit is one group's fitted curve.
type Fit struct {
	Name                                             string   // firmness[cultivar=Aroma, store=air]
	Group                                            []string // values of By, as text
	N, Distinct                                      int
	Rule                                             string // name of the rule that chose
	Exception                                        string // name of the exception in force, or ""
	Lambda, EDF, RSS, Sigma, GCV, LOOCV, REML, Score float64
	Points                                           []Point     // the rows of the fit, in x order
	Grid                                             []GridPoint // the curve tabulated for drawing and tables, in x order
	Evidence                                         Evidence
	Readings                                         []Reading
	Flags                                            []Flag
}

// Point is one row of a fit.
type Point struct {
	X, Y, Weight, Fitted, Residual, Leverage float64
}

// GridPoint is the curve and its band at one x.
type GridPoint struct {
	X, Fit, SE, Lower, Upper, Slope float64
	Extrapolated                    bool
}

// Evidence records one choice of lambda.
type Evidence struct {
	Criterion  string      // name of what was minimised: "GCV", "LOOCV", "REML", "5-fold CV"; "" where nothing was
	Candidates []Candidate // in order of edf
	Minima     []Minimum   // best first
	Others     []Other     // what the other rules would have taken
	Why        string      // the choice in one plain sentence
}

// Candidate is one lambda tried.
type Candidate struct {
	Lambda, EDF, RSS, GCV, LOOCV, REML, Score float64
}

// Minimum is a local minimum of the criterion.
type Minimum struct {
	Lambda, EDF, Score float64
	AtEnd              bool // the criterion still falls beyond the searched range
	Chosen             bool
}

// Other is what another rule would have taken.
type Other struct {
	Rule        string
	Lambda, EDF float64
	Shift       float64 // largest shift of the curve, in half-widths of the band; NaN if not known
}

// Reading is a number taken from a fit with its interval. NaN stands for
// "none"; an interval's end may be infinite.
type Reading struct {
	Name, Kind              string
	At, Value, Lower, Upper float64
	Unit                    string
	ValueIsX                bool // Value is a place on the x axis (a date where X.Date)
	AtIsX                   bool
	Note                    string // e.g. "none in the observed range"
}

// Flag is a warning that belongs to a fit.
type Flag struct {
	Name string // at_bound, straight_line, several_minima, ...
	Text string // in plain words, with what to do
}

// Contrast is a difference of two groups' curves.
type Contrast struct {
	Name, Of, Across string
	Minus            [2]string
	X, Y             Axis
	Level            float64
	BandKind         string // pointwise, simultaneous
	Pairs            []Pair
	Missing          []string // pairs that could not be formed, with why
}

// Pair is one difference, for one value of the remaining by columns.
type Pair struct {
	Group     string       // "cultivar=Aroma", or "" where no by column remains
	Grid      []GridPoint  // Fit is the difference; Slope its slope
	SurelyNot [][2]float64 // stretches of x where the simultaneous band excludes zero
	None      Test         // of no difference
	Same      Test         // of parallel curves
}

// Test is a test's p-value, and that adjusted for the number of pairs.
type Test struct{ P, Adjusted float64 }

// Record is the provenance.
type Record struct {
	Program string // "batten v0.3.0 (commit)"
	Go      string
	Spec    File
	Inputs  []File
	Seed    int64
	Run     string   // digest of the results
	Methods []string // "spline 1", "choose 1" ...
}

// File is one file that went in.
type File struct {
	Path   string // relative to the study's folder
	SHA256 string
	Bytes  int64
	Rows   int
}
