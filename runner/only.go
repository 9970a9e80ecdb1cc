package runner

import (
	"slices"
	"strconv"
	"strings"

	"batten/runner/ledger"
	"batten/spec"
)

// request is one --only: a curve, or some groups of one.
type request struct {
	text  string // as it was given
	curve string
	match []Match // none: the whole curve
	hits  int
}

// parseOnly reads CURVE or CURVE[col=value, ...], with quotes about a value as
// fits' names have them.
func parseOnly(texts []string) ([]*request, error) {
	var out []*request
	for _, t := range texts {
		p := &request{text: strings.TrimSpace(t)}
		bad := func(what string) error {
			return usagef("--only %q: %s; expected CURVE or CURVE[col=value, ...], such as 'firmness[cultivar=Aroma, store=air]'", t, what)
		}
		name, rest, some := strings.Cut(p.text, "[")
		if p.curve = strings.TrimSpace(name); p.curve == "" {
			return nil, bad("names no curve")
		}
		if some {
			inner, ok := strings.CutSuffix(rest, "]")
			if !ok {
				return nil, bad("the bracket is not closed at the end")
			}
			for inner = strings.TrimLeft(inner, " "); ; inner = strings.TrimLeft(inner, " ") {
				col, after, ok := strings.Cut(inner, "=")
				if col = strings.TrimSpace(col); !ok || col == "" {
					return nil, bad("within the brackets there is no col=value")
				}
				if slices.ContainsFunc(p.match, func(m Match) bool { return m.Column == col }) {
					return nil, bad("column " + strconv.Quote(col) + " stands twice")
				}
				var val string
				if quoted, err := strconv.QuotedPrefix(after); err == nil && quoted[0] == '"' {
					val, _ = strconv.Unquote(quoted)
					after = strings.TrimLeft(after[len(quoted):], " ")
				} else if i := strings.IndexByte(after, ','); i >= 0 {
					val, after = after[:i], after[i:]
				} else {
					val, after = after, ""
				}
				p.match = append(p.match, Match{col, val})
				if after == "" {
					break
				}
				if inner, ok = strings.CutPrefix(after, ","); !ok {
					return nil, bad("after the value of " + strconv.Quote(col) + " stands " + strconv.Quote(after))
				}
			}
		}
		out = append(out, p)
	}
	return out, nil
}

// takes tells whether the request takes in a group.
func (p *request) takes(by, group []string) bool {
	for _, m := range p.match {
		if k := slices.Index(by, m.Column); k < 0 || group[k] != m.Value {
			return false
		}
	}
	return true
}

// mergeGroups puts kept entries among taken ones, in the order of groups.
func mergeGroups(c *spec.Curve, taken, kept []ledger.Entry) []ledger.Entry {
	type keyed struct {
		values []value
		entry  ledger.Entry
	}
	var all []keyed
	for _, es := range [][]ledger.Entry{taken, kept} {
		for _, e := range es {
			all = append(all, keyed{groupValues(c, e.Group), e})
		}
	}
	slices.SortStableFunc(all, func(a, b keyed) int {
		if d := compareValues(a.values, b.values); d != 0 {
			return d
		}
		return slices.Compare(a.entry.Group, b.entry.Group)
	})
	out := make([]ledger.Entry, len(all))
	for i, k := range all {
		out[i] = k.entry
	}
	return out
}
