package reports

// ruleWords says in plain words what each rule does.
var ruleWords = []struct{ rule, text string }{
	{"fixed_df", "fixed_df: the degrees of freedom were written down beforehand; lambda is what gives them. The data had no say in the smoothness."},
	{"fixed_lambda", "fixed_lambda: lambda was written down beforehand, on the scale of x, y and the weights as they are."},
	{"gcv", "gcv: generalised cross-validation, n RSS / (n − edf)². It stands for the error of predicting a row from the others. It may undersmooth small groups, and does so where errors are serially dependent."},
	{"loocv", "loocv: leave-one-out cross-validation, the mean weighted squared error of predicting each row from all the others."},
	{"kfold", "kfold: rows, or whole blocks of them, are held out in turn and predicted from the rest; the mean weighted squared error is made smallest. Blocks, or stretches of neighbours with a gap about them, guard against serial dependence; of stretches only rows between fitted rows are scored."},
	{"aicc", "aicc: the Akaike criterion with its correction for small n. It is close to gcv, and undersmooths less often in small groups."},
	{"known_sigma", "known_sigma: the unbiased estimate of the curve's mean squared error where the standard deviation of a row is known beforehand. It is as good as that sigma."},
	{"residual_target", "residual_target: the smoothest curve whose RSS does not exceed n sigma², for a sigma known beforehand. It tends to be smoother than the others."},
	{"reml", "reml: restricted maximum likelihood of the curve as a random function with a straight line as its fixed part. It seldom undersmooths, and has fewer false minima than cross-validation."},
}

// howToRead explains the terms of the report, and cautions.
func howToRead(rules map[string]bool, orders map[int]bool, pointwise, contrasts bool) []node {
	items := append(orderWords(orders),
		"sigma is the residual standard deviation of a row of weight 1, sqrt(RSS / (n − edf)).",
		bandWords(pointwise),
		"A crossing or a peak has the interval over which the band still allows it. “Open” means that the data end before the interval does.",
	)
	for _, r := range ruleWords {
		if rules[r.rule] {
			items = append(items, "The rule "+r.text)
		}
	}
	if contrasts {
		items = append(items, "A difference of two curves adds their variances. No difference: the largest difference in units of its standard error, judged over the whole stretch at once by the tube formula. "+
			"Parallel: the same for the difference less its mean, judged by draws from the posterior. P by Holm's method allows for the number of pairs.")
	}
	return []node{
		heading{2, "How to read this"}, list{items},
		heading{3, "Caution"}, para{"A smooth curve describes the data it was given. Bands assume independent errors of the stated variance; " +
			"they do not cover a wrong rule, a bias common to all readings, or whatever was not measured. Curves beyond the data rest on assumption alone. " +
			"Where a decision can affect health or safety, follow the standards and local codes that apply and the judgement of licensed practice; this report does not replace them."},
	}
}

func bandWords(pointwise bool) string {
	if pointwise {
		return "The band is pointwise: at any one x it holds the curve with the stated level, averaged along the curve. It does not hold the whole curve at once."
	}
	return "A simultaneous band holds the whole curve over its grid at once, with the stated level. Readings have their own, pointwise, intervals."
}

// orderWords says what a curve and its edf are, for each order of penalty.
func orderWords(orders map[int]bool) []string {
	const smooth = "A curve is a penalised smooth: of all curves it has the least weighted squared distance to the rows plus lambda times its total squared "
	const edf = "edf, the effective degrees of freedom, counts how many free numbers the curve spends: "
	const compare = ", more is wigglier. It can be compared between groups; lambda cannot."
	var out []string
	if orders[2] || len(orders) == 0 || !orders[1] && !orders[3] {
		out = append(out, smooth+"bend. Between the data it is a cubic, beyond them a straight line.", edf+"2 is a straight line"+compare)
	}
	if orders[1] {
		out = append(out, "Order 1: "+smooth+"slope. Between the data it is straight, beyond them constant.", edf+"1 is a constant"+compare)
	}
	if orders[3] {
		out = append(out, "Order 3: "+smooth+"third derivative. Between the data it is a quintic, beyond them a parabola.", edf+"3 is a parabola"+compare)
	}
	return out
}
