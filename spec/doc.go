// Package spec reads a study's spec: HCL in, plain checked structs out.
//
// Steps: Load reads a file (or a folder's study.hcl); names are resolved,
// constants evaluated, expressions compiled (spec/expr), and everything that
// is wrong is found in one pass, in the order of the file, as *Mistakes with
// places. The package reads no data and fits nothing.
//
// # The language
//
// A spec is UTF-8 text in HCL's native syntax, at most 1 MiB. Blocks may stand
// in any order. All named blocks but let share one namespace and are referred
// to by bare name; rules, directions and kinds are bare words; text stands in
// quotes. Constants are numbers, text or true and false, may use the names of
// let and arithmetic, and may not call functions.
//
//	study {                      required, once
//	  title = TEXT               required
//	  owner = TEXT
//	  licence = TEXT             of what the study makes: a URL, or a name
//	  seed  = WHOLE              default 0; only k-fold draws use it
//	}
//
//	let { NAME = CONSTANT ... }  any number of times
//
//	input "NAME" {
//	  file      = PATH           required; under the study's folder, forward slashes; * ? [] make it a pattern
//	  columns   = { NAME = TYPE, ... }   required; TYPE is text, number, number("unit") or date (ISO 8601)
//	  missing   = [TEXT, ...]    cells that mean missing; default [""]
//	  headers   = { NAME = TEXT, ... }   a column's header in the file, where it is another
//	  separator = CHARACTER      default: tab for .tsv, else a comma
//	  decimal   = "." or ","     default "."
//	  outside   = BOOL           the file may lie outside the study's folder
//	  expect "NAME" {            any number
//	    that   = CONDITION       must be true in every row; or
//	    unique = [COLUMN, ...]   no two rows share these values
//	  }
//	}
//
//	rows "NAME" {
//	  from = INPUT or ROWS       required
//	  add "COLUMN" {             steps, in the order written
//	    value = EXPRESSION
//	    unit  = TEXT
//	  }
//	  drop "LABEL" {
//	    when   = CONDITION       rows where it is true are dropped
//	    reason = TEXT            required
//	  }
//	}
//
//	curve "NAME" {
//	  from     = INPUT or ROWS   required
//	  response = COLUMN          required, a number
//	  along    = COLUMN          required, a number or a date
//	  by       = [COLUMN, ...]   default: one curve
//	  order    = WHOLE           1, 2 or 3, default 2: the penalty is on that derivative
//	  weight   = COLUMN          the variance of a row is sigma^2 / weight; default 1
//	  smoothness { RULE }        required, once
//	  smoothness "LABEL" {       exceptions, tried before it, the first that holds
//	    only   = CONDITION       over the by columns, n and distinct
//	    RULE
//	    reason = TEXT            required
//	  }
//	  band {
//	    level  = NUMBER          default 0.95; 0.5 to 0.9999
//	    kind   = pointwise or simultaneous   the latter holds over the whole grid at once
//	    for    = curve or new_reading
//	    weight = NUMBER          of the new reading; default: the mean weight
//	  }
//	  grid {
//	    points = WHOLE           default 101, over the observed range; or
//	    step   = NUMBER          its multiples within the range; or
//	    at     = [PLACE, ...]
//	    from   = PLACE           instead of the observed ends
//	    to     = PLACE
//	  }
//	  tolerance {                from where on a fit counts as moved; any one does
//	    half_widths = NUMBER     of the accepted band; without the block 0.25
//	    response    = NUMBER     in the response's unit
//	    readings    = { READING = NUMBER, ... }   in the readings' units
//	  }
//	  reading "NAME" {           one of:
//	    value_at = PLACE
//	    slope_at = PLACE         slopes need order 2 or 3
//	    curvature_at = PLACE     needs order 3
//	    crosses  = NUMBER        with direction = rising or falling; all = true for every one
//	    maximum  = true
//	    minimum  = true
//	    steepest = true          with direction
//	    area     = [PLACE, PLACE]
//	    mean     = [PLACE, PLACE]   the area over its length
//	    change   = [PLACE, PLACE]   the value at the second less that at the first
//	    surely   = rising or falling   every stretch of the grid where the slope's
//	                             simultaneous band excludes 0
//	  }
//	}
//
// PLACE is a number, or an ISO date in quotes where the along column is a date.
// RULE is one of
//
//	rule = fixed_df      df = NUMBER >= 2
//	rule = fixed_lambda  lambda = NUMBER > 0, on the original scale of x, y, weights
//	rule = gcv           inflate = NUMBER, default 1
//	rule = loocv         one_se = BOOL
//	rule = kfold         folds = WHOLE (default 10, or one a block value), block = COLUMN or
//	                     stretches = BOOL, gap = NUMBER along x, one_se = BOOL
//	rule = reml
//	rule = aicc
//	rule = known_sigma   sigma = NUMBER, of a row of weight 1, or COLUMN: a row then weighs 1/sigma^2
//	rule = residual_target   sigma: as above; the smoothest curve with RSS <= n sigma^2
//
// and all but the fixed ones take df_at_least (default 2.01) and df_at_most
// (default 0.9 times the distinct x); all but the fixed ones and
// residual_target take shared = true (or lambda) or edf: one for all groups
// that follow the rule, by the sum of their scores.
//
//	contrast "NAME" {
//	  of     = CURVE             required
//	  across = COLUMN            required, one of its by columns
//	  minus  = [TEXT, TEXT]      required: the first minus the second
//	}
//
//	guard "NAME" {
//	  on        = CURVE, CONTRAST, INPUT or study   required
//	  require   = CONDITION      required, over what it stands on:
//	                             a curve's fits: FitNumbers, FitFlags, the by columns, and of each
//	                             reading NAME, NAME_lower, NAME_upper, of an extreme also NAME_at;
//	                             a contrast's pairs: PairNumbers and the by columns that remain;
//	                             an input: InputNumbers; the study: StudyNumbers, of all curves
//	                             together. A condition that is missing does not hold
//	  otherwise = warn, skip or refuse   required; skip only on a curve
//	  reason    = TEXT
//	}
//
//	export "NAME" {
//	  of   = CURVE or CONTRAST   required
//	  what = grid, fits, readings, evidence, residuals or coefficients   required; of a contrast grid or tests
//	  file = PATH                required, ending in .csv, under the study's folder
//	  safe_cells = BOOL          default true: text that a spreadsheet would take for a
//	                             formula gets a leading apostrophe
//	  schema = BOOL              write a Table Schema beside it, FILE with .schema.json for .csv
//	}
//
//	report "NAME" {
//	  files = [PATH, ...]        required, ending in .md or .html
//	  title = TEXT               default: the study's
//	  show  = [CURVE or CONTRAST, ...]   default: all
//	}
//
// # Expressions
//
// EXPRESSION and CONDITION are HCL's own, over columns and constants:
// + - * / %, comparisons, && || !, c ? a : b, and log log10 exp sqrt abs min
// max round lower upper trim matches year month days_since present. See
// spec/expr for types and missing values.
package spec
