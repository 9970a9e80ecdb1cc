package provenance

import (
	"encoding/json"
	"fmt"
	"net/url"
	"regexp"
	"slices"
	"strings"
	"testing"
)

// crateTerms are the types and properties of the context of RO-Crate 1.1
// (https://w3id.org/ro/crate/1.1/context) that are used here. Each was looked
// up in the context of 1.2, as the npm package ro-crate 3.7.2 ships it; that
// they are in 1.1 too is from memory. sha256 is defined by the document itself.
var crateTerms = []string{
	"Dataset", "File", "CreativeWork", "CreateAction", "AcceptAction", "SoftwareApplication", "Person",
	"name", "description", "datePublished", "identifier", "license", "hasPart", "mentions", "conformsTo", "about",
	"contentSize", "encodingFormat", "instrument", "object", "result", "agent", "startTime", "endTime", "actionStatus", "error",
	"softwareVersion", "softwareRequirements", "url", "email",
}

// iso8601 is a date to at least the day, with an optional time.
var iso8601 = regexp.MustCompile(`^\d{4}-\d\d-\d\d(T\d\d:\d\d:\d\d(Z|[+-]\d\d:\d\d))?$`)

// checkCrate returns what is wrong with a metadata file, by the text of the
// RO-Crate Metadata Specification 1.1.2
// (https://www.researchobject.org/ro-crate/1.1/; sections from memory).
func checkCrate(b []byte) (wrong []string) {
	fail := func(format string, a ...any) { wrong = append(wrong, fmt.Sprintf(format, a...)) }
	var doc struct {
		Context []any            `json:"@context"`
		Graph   []map[string]any `json:"@graph"`
	}
	if err := json.Unmarshal(b, &doc); err != nil {
		return []string{err.Error()}
	}
	// "RO-Crate JSON-LD": the context is that of the specification; ad hoc terms
	// may follow it ("Extending RO-Crate", "Adding new or ad hoc vocabulary terms")
	terms := map[string]bool{}
	for _, t := range crateTerms {
		terms[t] = true
	}
	if len(doc.Context) == 0 || doc.Context[0] != "https://w3id.org/ro/crate/1.1/context" {
		fail("@context is %v", doc.Context)
	}
	for _, c := range doc.Context {
		if m, ok := c.(map[string]any); ok {
			for t := range m {
				terms[t] = true
			}
		}
	}
	// "The graph describing the RO-Crate": flattened and compacted, so that no
	// entity is nested, each has an @id and an @type, and none is there twice
	at := map[string]map[string]any{}
	types := func(e map[string]any) (out []string) {
		switch v := e["@type"].(type) {
		case string:
			out = []string{v}
		case []any:
			for _, x := range v {
				out = append(out, fmt.Sprint(x))
			}
		}
		return out
	}
	for _, e := range doc.Graph {
		id, _ := e["@id"].(string)
		if u, err := url.Parse(id); id == "" || err != nil || strings.ContainsAny(id, " \\") || strings.HasPrefix(u.Path, "../") {
			fail("@id %q is no URI or path under the root", id)
		}
		if at[id] != nil {
			fail("%s is there twice", id)
		}
		at[id] = e
		if len(types(e)) == 0 {
			fail("%s has no @type", id)
		}
		for _, t := range types(e) {
			if !terms[t] {
				fail("%s: the type %s is not in the context", id, t)
			}
		}
	}
	refs := func(v any) (out []string) {
		list, ok := v.([]any)
		if !ok {
			list = []any{v}
		}
		for _, x := range list {
			if m, ok := x.(map[string]any); ok {
				if s, ok := m["@id"].(string); ok && len(m) == 1 {
					out = append(out, s)
				} else {
					fail("a nested entity: %v", m)
				}
			}
		}
		return out
	}
	used := map[string]bool{}
	for id, e := range at {
		for k, v := range e {
			if k == "@id" || k == "@type" {
				continue
			}
			if !terms[k] {
				fail("%s: the property %s is not in the context", id, k)
			}
			for _, r := range refs(v) {
				used[r] = true
				// words of schema.org and the profile's own URI need no entity
				if at[r] == nil && !strings.HasPrefix(r, "http://schema.org/") && !strings.HasPrefix(r, "https://w3id.org/ro/crate/") {
					fail("%s of %s is %s, which is not in the graph", k, id, r)
				}
			}
		}
	}
	text := func(e map[string]any, id, key string) string {
		s, ok := e[key].(string)
		if !ok || strings.TrimSpace(s) == "" {
			fail("%s has no %s", id, key)
		}
		return s
	}
	// "RO-Crate Metadata File Descriptor"
	d := at["ro-crate-metadata.json"]
	if d == nil || !slices.Equal(refs(d["about"]), []string{"./"}) || !slices.Equal(refs(d["conformsTo"]), []string{"https://w3id.org/ro/crate/1.1"}) || !slices.Contains(types(d), "CreativeWork") {
		fail("the metadata file's descriptor is %v", d)
	}
	// "Direct properties of the Root Data Entity"
	root := at["./"]
	if root == nil || !slices.Equal(types(root), []string{"Dataset"}) {
		fail("the root is %v", root)
		return wrong
	}
	text(root, "./", "name")
	text(root, "./", "description")
	if s := text(root, "./", "datePublished"); !iso8601.MatchString(s) {
		fail("datePublished is %q", s)
	}
	l := refs(root["license"])
	for _, id := range l { // "Licensing, Access control and copyright": a contextual entity with name and description
		text(at[id], id, "name")
		text(at[id], id, "description")
	}
	if len(l) != 1 {
		fail("license is %v", root["license"])
	}
	parts := refs(root["hasPart"])
	for id, e := range at {
		t := types(e)
		switch {
		case slices.Contains(t, "File"):
			// "Data entities": linked from the root by hasPart; "Encoding file paths"
			if !slices.Contains(parts, id) {
				fail("%s is not linked from the root", id)
			}
			text(e, id, "name")
			text(e, id, "encodingFormat")
			if s, ok := e["contentSize"]; ok {
				if s, ok := s.(string); !ok || !regexp.MustCompile(`^\d+$`).MatchString(s) {
					fail("contentSize of %s is %v", id, s)
				}
			}
			if s := text(e, id, "sha256"); len(s) != 64 {
				fail("sha256 of %s is %q", id, s)
			}
		case slices.Contains(t, "CreateAction"):
			// "Provenance of entities", "Recording changes", "Software used to create files"
			text(e, id, "name")
			if s := text(e, id, "endTime"); !iso8601.MatchString(s) {
				fail("endTime of %s is %q", id, s)
			}
			if len(refs(e["instrument"])) == 0 || e["object"] == nil || e["result"] == nil {
				fail("%s lacks instrument, object or result", id)
			}
			for _, i := range refs(e["instrument"]) {
				if !slices.Contains(types(at[i]), "SoftwareApplication") {
					fail("the instrument %s is %v", i, types(at[i]))
				}
			}
			for _, a := range refs(e["agent"]) {
				if !slices.Contains(types(at[a]), "Person") {
					fail("the agent %s is %v", a, types(at[a]))
				}
			}
		case slices.Contains(t, "SoftwareApplication"), slices.Contains(t, "Person"):
			text(e, id, "name")
		}
		// "Contextual entities": each should be referred to
		if id != "./" && id != "ro-crate-metadata.json" && !used[id] {
			fail("nothing refers to %s", id)
		}
	}
	return wrong
}

