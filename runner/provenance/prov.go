package provenance

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
)

// statement is one entity, activity, agent or relation: attributes by their
// qualified names.
type statement map[string]any

// provDocument is a PROV-JSON document. Maps are written with sorted keys.
type provDocument struct {
	Prefix     map[string]string    `json:"prefix"`
	Entity     map[string]statement `json:"entity"`
	Activity   map[string]statement `json:"activity"`
	Agent      map[string]statement `json:"agent"`
	Used       map[string]statement `json:"used,omitempty"`
	Generated  map[string]statement `json:"wasGeneratedBy,omitempty"`
	Derived    map[string]statement `json:"wasDerivedFrom,omitempty"`
	Associated map[string]statement `json:"wasAssociatedWith,omitempty"`
	Attributed map[string]statement `json:"wasAttributedTo,omitempty"`
	Delegated  map[string]statement `json:"actedOnBehalfOf,omitempty"`
	Informed   map[string]statement `json:"wasInformedBy,omitempty"`
}

// PROV writes the run as PROV-JSON.
//
// The run is an activity; the spec is its plan; inputs, fits, outputs and
// ledger files are entities. Outputs derive from the fits they show and fits
// from the inputs their rows came from, so that the document grows with files
// and not with their product. A file that was read has one identifier, of its
// digest and path, in every run's document; what a run made has the run's.
//
// Source: PROV-DM (https://www.w3.org/TR/prov-dm/) and the PROV-JSON
// Serialization, W3C Member Submission of 24 April 2013
// (https://www.w3.org/submissions/prov-json/).
func PROV(r *Run) ([]byte, error) {
	if err := r.check(); err != nil {
		return nil, err
	}
	p := &prov{run: r, doc: provDocument{
		Prefix: map[string]string{
			"batten": Base + "ns#", "run": Base + "id/run/", "file": Base + "id/file/", "agent": Base + "id/agent/",
		},
		Entity: map[string]statement{}, Activity: map[string]statement{}, Agent: map[string]statement{},
	}}
	p.write()
	return encode(&p.doc)
}

type prov struct {
	run *Run
	doc provDocument
}

func (p *prov) write() {
	r := p.run
	act := local("run", r.ID)
	program := p.program()
	activity := statement{
		"prov:label": "run " + r.ID + " of the study " + r.Title, "prov:type": qualified("batten:Run"),
		"prov:startTime": r.Started, "batten:seed": long(r.Seed), "batten:results": r.Results,
	}
	if !r.backwards() { // an activity must not end before it starts
		activity["prov:endTime"] = r.Finished
	}
	if r.Dated != "" {
		activity["batten:dated"] = r.Dated
	}
	if len(r.Refused) > 0 {
		activity["batten:refused"] = slices.Clone(r.Refused)
	}
	p.doc.Activity[act] = activity

	plan := p.file(r.Spec, "prov:Plan", "batten:Spec")
	if r.Owner != "" {
		p.doc.Entity[plan]["batten:owner"] = r.Owner
	}
	relate(&p.doc.Used, "used", statement{"prov:activity": act, "prov:entity": plan, "prov:role": qualified("batten:spec")})
	relate(&p.doc.Associated, "assoc", statement{"prov:activity": act, "prov:agent": program, "prov:plan": plan})
	if r.Person != "" {
		who := p.person(r.Person)
		relate(&p.doc.Associated, "assoc", statement{"prov:activity": act, "prov:agent": who, "prov:role": qualified("batten:ran")})
		relate(&p.doc.Delegated, "behalf", statement{"prov:delegate": program, "prov:responsible": who, "prov:activity": act})
	}
	inputs := map[string][]string{}
	used := map[string]bool{}
	for _, in := range r.Inputs {
		for _, f := range in.Files {
			id := p.file(f, "batten:Input")
			names, _ := p.doc.Entity[id]["batten:input"].([]string)
			p.doc.Entity[id]["batten:input"] = append(names, in.Name)
			inputs[in.Name] = append(inputs[in.Name], id)
			if !used[id] {
				used[id] = true
				relate(&p.doc.Used, "used", statement{"prov:activity": act, "prov:entity": id, "prov:role": qualified("batten:input")})
			}
		}
	}
	var against []string
	for _, f := range r.Against {
		id := p.file(f, "batten:Ledger")
		against = append(against, id)
		relate(&p.doc.Used, "used", statement{"prov:activity": act, "prov:entity": id, "prov:role": qualified("batten:ledger")})
	}
	made := func(id string) {
		g := statement{"prov:entity": id, "prov:activity": act}
		if !r.backwards() {
			g["prov:time"] = r.Finished
		}
		relate(&p.doc.Generated, "gen", g)
		relate(&p.doc.Attributed, "attr", statement{"prov:entity": id, "prov:agent": program})
	}
	derived := func(id, from, by string) {
		relate(&p.doc.Derived, "der", statement{"prov:generatedEntity": id, "prov:usedEntity": from, "prov:activity": by})
	}
	fits := map[string]string{}
	for _, c := range r.Curves {
		id := local("run", r.ID+"/fits/"+c.Name)
		fits[c.Name] = id
		p.doc.Entity[id] = statement{"prov:label": "fits of curve " + c.Name, "prov:type": qualified("batten:Fits"),
			"batten:sha256": c.Object, "batten:fits": long(int64(c.Fits))}
		made(id)
		// outputs derive from the fits by way of the run, which therefore used them
		relate(&p.doc.Used, "used", statement{"prov:activity": act, "prov:entity": id, "prov:role": qualified("batten:fits")})
		from := map[string]bool{}
		for _, name := range c.Inputs {
			for _, in := range inputs[name] {
				if !from[in] {
					from[in] = true
					derived(id, in, act)
				}
			}
		}
	}
	for _, o := range r.Outputs {
		id := local("run", r.ID+"/output/"+o.Path)
		e := fileAttributes(o.File)
		e["prov:type"] = qualified("batten:Output")
		e["prov:label"] = o.Path + ": " + o.What
		e["batten:wrote"] = o.Wrote
		p.doc.Entity[id] = e
		made(id)
		for _, c := range o.Curves {
			if from, ok := fits[c]; ok {
				derived(id, from, act)
			}
		}
		if o.Moved {
			for _, from := range against {
				derived(id, from, act)
			}
		}
	}
	p.acceptance(act, program, fits)
}

