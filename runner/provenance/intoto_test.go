package provenance

import (
	"encoding/json"
	"errors"
	"fmt"
	"net/url"
	"testing"

	slsa "github.com/in-toto/attestation/go/predicates/provenance/v1"
	intoto "github.com/in-toto/attestation/go/v1"
	"google.golang.org/protobuf/encoding/protojson"
)

// readStatement reads a statement as the standards define it: with their own
// protocol buffer types and checks (Go module github.com/in-toto/attestation
// v1.2.0, protos in_toto_attestation/v1 and predicates/provenance/v1, kept in
// step with slsa.dev/spec/v1.0). Unknown fields are errors.
func readStatement(b []byte) (*intoto.Statement, *slsa.Provenance, error) {
	var s intoto.Statement
	if err := protojson.Unmarshal(b, &s); err != nil {
		return nil, nil, err
	}
	if err := s.Validate(); err != nil {
		return nil, nil, err
	}
	if s.Type != intoto.StatementTypeUri {
		return nil, nil, errors.New("the type is not that of version 1")
	}
	if s.PredicateType != "https://slsa.dev/provenance/v1" {
		return nil, nil, fmt.Errorf("predicateType %q", s.PredicateType)
	}
	inner, err := protojson.Marshal(s.Predicate)
	if err != nil {
		return nil, nil, err
	}
	var p slsa.Provenance
	if err := protojson.Unmarshal(inner, &p); err != nil {
		return nil, nil, err
	}
	if err := p.Validate(); err != nil {
		return nil, nil, err
	}
	// spec/v1/resource_descriptor.md: "a ResourceDescriptor MUST specify one of
	// uri, digest or content at a minimum"; field_types.md: a ResourceURI is a URI
	all := append(append([]*intoto.ResourceDescriptor{}, s.Subject...), p.BuildDefinition.ResolvedDependencies...)
	all = append(all, p.RunDetails.Byproducts...)
	for _, d := range all {
		if d.Uri == "" && len(d.Digest) == 0 && len(d.Content) == 0 {
			return nil, nil, fmt.Errorf("%s has neither uri nor digest nor content", d.Name)
		}
		if d.Uri != "" {
			if u, err := url.Parse(d.Uri); err != nil || u.Scheme == "" {
				return nil, nil, fmt.Errorf("%s: %q is no URI", d.Name, d.Uri)
			}
		}
	}
	// statement.md: "If set, name and uri SHOULD be unique within subject"
	seen := map[string]bool{}
	for _, d := range s.Subject {
		if seen[d.Name] {
			return nil, nil, fmt.Errorf("two subjects are called %s", d.Name)
		}
		seen[d.Name] = true
	}
	// slsa.dev/spec/v1.0/provenance, buildType and builder.id: TypeURI, "MUST be
	// an absolute URI"
	for _, u := range []string{p.BuildDefinition.BuildType, p.RunDetails.Builder.Id} {
		if x, err := url.Parse(u); err != nil || !x.IsAbs() {
			return nil, nil, fmt.Errorf("%q is no absolute URI", u)
		}
	}
	return &s, &p, nil
}

func TestInToto(t *testing.T) {
	for name, r := range variants() {
		t.Run(name, func(t *testing.T) {
			b, err := InToto(r)
			if name == "refused" {
				if !errors.Is(err, ErrNothingMade) {
					t.Errorf("%v", err)
				}
				return
			}
			if err != nil {
				t.Fatal(err)
			}
			s, p, err := readStatement(b)
			if err != nil {
				t.Fatalf("%v\n%s", err, b)
			}
			if len(s.Subject) != len(r.Outputs) {
				t.Errorf("%d subjects of %d outputs", len(s.Subject), len(r.Outputs))
			}
			for i, o := range r.Outputs {
				if s.Subject[i].Name != o.Path || s.Subject[i].Digest["sha256"] != o.SHA256 {
					t.Errorf("subject %d is %v, expected %s %s", i, s.Subject[i], o.Path, o.SHA256)
				}
			}
			// all that was read, and nothing twice by one name and role
			need := map[string]string{"spec " + r.Spec.Path: r.Spec.SHA256}
			for _, in := range r.Inputs {
				for _, f := range in.Files {
					need["input "+in.Name+" "+f.Path] = f.SHA256
				}
			}
			for _, f := range r.Against {
				need["ledger "+f.Path] = f.SHA256
			}
			for _, m := range r.Program.Modules {
				need["module "+m.Path] = ""
			}
			for _, d := range p.BuildDefinition.ResolvedDependencies {
				notes := d.Annotations.AsMap()
				k := fmt.Sprint(notes["role"])
				if in, ok := notes["input"]; ok {
					k += " " + fmt.Sprint(in)
				}
				k += " " + d.Name
				if want, ok := need[k]; !ok || want != d.Digest["sha256"] {
					t.Errorf("dependency %s has %v, expected %q", k, d.Digest, want)
				}
				delete(need, k)
			}
			if len(need) > 0 {
				t.Errorf("dependencies that are not there: %v", need)
			}
			x := p.BuildDefinition.ExternalParameters.AsMap()
			if x["seed"] != float64(r.Seed) || x["dated"] != r.Dated || object(t, x["spec"], "spec")["sha256"] != r.Spec.SHA256 || len(x["inputs"].([]any)) != len(r.Inputs) {
				t.Errorf("external parameters %v", x)
			}
			m := p.RunDetails.Metadata
			if m.InvocationId != r.ID || m.StartedOn.AsTime().Format("2006-01-02T15:04:05Z") != r.Started || m.FinishedOn.AsTime().Format("2006-01-02T15:04:05Z") != r.Finished {
				t.Errorf("metadata %v", m)
			}
		})
	}
}

// TestInTotoModuleDigest: the example of in-toto's digest_set.md.
func TestInTotoModuleDigest(t *testing.T) {
	got, ok := dirHash("h1:Khu2En+0gcYPZ2kuIihfswbzxv/mIHXgzPZ018Oty48=")
	if want := "2a1bb6127fb481c60f67692e22285fb306f3c6ffe62075e0ccf674d7c3adcb8f"; !ok || got != want {
		t.Errorf("%s, expected %s", got, want)
	}
	for _, bad := range []string{"", "h1:", "h1:AAAA", "h2:Khu2En+0gcYPZ2kuIihfswbzxv/mIHXgzPZ018Oty48="} {
		if h, ok := dirHash(bad); ok {
			t.Errorf("%q gave %s", bad, h)
		}
	}
}

// TestInTotoCheckNotices: the check refuses what lacks a required field or has
// one too many.
func TestInTotoCheckNotices(t *testing.T) {
	b, err := InToto(sample())
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range [][]any{
		{"_type"}, {"subject"}, {"subject", 0, "digest"}, {"predicateType"}, {"predicate"},
		{"predicate", "buildDefinition"}, {"predicate", "buildDefinition", "buildType"}, {"predicate", "buildDefinition", "externalParameters"},
		{"predicate", "runDetails"}, {"predicate", "runDetails", "builder"}, {"predicate", "runDetails", "builder", "id"},
	} {
		if _, _, err := readStatement(without(t, b, p...)); err == nil {
			t.Errorf("nothing notices that %v is not there", p)
		}
	}
	var doc map[string]any
	if err := json.Unmarshal(b, &doc); err != nil {
		t.Fatal(err)
	}
	object(t, doc["predicate"], "predicate")["level"] = 3
	more, _ := json.Marshal(doc)
	if _, _, err := readStatement(more); err == nil {
		t.Error("nothing notices an unknown field")
	}
}
