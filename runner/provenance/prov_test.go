package provenance

import (
	"encoding/json"
	"fmt"
	"regexp"
	"sort"
	"strings"
	"testing"
	"time"
)

// What PROV-JSON asks of a document, by the text of the PROV-JSON
// Serialization (W3C Member Submission 24 April 2013,
// https://www.w3.org/submissions/prov-json/; from memory) and PROV-DM
// (https://www.w3.org/TR/2013/REC-prov-dm-20130430/). The kinds of the things
// that a relation joins come from the tables of PROV-DM section 5.
var provRelations = map[string]struct{ required, optional map[string]string }{
	// PROV-JSON 3.4 usage, PROV-DM 5.1.4
	"used": {map[string]string{"prov:activity": "activity"}, map[string]string{"prov:entity": "entity", "prov:time": "time"}},
	// PROV-JSON 3.3 generation, PROV-DM 5.1.3
	"wasGeneratedBy": {map[string]string{"prov:entity": "entity"}, map[string]string{"prov:activity": "activity", "prov:time": "time"}},
	// PROV-DM 5.1.5 communication
	"wasInformedBy": {map[string]string{"prov:informed": "activity", "prov:informant": "activity"}, nil},
	// PROV-DM 5.2.1 derivation
	"wasDerivedFrom": {map[string]string{"prov:generatedEntity": "entity", "prov:usedEntity": "entity"}, map[string]string{"prov:activity": "activity", "prov:generation": "id", "prov:usage": "id"}},
	// PROV-DM 5.3.2 attribution
	"wasAttributedTo": {map[string]string{"prov:entity": "entity", "prov:agent": "agent"}, nil},
	// PROV-DM 5.3.3 association
	"wasAssociatedWith": {map[string]string{"prov:activity": "activity"}, map[string]string{"prov:agent": "agent", "prov:plan": "entity"}},
	// PROV-DM 5.3.4 delegation
	"actedOnBehalfOf": {map[string]string{"prov:delegate": "agent", "prov:responsible": "agent"}, map[string]string{"prov:activity": "activity"}},
}

// PROV-N 3.7.1 (https://www.w3.org/TR/2013/REC-prov-n-20130430/), the part of
// it that is ASCII: PN_PREFIX and PN_LOCAL.
var qualifiedName = regexp.MustCompile(`^([A-Za-z](?:[A-Za-z0-9_.-]*[A-Za-z0-9_-])?):((?:[A-Za-z0-9_/@~&+*?#$!]|%[0-9A-Fa-f]{2})(?:(?:[A-Za-z0-9_./@~&+*?#$!-]|%[0-9A-Fa-f]{2})*(?:[A-Za-z0-9_/@~&+*?#$!-]|%[0-9A-Fa-f]{2}))?)$`)

// provTypes and provAttributes are the reserved ones of PROV-DM 5.7.2 and 5.7.3.
var (
	provTypes      = map[string]bool{"prov:Plan": true, "prov:Person": true, "prov:SoftwareAgent": true, "prov:Organization": true, "prov:Bundle": true, "prov:Collection": true, "prov:EmptyCollection": true}
	provAttributes = map[string]bool{"prov:label": true, "prov:type": true, "prov:role": true, "prov:location": true, "prov:value": true}
)

type provChecker struct {
	prefix   map[string]bool
	declared map[string]string // identifier to its kind
	err      []string
}

func (c *provChecker) fail(format string, a ...any) { c.err = append(c.err, fmt.Sprintf(format, a...)) }

func (c *provChecker) name(s string) {
	m := qualifiedName.FindStringSubmatch(s)
	if m == nil {
		c.fail("%q is no qualified name", s)
	} else if !c.prefix[m[1]] {
		c.fail("the prefix of %q is not declared", s)
	}
}

// value checks an attribute's value: text, number, truth, a typed literal, or
// a list of these (PROV-JSON 2.3 and 2.4).
func (c *provChecker) value(key string, v any) {
	switch v := v.(type) {
	case string, float64, bool:
	case []any:
		if len(v) == 0 {
			c.fail("%s is an empty list", key)
		}
		for _, x := range v {
			if _, nested := x.([]any); nested {
				c.fail("%s holds a list in a list", key)
			}
			c.value(key, x)
		}
	case map[string]any:
		s, ok1 := v["$"].(string)
		typ, ok2 := v["type"].(string)
		if !ok1 || !ok2 || len(v) != 2 {
			c.fail("%s: a typed literal needs $ and type: %v", key, v)
			return
		}
		c.name(typ)
		if typ == "prov:QUALIFIED_NAME" {
			c.name(s)
			if key == "prov:type" && strings.HasPrefix(s, "prov:") && !provTypes[s] {
				c.fail("%q is no type of PROV-DM 5.7.2.4", s)
			}
		}
	default:
		c.fail("%s is %T", key, v)
	}
}