func (p *prov) acceptance(run, program string, fits map[string]string) {
	a := p.run.Acceptance
	if a == nil {
		return
	}
	act := local("run", p.run.ID+"/acceptance")
	who := p.person(a.Who)
	p.doc.Activity[act] = statement{"prov:label": "acceptance of run " + p.run.ID, "prov:type": qualified("batten:Acceptance"),
		"prov:endTime": a.When, "batten:reason": a.Why}
	relate(&p.doc.Informed, "inf", statement{"prov:informed": act, "prov:informant": run})
	relate(&p.doc.Associated, "assoc", statement{"prov:activity": act, "prov:agent": who, "prov:role": qualified("batten:accepted")})
	relate(&p.doc.Associated, "assoc", statement{"prov:activity": act, "prov:agent": program})
	for _, c := range p.run.Curves {
		relate(&p.doc.Used, "used", statement{"prov:activity": act, "prov:entity": fits[c.Name], "prov:role": qualified("batten:fits")})
	}
	for _, f := range a.Ledger {
		id := local("run", p.run.ID+"/"+f.Path)
		e := fileAttributes(f.File)
		e["prov:type"], e["prov:label"] = qualified("batten:Ledger"), f.Path
		p.doc.Entity[id] = e
		relate(&p.doc.Generated, "gen", statement{"prov:entity": id, "prov:activity": act, "prov:time": a.When})
		relate(&p.doc.Attributed, "attr", statement{"prov:entity": id, "prov:agent": who})
		if from, ok := fits[f.Curve]; ok {
			relate(&p.doc.Derived, "der", statement{"prov:generatedEntity": id, "prov:usedEntity": from, "prov:activity": act})
		}
	}
}

// file notes a file that was read or is kept; one that serves as two things
// is one entity of two types.
func (p *prov) file(f File, types ...string) string {
	id := local("file", f.SHA256+"/"+f.Path)
	e := p.doc.Entity[id]
	if e == nil {
		e = fileAttributes(f)
		e["prov:label"] = f.Path
		p.doc.Entity[id] = e
	}
	all, _ := e["prov:type"].([]any)
	for _, t := range types {
		if q := qualified(t); !slices.Contains(all, any(q)) {
			all = append(all, q)
		}
	}
	e["prov:type"] = all
	return id
}

func fileAttributes(f File) statement {
	s := statement{"prov:location": f.Path, "batten:sha256": f.SHA256, "batten:mediaType": mediaType(f.Path)}
	if f.Bytes >= 0 {
		s["batten:bytes"] = long(f.Bytes)
	}
	return s
}

func (p *prov) program() string {
	g := p.run.Program
	id := local("agent", "program/"+strings.TrimSpace(g.Name+" "+g.Version))
	s := statement{"prov:type": qualified("prov:SoftwareAgent"), "prov:label": strings.TrimSpace(g.Name + " " + g.Version),
		"batten:version": g.Version, "batten:go": g.Go}
	if len(g.Methods) > 0 {
		s["batten:method"] = slices.Clone(g.Methods)
	}
	var mods []string
	for _, m := range g.Modules {
		mods = append(mods, packageURL(m))
	}
	if len(mods) > 0 {
		s["batten:module"] = mods
	}
	p.doc.Agent[id] = s
	return id
}

func (p *prov) person(who string) string {
	name, mail := person(who)
	id := local("agent", "person/"+who)
	s := statement{"prov:type": qualified("prov:Person"), "prov:label": name}
	if mail != "" {
		s["batten:mail"] = mail
	}
	p.doc.Agent[id] = s
	return id
}

// relate adds a relation under the next blank identifier.
func relate(to *map[string]statement, name string, s statement) {
	if *to == nil {
		*to = map[string]statement{}
	}
	(*to)[fmt.Sprintf("_:%s%06d", name, len(*to)+1)] = s
}

// typed is a value with its type.
type typed struct {
	Value string `json:"$"`
	Type  string `json:"type"`
}

func qualified(name string) typed { return typed{name, "prov:QUALIFIED_NAME"} }
func long(v int64) typed          { return typed{strconv.FormatInt(v, 10), "xsd:long"} }

// local is a qualified name whose local part holds any text: PROV-N 3.7.1
// allows letters, digits, _ - . / and percent-encoded bytes, but no full stop
// at its end and none at its start.
func local(prefix, s string) string {
	e := strings.ReplaceAll(escape(s), "~", "%7E")
	if e, ok := strings.CutSuffix(e, "."); ok {
		return prefix + ":" + e + "%2E"
	}
	if rest, ok := strings.CutPrefix(e, "."); ok {
		return prefix + ":%2E" + rest
	}
	return prefix + ":" + e
}
