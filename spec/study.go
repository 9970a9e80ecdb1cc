package spec

import (
	"strings"

	"github.com/hashicorp/hcl/v2"

	"batten/spec/expr"
)

// Study is one checked spec: every name resolved, every expression compiled,
// every constant evaluated. It holds no rows and has read no data.
type Study struct {
	File string // the spec's path as it was given
	Dir  string // the folder it stands in; every relative path starts here
	Text []byte // the file as read

	Title   string
	Owner   string
	Licence string // of the outputs: a URL, or a name; "" where none is given
	Seed    int64

	Inputs    []*Input // all lists are in the order of the file
	Rows      []*Rows
	Curves    []*Curve
	Contrasts []*Contrast
	Guards    []*Guard
	Exports   []*Export
	Reports   []*Report
}

// Name is a block's or column's name with the place it was written.
type Name struct {
	Text  string
	Range hcl.Range
}

// Column is one typed column of an input or of rows.
type Column struct {
	Name  Name
	Kind  expr.Kind // Number, Text or Date; an added column may be Bool
	Unit  string    // "" where none was given; "d" for dates on an axis
	Input string    // header in the file, where it differs from Name ("" = same)
}

// Input is a source of rows: files with typed columns.
type Input struct {
	Name      Name
	File      string // a path or a glob, with forward slashes, under the study's folder
	FileRange hcl.Range
	Outside   bool     // the files may lie outside the study's folder, on purpose
	Missing   []string // cells that mean "missing"; default: the empty cell
	Separator byte     // 0: by the file's name (, or tab)
	Decimal   byte     // '.' or ','
	Columns   []Column
	Expects   []Expect

	// Instead says where recorded files lie, by their recorded paths. Parse
	// leaves it nil; a replay sets it.
	Instead map[string]string
}

// Expect is a condition every row of an input must meet.
type Expect struct {
	Name   Name
	That   *expr.Program // Bool; nil where Unique is set
	Unique []string      // columns whose values may stand together only once
	Range  hcl.Range
}

// Rows is a table made from an input or from other rows.
type Rows struct {
	Name    Name
	From    string   // name of an Input or Rows, resolved
	Steps   []Step   // in the order of the file
	Columns []Column // every column after the steps, From's first
}

// Step adds a column or drops rows. Exactly one of Add and When is set.
type Step struct {
	Name   Name          // the new column, or the drop's label
	Add    *expr.Program // the new column's value
	Unit   string
	When   *expr.Program // Bool: rows to drop
	Reason string
	Range  hcl.Range
}

// Curve is a definition: a response along an x by groups, with its rule.
type Curve struct {
	Name     Name
	From     string // Input or Rows
	Response Column
	Along    Column   // Number or Date
	By       []Column // may be empty: one group
	Weight   *Column  // nil: every row weighs 1
	Sigma    *Column  // of a rule with sigma = COLUMN: a row weighs 1/sigma^2; never beside Weight

	Order int // of the penalty: 1, 2 or 3

	Rule       Rule        // the rule without `only`
	Exceptions []Exception // in the order of the file; the first that holds wins

	Band     Band
	Grid     Grid
	Readings []Reading

	Tolerance Tolerance
	Range     hcl.Range
}

// Tolerance says from where on a fit counts as moved against the ledger. What
// is 0 is not looked at.
type Tolerance struct {
	Given      bool    // a tolerance block stands in the spec
	HalfWidths float64 // of the old band; 0.25 where no block is given
	Response   float64 // in the response's unit
	Readings   []ReadingTolerance
}

// ReadingTolerance is the largest change of a reading that does not count.
type ReadingTolerance struct {
	Name  string
	Limit float64 // in the reading's unit; days for a date
}

// Rule names for Rule.Name.
const (
	FixedDF     = "fixed_df"
	FixedLambda = "fixed_lambda"
	GCV         = "gcv"
	LOOCV       = "loocv"
	KFold       = "kfold"
	REML        = "reml"
	AICc        = "aicc"

	KnownSigma     = "known_sigma"
	ResidualTarget = "residual_target"
)

// What the groups of a rule share, for Rule.Shared.
const (
	SharedLambda = "lambda"
	SharedEDF    = "edf"
)