func (c *provChecker) other(what, key string, v any) {
	c.name(key)
	if strings.HasPrefix(key, "prov:") && !provAttributes[key] {
		c.fail("%s has the attribute %s, which PROV does not give it", what, key)
	}
	c.value(key, v)
}

func instant(v any) (time.Time, bool) {
	s, ok := v.(string)
	t, err := time.Parse(time.RFC3339, s)
	return t, ok && err == nil
}

// checkPROV returns what is wrong with a document.
func checkPROV(b []byte) []string {
	var doc map[string]map[string]any
	if err := json.Unmarshal(b, &doc); err != nil {
		return []string{err.Error()}
	}
	c := &provChecker{prefix: map[string]bool{"prov": true, "xsd": true}, declared: map[string]string{}} // predeclared: PROV-JSON 2.2
	for p := range doc["prefix"] {
		c.prefix[p] = true
	}
	get := func(m any, key string) (string, bool) {
		o, _ := m.(map[string]any)
		s, ok := o[key].(string)
		return s, ok
	}
	starts, ends := map[string]time.Time{}, map[string]time.Time{}
	for _, kind := range []string{"entity", "activity", "agent"} {
		for id, v := range doc[kind] {
			c.name(id)
			c.declared[kind+" "+id] = kind
			attrs, ok := v.(map[string]any)
			if !ok {
				c.fail("%s is no object", id)
			}
			for k, x := range attrs {
				if kind == "activity" && (k == "prov:startTime" || k == "prov:endTime") { // PROV-JSON 3.2
					t, ok := instant(x)
					if !ok {
						c.fail("%s of %s is no xsd:dateTime: %v", k, id, x)
					}
					if k == "prov:startTime" {
						starts[id] = t
					} else {
						ends[id] = t
					}
					continue
				}
				c.other(id, k, x)
			}
		}
	}
	for id, end := range ends { // PROV-CONSTRAINTS 30, start-precedes-end
		if start, ok := starts[id]; ok && end.Before(start) {
			c.fail("%s ends before it starts", id)
		}
	}
	generated, used := map[string]bool{}, map[string]bool{}
	for kind, all := range doc {
		if kind == "prefix" || kind == "entity" || kind == "activity" || kind == "agent" {
			continue
		}
		rel, ok := provRelations[kind]
		if !ok {
			c.fail("%q is no kind of statement that is used here", kind)
			continue
		}
		for id, v := range all {
			if !strings.HasPrefix(id, "_:") { // PROV-JSON 3: blank identifiers for statements without one
				c.name(id)
			}
			attrs, _ := v.(map[string]any)
			for k := range rel.required {
				if _, ok := attrs[k]; !ok {
					c.fail("%s %s lacks %s", kind, id, k)
				}
			}
			for k, x := range attrs {
				want, known := rel.required[k]
				if !known {
					want, known = rel.optional[k]
				}
				switch {
				case !known:
					c.other(kind, k, x)
				case want == "time":
					if _, ok := instant(x); !ok {
						c.fail("%s of %s %s is no xsd:dateTime: %v", k, kind, id, x)
					}
				case want != "id":
					s, _ := x.(string)
					if c.declared[want+" "+s] == "" {
						c.fail("%s of %s %s is %v, which is no %s of the document", k, kind, id, x, want)
					}
				}
			}
			a, _ := get(v, "prov:activity")
			e, _ := get(v, "prov:entity")
			switch kind {
			case "used":
				used[a+" "+e] = true
			case "wasGeneratedBy":
				if generated[e] { // PROV-CONSTRAINTS 24, unique-generation
					c.fail("%s is generated twice", e)
				}
				generated[e], generated[a+" "+e] = true, true
				if t, ok := instant(attrs["prov:time"]); ok { // PROV-CONSTRAINTS 34, generation-within-activity
					if s, ok := starts[a]; ok && t.Before(s) {
						c.fail("%s is generated before %s starts", e, a)
					}
					if s, ok := ends[a]; ok && t.After(s) {
						c.fail("%s is generated after %s ends", e, a)
					}
				}
			}
		}
	}
	for id, v := range doc["wasDerivedFrom"] { // PROV-DM 5.2.1: the activity "using and generating the above entities"
		a, ok := get(v, "prov:activity")
		to, _ := get(v, "prov:generatedEntity")
		from, _ := get(v, "prov:usedEntity")
		if ok && (!generated[a+" "+to] || !used[a+" "+from]) {
			c.fail("derivation %s: %s does not use %s and generate %s", id, a, from, to)
		}
	}
	sort.Strings(c.err)
	return c.err
}

// statements reads a document's statements: kind, identifier, attributes.
func statements(t *testing.T, b []byte) map[string]map[string]map[string]any {
	t.Helper()
	var doc map[string]map[string]map[string]any
	if err := json.Unmarshal(without(t, b, "prefix"), &doc); err != nil {
		t.Fatal(err)
	}
	return doc
}