func TestROCrate(t *testing.T) {
	for name, r := range variants() {
		t.Run(name, func(t *testing.T) {
			b, err := ROCrate(r)
			if err != nil {
				t.Fatal(err)
			}
			for _, e := range checkCrate(b) {
				t.Error(e)
			}
			var doc struct {
				Graph []map[string]any `json:"@graph"`
			}
			if err := json.Unmarshal(b, &doc); err != nil {
				t.Fatal(err)
			}
			sums := map[string]string{}
			var run map[string]any
			for _, e := range doc.Graph {
				if s, ok := e["sha256"].(string); ok {
					sums[fmt.Sprint(e["name"])] = s
				}
				if e["@type"] == "CreateAction" {
					run = e
				}
			}
			all := []File{r.Spec}
			for _, in := range r.Inputs {
				all = append(all, in.Files...)
			}
			for _, o := range r.Outputs {
				all = append(all, o.File)
			}
			for _, f := range all {
				if sums[f.Path] != f.SHA256 {
					t.Errorf("%s has the digest %q, expected %s", f.Path, sums[f.Path], f.SHA256)
				}
			}
			if n := len(run["result"].([]any)); n != len(r.Outputs) {
				t.Errorf("%d results, expected %d", n, len(r.Outputs))
			}
			failed := run["error"] != nil
			if failed != (len(r.Refused) > 0) {
				t.Errorf("the action's error is %v", run["error"])
			}
			if _, ok := run["agent"]; ok != (r.Person != "") {
				t.Errorf("the action's agent is %v", run["agent"])
			}
		})
	}
}

// TestROCrateCheckNotices: the check refuses what breaks the standard.
func TestROCrateCheckNotices(t *testing.T) {
	b, err := ROCrate(sample())
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range [][]any{
		{"@context"}, {"@graph", 0, "conformsTo"}, {"@graph", 0, "about"}, {"@graph", 1, "name"}, {"@graph", 1, "description"},
		{"@graph", 1, "datePublished"}, {"@graph", 1, "hasPart"}, {"@graph", 1, "license"}, {"@graph", 1, "mentions"}, {"@graph", 1, "@type"}, {"@graph", 2, "@id"}, {"@graph", 3, "sha256"},
	} {
		if len(checkCrate(without(t, b, p...))) == 0 {
			t.Errorf("nothing notices that %v is not there", p)
		}
	}
	for old, bad := range map[string]string{
		`"out/grid%201.csv"`:       `"out/grid 1.csv"`,
		`"@type": "CreateAction"`:  `"@type": "MakeAction"`,
		`"email"`:                  `"mail"`,
		`"instrument"`:             `"tool"`,
		`"@id": "https://go.dev/"`: `"@id": "study.hcl"`,
	} {
		s := strings.ReplaceAll(string(b), old, bad)
		if s == string(b) {
			t.Errorf("there is no %s to spoil", old)
		} else if len(checkCrate([]byte(s))) == 0 {
			t.Errorf("nothing notices %s", bad)
		}
	}
}
