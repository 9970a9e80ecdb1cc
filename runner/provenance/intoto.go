package provenance

import (
	"encoding/base64"
	"encoding/hex"
	"errors"
	"strings"
)

// Identifiers in statements. The builder is whatever machine ran the program:
// nothing here attests to it, and no SLSA level is claimed.
const (
	BuildType = Base + "run/v1"
	BuilderID = Base + "builder/unattested/v1"
)

// ErrNothingMade says that a run has no outputs that a statement could be
// about.
var ErrNothingMade = errors.New("the run wrote no outputs, so there is nothing that a statement could be about")

type descriptor struct {
	Name        string            `json:"name,omitempty"`
	URI         string            `json:"uri,omitempty"`
	Digest      map[string]string `json:"digest,omitempty"`
	MediaType   string            `json:"mediaType,omitempty"`
	Annotations map[string]any    `json:"annotations,omitempty"`
}

type attestation struct {
	Type          string       `json:"_type"`
	Subject       []descriptor `json:"subject"`
	PredicateType string       `json:"predicateType"`
	Predicate     struct {
		BuildDefinition buildDefinition `json:"buildDefinition"`
		RunDetails      runDetails      `json:"runDetails"`
	} `json:"predicate"`
}

type buildDefinition struct {
	BuildType            string       `json:"buildType"`
	ExternalParameters   parameters   `json:"externalParameters"`
	InternalParameters   internal     `json:"internalParameters"`
	ResolvedDependencies []descriptor `json:"resolvedDependencies"`
}

// parameters are all that whoever starts a run decides: the spec, which holds
// every setting, and the date for reports. What the spec says of seed and
// inputs is repeated, so that a policy need not read the spec. The number of
// workers is left out, for no result depends on it.
type parameters struct {
	Spec struct {
		Path   string `json:"path"`
		SHA256 string `json:"sha256"`
	} `json:"spec"`
	Seed   int64          `json:"seed"`
	Dated  string         `json:"dated"`
	Inputs []inputPattern `json:"inputs"`
}

type inputPattern struct {
	Name    string `json:"name"`
	File    string `json:"file"`
	Outside bool   `json:"outside"`
}

type internal struct {
	Methods []string `json:"methods"`
	Results string   `json:"results"`
}

type runDetails struct {
	Builder struct {
		ID      string            `json:"id"`
		Version map[string]string `json:"version"`
	} `json:"builder"`
	Metadata struct {
		InvocationID string `json:"invocationId"`
		StartedOn    string `json:"startedOn"`
		FinishedOn   string `json:"finishedOn"`
	} `json:"metadata"`
	Byproducts []descriptor `json:"byproducts,omitempty"`
}

// InToto writes an in-toto Statement v1 about the run's outputs, with a SLSA
// provenance v1 predicate. It is unsigned.
//
// Source: https://github.com/in-toto/attestation/tree/main/spec/v1 and
// https://slsa.dev/spec/v1.0/provenance.
func InToto(r *Run) ([]byte, error) {
	if err := r.check(); err != nil {
		return nil, err
	}
	if len(r.Outputs) == 0 {
		return nil, ErrNothingMade
	}
	s := attestation{Type: "https://in-toto.io/Statement/v1", PredicateType: "https://slsa.dev/provenance/v1"}
	for _, o := range r.Outputs {
		s.Subject = append(s.Subject, descriptor{Name: o.Path, Digest: map[string]string{"sha256": o.SHA256}, MediaType: mediaType(o.Path),
			Annotations: map[string]any{"what": o.What}})
	}
	b := &s.Predicate.BuildDefinition
	b.BuildType = BuildType
	x := &b.ExternalParameters
	x.Spec.Path, x.Spec.SHA256 = r.Spec.Path, r.Spec.SHA256
	x.Seed, x.Dated, x.Inputs = r.Seed, r.Dated, []inputPattern{}
	b.InternalParameters = internal{Methods: append([]string{}, r.Program.Methods...), Results: r.Results}
	need := func(f File, notes map[string]any) {
		b.ResolvedDependencies = append(b.ResolvedDependencies,
			descriptor{Name: f.Path, URI: named(f.SHA256), Digest: map[string]string{"sha256": f.SHA256}, MediaType: mediaType(f.Path), Annotations: notes})
	}
	need(r.Spec, map[string]any{"role": "spec"})
	for _, in := range r.Inputs {
		x.Inputs = append(x.Inputs, inputPattern{in.Name, in.Pattern, in.Outside})
		for _, f := range in.Files {
			need(f, map[string]any{"role": "input", "input": in.Name})
		}
	}
	for _, f := range r.Against {
		need(f, map[string]any{"role": "ledger"})
	}
	for _, m := range r.Program.Modules {
		d := descriptor{Name: m.Path, URI: packageURL(m), Annotations: map[string]any{"role": "module"}}
		if h, ok := dirHash(m.Sum); ok {
			d.Digest = map[string]string{"dirHash": h}
		}
		b.ResolvedDependencies = append(b.ResolvedDependencies, d)
	}
	d := &s.Predicate.RunDetails
	d.Builder.ID = BuilderID
	d.Builder.Version = map[string]string{r.Program.Name: r.Program.Version, "go": r.Program.Go}
	d.Metadata.InvocationID, d.Metadata.StartedOn, d.Metadata.FinishedOn = r.ID, r.Started, r.Finished
	for _, c := range r.Curves {
		d.Byproducts = append(d.Byproducts, descriptor{Name: "fits of curve " + c.Name, Digest: map[string]string{"sha256": c.Object},
			Annotations: map[string]any{"fits": c.Fits}})
	}
	return encode(&s)
}

// dirHash is a module's h1 sum as in-toto writes it: in hexadecimal, without
// the prefix (spec/v1/digest_set.md).
func dirHash(sum string) (string, bool) {
	s, ok := strings.CutPrefix(sum, "h1:")
	b, err := base64.StdEncoding.DecodeString(s)
	if !ok || err != nil || len(b) != 32 {
		return "", false
	}
	return hex.EncodeToString(b), true
}
