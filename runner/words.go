package runner

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"batten/methods/choose"
	"batten/runner/table"
	"batten/spec"
)

// whyText tells a choice in one or two plain sentences.
func whyText(f *storedFit) string {
	edf := fmt.Sprintf("edf %.2f", f.EDF)
	switch f.Rule {
	case spec.FixedDF:
		return fmt.Sprintf("The degrees of freedom were fixed beforehand at %s; lambda %.4g gives them.", edf, f.Lambda)
	case spec.FixedLambda:
		return fmt.Sprintf("Lambda was fixed beforehand at %s, which gives %s.", table.FormatNumber(f.Lambda), edf)
	}
	lo, hi := span(f)
	if f.Rule == spec.ResidualTarget {
		s := fmt.Sprintf("RSS was computed at %s from edf %.2f to %.2f; ", plural(len(f.candidates()), "candidate", "candidates"), lo, hi)
		if slices.Contains(f.Flags, choose.TargetUnreached) {
			return s + fmt.Sprintf("no curve comes as near the rows as n sigma² asks, and the roughest was taken, %s.", edf)
		}
		return s + fmt.Sprintf("%s is the smoothest whose RSS / n, %.4g, does not exceed sigma².", edf, f.Score)
	}
	if f.Shared != "" {
		return fmt.Sprintf("One %s is shared by %s: the sum of their %s is smallest there. This group has %s.",
			f.Shared, plural(f.SharedBy, "group", "groups"), criterion(f.Rule), edf)
	}
	s := fmt.Sprintf("%s was computed at %s from edf %.2f to %.2f; ", capital(criterion(f.Rule)), plural(len(f.candidates()), "candidate", "candidates"), lo, hi)
	chosen, runner := -1, -1
	for i, m := range f.Minima {
		if m.Chosen {
			chosen = i
		} else if runner < 0 {
			runner = i
		}
	}
	switch {
	case chosen < 0:
		s += fmt.Sprintf("the smoothest candidate within one standard error of the best was taken, at %s.", edf)
	case f.Minima[chosen].End == "smooth":
		s += fmt.Sprintf("its smallest value lies at the smooth end of the search, %s: the data ask for no more than %s, or nearly so.", edf, nullSpace(f))
	case f.Minima[chosen].End == "rough":
		s += fmt.Sprintf("its smallest value lies at the rough end of the search, %s, and it would fall further beyond.", edf)
	default:
		s += fmt.Sprintf("its smallest value lies at %s.", edf)
	}
	if runner >= 0 && chosen >= 0 {
		m := f.Minima[runner]
		s += fmt.Sprintf(" The runner-up is a minimum at edf %.2f%s.", m.EDF, worse(f, m.Score))
	}
	return s
}

// worse says how far a score lies above the chosen one. REML is a log
// likelihood: differences count, not ratios.
func worse(f *storedFit, score float64) string {
	switch f.Rule {
	case spec.AICc:
		return fmt.Sprintf(", %.3g higher", score-f.Score)
	case spec.REML:
		return fmt.Sprintf(", %.3g worse in −2 log likelihood", score-f.Score)
	}
	if f.Score > 0 {
		return fmt.Sprintf(", %.3g%% worse", 100*(score/f.Score-1))
	}
	return ""
}

func span(f *storedFit) (lo, hi float64) {
	lo, hi = math.Inf(1), math.Inf(-1)
	for _, c := range f.candidates() {
		lo, hi = min(lo, c.EDF), max(hi, c.EDF)
	}
	return lo, hi
}

// flagText says in plain words what a flag means and what to do about it.
func flagText(name string, v verdict) string {
	switch name {
	case "at_bound":
		return "The criterion is smallest at an end of the searched range, so the bound and not the data set the smoothness. Look at the curve; widen or narrow df_at_least and df_at_most on purpose, or use another rule."
	case choose.TargetUnreached:
		return "No curve in the searched range comes as near the rows as the stated sigma says. Sigma may be too small, or tied rows alone spread further; check it before relying on the curve."
	case choose.StraightLine:
		return "The rule chose a straight line, or nearly so: the scatter hides any bend. That is a result; more readings or less scatter would be needed to see a bend."
	case choose.Constant:
		return "The rule chose a constant, or nearly so: the scatter hides any change. That is a result; more readings or less scatter would be needed to see one."
	case choose.Parabola:
		return "The rule chose a parabola, or nearly so: the scatter hides anything else. That is a result; more readings or less scatter would be needed to see it."
	case "several_minima":
		return "Two or more minima score within 1% of each other: the data do not settle between a smoother and a wigglier curve. Compare them before relying on detail; df_at_most or reml would settle it by rule."
	case "autocorrelated":
		return "Neighbouring residuals resemble each other. Either the curve is too stiff, or the errors are serially dependent; then gcv and loocv undersmooth and bands are too narrow. Consider kfold over blocks or over stretches, with a gap."
	case "high_leverage":
		return "Some rows all but fix the curve where they stand. Check these rows: an error in one of them would go straight into the curve."
	case "few_distinct":
		return "There are few distinct x, so little can be said about smoothness from the data alone. Consider fixed_df with a reason."
	case "extrapolated":
		return "A reading or the grid lies beyond the data. The curve goes on there by assumption (constant, straight or as a parabola, by its order), and the band widens; nothing observed supports it."
	}
	if g, ok := strings.CutPrefix(name, "guard "); ok {
		if slices.Contains(v.Untold, g) {
			return fmt.Sprintf("The guard %q warns: its condition has no value for this fit, for something it names is missing; that counts as not holding.", g)
		}
		return fmt.Sprintf("The guard %q warns: its condition does not hold for this fit.", g)
	}
	return name
}

// capital begins a sentence.
func capital(s string) string {
	if s == "" {
		return s
	}
	return strings.ToUpper(s[:1]) + s[1:]
}

// nullSpace names the curves that the fit's penalty leaves free.
func nullSpace(f *storedFit) string {
	switch f.Order {
	case 1:
		return "a constant"
	case 3:
		return "a parabola"
	}
	return "a straight line"
}
