package provenance

import (
	"fmt"
	"net/url"
	"strconv"
	"strings"
)

// MetadataFile is where a crate's metadata stand, in the study's folder.
const MetadataFile = "ro-crate-metadata.json"

// thing is one entity of a crate's graph.
type thing map[string]any

func ref(id string) thing { return thing{"@id": id} }

// crate collects a graph; an entity is there once.
type crate struct {
	graph []thing
	parts []thing // of the root
	at    map[string]thing
}

func (c *crate) add(id string, t thing) thing {
	if old := c.at[id]; old != nil {
		return old
	}
	t["@id"] = id
	c.at[id] = t
	c.graph = append(c.graph, t)
	return t
}

// ROCrate writes the metadata file of a crate whose root is the study's folder:
// spec, inputs, outputs and ledger with their digests, and the run as a
// CreateAction. Inputs from outside the folder are part of the action but not
// of the crate.
//
// Source: RO-Crate Metadata Specification 1.1
// (https://www.researchobject.org/ro-crate/1.1/).
func ROCrate(r *Run) ([]byte, error) {
	if err := r.check(); err != nil {
		return nil, err
	}
	c := &crate{at: map[string]thing{}}
	c.add(MetadataFile, thing{"@type": "CreativeWork", "conformsTo": ref("https://w3id.org/ro/crate/1.1"), "about": ref("./")})
	root := c.add("./", thing{"@type": "Dataset", "name": r.Title, "datePublished": r.Finished,
		"description": describe(r), "identifier": r.ID})
	root["license"] = c.licence(r)
	spec := c.file(r.Spec, "the study's spec")
	objects := []thing{ref(spec)}
	for _, in := range r.Inputs {
		for _, f := range in.Files {
			if id := ref(c.file(f, fmt.Sprintf("input %q", in.Name))); !has(objects, id) {
				objects = append(objects, id)
			}
		}
	}
	for _, f := range r.Against { // what lies there now may be another: these go by their digests
		id := named(f.SHA256)
		c.add(id, thing{"@type": "CreativeWork", "name": f.Path, "description": "the ledger that the run was compared with",
			"sha256": f.SHA256, "encodingFormat": mediaType(f.Path)})
		if !has(objects, ref(id)) {
			objects = append(objects, ref(id))
		}
	}
	results := []thing{}
	for _, o := range r.Outputs {
		results = append(results, ref(c.file(o.File, o.What)))
	}
	program := c.program(r.Program)
	run := thing{"@type": "CreateAction", "name": "run " + r.ID, "description": "Batten carried out the spec " + r.Spec.Path,
		"instrument": ref(program), "object": objects, "result": results, "startTime": r.Started, "endTime": r.Finished,
		"actionStatus": ref("http://schema.org/CompletedActionStatus")}
	if len(r.Refused) > 0 {
		run["actionStatus"] = ref("http://schema.org/FailedActionStatus")
		run["error"] = "refused by a guard: " + strings.Join(r.Refused, "; ")
	}
	if r.Person != "" {
		run["agent"] = ref(c.person(r.Person))
	}
	mentions := []thing{ref("#run-" + escape(r.ID))}
	c.add("#run-"+escape(r.ID), run)
	if a := r.Acceptance; a != nil {
		kept := []thing{}
		for _, f := range a.Ledger {
			what := "the ledger: who accepted what, when and why"
			if f.Curve != "" {
				what = "the accepted fits of curve " + f.Curve
			}
			kept = append(kept, ref(c.file(f.File, what)))
		}
		accept := thing{"@type": "AcceptAction", "name": "acceptance of run " + r.ID, "description": a.Why,
			"agent": ref(c.person(a.Who)), "instrument": ref(program), "object": results, "endTime": a.When}
		if len(kept) > 0 {
			accept["result"] = kept
		}
		c.add("#acceptance-"+escape(r.ID), accept)
		mentions = append(mentions, ref("#acceptance-"+escape(r.ID)))
	}
	root["hasPart"] = c.parts
	root["mentions"] = mentions
	return encode(struct {
		Context []any   `json:"@context"`
		Graph   []thing `json:"@graph"`
	}{
		// sha256 is of schema.org, but younger than the context of 1.1
		[]any{"https://w3id.org/ro/crate/1.1/context", thing{"sha256": "http://schema.org/sha256"}},
		c.graph,
	})
}

func has(all []thing, one thing) bool {
	for _, t := range all {
		if t["@id"] == one["@id"] {
			return true
		}
	}
	return false
}

func describe(r *Run) string {
	files, fits := 0, 0
	for _, in := range r.Inputs {
		files += len(in.Files)
	}
	for _, c := range r.Curves {
		fits += c.Fits
	}
	s := fmt.Sprintf("A curve study as run %s left it: input files %d, curves %d, fits %d, output files %d.", r.ID, files, len(r.Curves), fits, len(r.Outputs))
	if r.Owner != "" {
		s += " Owner: " + r.Owner + "."
	}
	return s
}

// file adds a file and returns its id: its path, or the name of its digest
// where it lies outside the crate.
func (c *crate) file(f File, what string) string {
	t := thing{"@type": "File", "name": f.Path, "description": what, "sha256": f.SHA256, "encodingFormat": mediaType(f.Path)}
	if f.Bytes >= 0 {
		t["contentSize"] = strconv.FormatInt(f.Bytes, 10)
	}
	if outside(f.Path) {
		id := named(f.SHA256)
		t["@type"] = "CreativeWork"
		t["description"] = what + ", from outside the study's folder"
		c.add(id, t)
		return id
	}
	id := escape(f.Path)
	if c.at[id] == nil {
		c.parts = append(c.parts, ref(id))
	}
	c.add(id, t)
	return id
}

func (c *crate) program(p Program) string {
	id := "#program-" + escape(p.Name)
	t := c.add(id, thing{"@type": "SoftwareApplication", "name": p.Name, "softwareVersion": p.Version,
		"description": "methods: " + strings.Join(p.Methods, ", ")})
	needs := []thing{ref("https://go.dev/")}
	c.add("https://go.dev/", thing{"@type": "SoftwareApplication", "name": "Go", "softwareVersion": p.Go, "url": "https://go.dev/"})
	for _, m := range p.Modules {
		u := packageURL(m)
		c.add(u, thing{"@type": "SoftwareApplication", "name": m.Path, "softwareVersion": m.Version})
		needs = append(needs, ref(u))
	}
	t["softwareRequirements"] = needs
	return id
}

func (c *crate) person(who string) string {
	name, mail := person(who)
	t := thing{"@type": "Person", "name": name}
	if mail != "" {
		t["email"] = mail
	}
	id := "#person-" + escape(who)
	c.add(id, t)
	return id
}

// licence links to a licence's page, or to an entity that bears its name. A
// crate must say something of its licence: where the spec states none, it says
// that.
func (c *crate) licence(r *Run) thing {
	id, name, text := "#licence", r.Licence, "the licence of what the study makes"
	if name == "" {
		name, text = "no licence stated", "The spec states no licence, so none is given here; ask the study's owner."
	}
	if u, err := url.Parse(name); err == nil && (u.Scheme == "https" || u.Scheme == "http") && u.Host != "" {
		id = u.String()
	}
	c.add(id, thing{"@type": "CreativeWork", "name": name, "description": text})
	return ref(id)
}