func TestPROV(t *testing.T) {
	for name, r := range variants() {
		t.Run(name, func(t *testing.T) {
			b, err := PROV(r)
			if err != nil {
				t.Fatal(err)
			}
			for _, e := range checkPROV(b) {
				t.Error(e)
			}
			doc := statements(t, b)
			// every file is there with its digest
			want := map[string]string{r.Spec.Path: r.Spec.SHA256}
			for _, in := range r.Inputs {
				for _, f := range in.Files {
					want[f.Path] = f.SHA256
				}
			}
			for _, o := range r.Outputs {
				want[o.Path] = o.SHA256
			}
			for _, e := range doc["entity"] {
				at, ok := e["prov:location"].(string)
				if !ok {
					continue
				}
				if w, known := want[at]; known && e["batten:sha256"] != w {
					t.Errorf("%s has the digest %v, expected %s", at, e["batten:sha256"], w)
				}
				delete(want, at)
			}
			if len(want) > 0 {
				t.Errorf("files that are no entities: %v", want)
			}
			persons := 0
			for _, g := range doc["agent"] {
				if object(t, g["prov:type"], "prov:type")["$"] == "prov:Person" {
					persons++
				}
			}
			wantPersons := 0
			if r.Person != "" {
				wantPersons++
			}
			if r.Acceptance != nil {
				wantPersons++
			}
			if persons != wantPersons || len(doc["agent"]) != persons+1 {
				t.Errorf("%d persons of %d agents, expected %d", persons, len(doc["agent"]), wantPersons)
			}
		})
	}
}

// TestPROVDerivations: an output derives from the fits of its own curves, and
// these from the files of their own inputs.
func TestPROVDerivations(t *testing.T) {
	b, err := PROV(sample())
	if err != nil {
		t.Fatal(err)
	}
	doc := statements(t, b)
	label := func(v any) string {
		l := doc["entity"][v.(string)]["prov:label"].(string)
		l, _, _ = strings.Cut(l, ":")
		return l
	}
	from := map[string][]string{}
	for _, d := range doc["wasDerivedFrom"] {
		to := label(d["prov:generatedEntity"])
		from[to] = append(from[to], label(d["prov:usedEntity"]))
	}
	for to, want := range map[string]string{
		"fits of curve firmness": "data/b.csv.gz data/äpfel & birnen, 2026.csv",
		"fits of curve sugar":    "../x/far.csv C data/b.csv.gz data/äpfel & birnen, 2026.csv",
		"out/grid 1.csv":         "fits of curve firmness",
		"out/weekly.html":        "fits of curve firmness fits of curve sugar ledger/firmness.csv",
		"ledger/firmness.csv":    "fits of curve firmness",
		"out/.hidden.":           "",
	} {
		sort.Strings(from[to])
		if got := strings.Join(from[to], " "); got != want {
			t.Errorf("%s derives from %q, expected %q", to, got, want)
		}
	}
}

// TestPROVCheckNotices: the check refuses what breaks the standard.
func TestPROVCheckNotices(t *testing.T) {
	b, err := PROV(sample())
	if err != nil {
		t.Fatal(err)
	}
	run := "run:000007-3f9ac2d10b44"
	for _, p := range [][]any{
		{"prefix", "batten"}, {"prefix", "file"}, {"activity", run}, {"agent"},
		{"entity", run + "/fits/sugar"}, {"wasGeneratedBy", "_:gen000001", "prov:entity"}, {"wasGeneratedBy", "_:gen000001"},
		{"used", "_:used000002"}, {"wasAssociatedWith", "_:assoc000001", "prov:activity"}, {"actedOnBehalfOf", "_:behalf000001", "prov:delegate"},
		{"activity", run, "prov:type", "type"},
	} {
		if len(checkPROV(without(t, b, p...))) == 0 {
			t.Errorf("nothing notices that %v is not there", p)
		}
	}
	for old, bad := range map[string]string{
		`"prov:startTime": "2026-03-01T10:30:00Z"`: `"prov:startTime": "2026-03-01"`,
		`"prov:endTime": "2026-03-01T10:30:05Z"`:   `"prov:endTime": "2025-03-01T10:30:05Z"`,
		`"prov:SoftwareAgent"`:                     `"prov:Robot"`,
		`"prov:label"`:                             `"prov:title"`,
		`"batten:owner"`:                           `"owner"`,
		run + "/fits/sugar\":":                     run + "/fits/su gar\":",
	} {
		s := strings.ReplaceAll(string(b), old, bad)
		if s == string(b) {
			t.Errorf("there is no %s to spoil", old)
		} else if len(checkPROV([]byte(s))) == 0 {
			t.Errorf("nothing notices %s", bad)
		}
	}
}