// Rule is a smoothness rule with its settings.
type Rule struct {
	Name      string
	DF        float64 // fixed_df
	Lambda    float64 // fixed_lambda
	Inflate   float64 // gcv; 1 where not given
	Folds     int     // kfold; 0 where not given and Block is set: one fold a block value
	Block     *Column // kfold; nil: folds over rows
	Stretches bool    // kfold: folds are neighbours in x
	Gap       float64 // kfold: in the unit of x
	OneSE     bool    // kfold, loocv
	Sigma     float64 // known_sigma, residual_target; 1 where the curve has a Sigma column
	Shared    string  // "", SharedLambda or SharedEDF: one for all groups that follow the rule
	DFAtLeast float64 // 0: the default 2.01
	DFAtMost  float64 // 0: the default 0.9 times the distinct x
	Range     hcl.Range
}

// Exception is a rule for some groups, with its reason.
type Exception struct {
	Name   Name
	Only   *expr.Program // Bool, over the by columns, n and distinct
	Rule   Rule
	Reason string
	Source string // Only as written
}

// Band says which interval stands about the curve.
type Band struct {
	Level        float64 // 0.95 by default
	Simultaneous bool    // kind = simultaneous: over the whole grid at once
	NewReading   bool    // for = new_reading
	Weight       float64 // of the new reading; 0: the mean weight of the group
}

// Grid says where the curve is tabulated. One of Points, Step, At is set.
type Grid struct {
	Points int       // evenly spaced over the observed range, ends included; 101 by default
	Step   float64   // every multiple of Step within the range
	At     []float64 // as written, sorted, without repeats
	From   *float64  // instead of the observed ends (Points and Step only)
	To     *float64
}

// Reading kinds.
const (
	ValueAt  = "value"
	SlopeAt  = "slope"
	BendAt   = "curvature"
	Crossing = "crossing"
	Maximum  = "maximum"
	Minimum  = "minimum"
	Steepest = "steepest"
	Area     = "area"
	Mean     = "mean"
	Change   = "change"
	Surely   = "surely"
)

// Reading is a number to take from every fit of a curve.
type Reading struct {
	Name      Name
	Kind      string
	At        float64 // ValueAt, SlopeAt: x. Crossing: the level
	Direction string  // "", "rising" or "falling": Crossing, Steepest; one of the two: Surely
	All       bool    // Crossing: every one instead of the first
	From, To  float64 // Area, Mean, Change
}

// Contrast is the difference of two groups' curves.
type Contrast struct {
	Name   Name
	Of     string    // a curve
	Across string    // one of its by columns
	Minus  [2]string // values of Across: the first minus the second
}

// Guard consequences.
const (
	Warn   = "warn"
	Skip   = "skip"
	Refuse = "refuse"
)

// What a guard stands on, for Guard.Kind.
const (
	OnCurve    = "curve"
	OnContrast = "contrast"
	OnInput    = "input"
	OnStudy    = "study"
)

// Guard is a condition on each fit of a curve, on each pair of a contrast, on
// an input or on the study as a whole, with a consequence.
type Guard struct {
	Name      Name
	On        string // a curve, a contrast, an input; "study" for the study as a whole
	Kind      string // of On: OnCurve, OnContrast, OnInput, OnStudy
	Require   *expr.Program
	BeforeFit bool // OnCurve: Require uses only n, distinct and by columns
	Otherwise string
	Reason    string
	Source    string // Require as written
}

// Export kinds, for Export.What.
const (
	ExportGrid         = "grid"
	ExportFits         = "fits"
	ExportReadings     = "readings"
	ExportEvidence     = "evidence"
	ExportResiduals    = "residuals"
	ExportCoefficients = "coefficients"
	ExportTests        = "tests" // of a contrast
)

// Export is a table written to a file.
type Export struct {
	Name      Name
	Of        string // a curve; for grid also a contrast
	What      string
	File      string
	Schema    bool // a Table Schema beside the file
	Range     hcl.Range
	SafeCells bool // text that a spreadsheet would take for a formula gets an apostrophe; true by default
}

// SchemaFile is the path of the Table Schema beside the export, "" where none
// is asked for.
func (e *Export) SchemaFile() string {
	if !e.Schema || e.File == "" {
		return ""
	}
	return strings.TrimSuffix(e.File, ".csv") + ".schema.json"
}

// Report is a document for people.
type Report struct {
	Name  Name
	Title string
	Files []string // .md, .html
	Show  []string // curves and contrasts, in the order written
	Range hcl.Range
}
