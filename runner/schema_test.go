package runner

import (
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/santhosh-tekuri/jsonschema/v6"

	"batten/spec"
)

// tableSchemaProfile is the standard's own JSON schema; see
// testdata/standards/README.md.
func tableSchemaProfile(t *testing.T) *jsonschema.Schema {
	t.Helper()
	s, err := jsonschema.NewCompiler().Compile("../testdata/standards/table-schema.json")
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// holdsTo checks a CSV against its Table Schema: the header, the type of every
// cell, and that the primary key names a row. The rules for types are those of
// the Table Schema specification, version 1, section "Types and Formats" (from
// memory): a number may be INF, case need not be respected; a date is
// YYYY-MM-DD; a datetime of format "any" is any form of date and time.
func holdsTo(t *testing.T, profile *jsonschema.Schema, schema, table []byte) *tableSchema {
	t.Helper()
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(schema))
	if err != nil {
		t.Fatal(err)
	}
	if err := profile.Validate(doc); err != nil {
		t.Errorf("the standard's JSON schema refuses it: %v\n%s", err, schema)
	}
	var s tableSchema
	if err := json.Unmarshal(schema, &s); err != nil {
		t.Fatal(err)
	}
	rows, err := csv.NewReader(bytes.NewReader(table)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(rows) < 2 {
		t.Fatal("the table has no rows: nothing would be checked")
	}
	if len(rows[0]) != len(s.Fields) {
		t.Fatalf("%d columns, %d fields: %v", len(rows[0]), len(s.Fields), rows[0])
	}
	at := map[string]int{}
	for i, f := range s.Fields {
		if f.Name != rows[0][i] {
			t.Errorf("column %d is %q, the schema says %q", i, rows[0][i], f.Name)
		}
		at[f.Name] = i
	}
	keys := map[string]int{}
	for n, row := range rows[1:] {
		for i, cell := range row {
			if cell != "" && !isOf(s.Fields[i], cell) {
				t.Fatalf("row %d, %s: %q is no %s", n+1, s.Fields[i].Name, cell, s.Fields[i].Type)
			}
		}
		if len(s.PrimaryKey) == 0 {
			continue
		}
		var key []string
		for _, k := range s.PrimaryKey {
			i, ok := at[k]
			if !ok {
				t.Fatalf("the key names %q, which is no field", k)
			}
			key = append(key, row[i])
		}
		k := strings.Join(key, "\x00")
		if first, dup := keys[k]; dup {
			t.Fatalf("rows %d and %d have the key %q", first, n+1, key)
		}
		keys[k] = n + 1
	}
	return &s
}

func isOf(f schemaField, cell string) bool {
	var err error
	switch f.Type {
	case "number":
		_, err = strconv.ParseFloat(cell, 64)
	case "integer":
		_, err = strconv.ParseInt(cell, 10, 64)
	case "date":
		_, err = time.Parse("2006-01-02", cell)
	case "datetime":
		if _, err = time.Parse("2006-01-02", cell); err != nil && f.Format == "any" {
			_, err = time.Parse("2006-01-02T15:04:05", cell)
		}
	case "string", "any":
	default:
		return false
	}
	return err == nil
}

// withSchemas runs a study with schema = true in every export, and checks all.
func withSchemas(t *testing.T, dir, text string) map[string]*tableSchema {
	t.Helper()
	text = strings.ReplaceAll(text, "  what = ", "  schema = true\n  what = ")
	file := filepath.Join(dir, "study.hcl")
	if err := os.WriteFile(file, []byte(text), 0o666); err != nil {
		t.Fatal(err)
	}
	s, err := spec.Load(file)
	if err != nil {
		t.Fatal(err)
	}
	s.Reports = nil
	r, err := Execute(context.Background(), s, Options{})
	if err != nil {
		t.Fatal(err)
	}
	listed := map[string]bool{}
	for _, o := range r.Record.Outputs {
		listed[o.Path] = true
	}
	profile := tableSchemaProfile(t)
	out := map[string]*tableSchema{}
	for _, e := range s.Exports {
		if e.SchemaFile() == "" || !listed[e.SchemaFile()] {
			t.Errorf("export %s: its schema %q is not in the record", e.Name.Text, e.SchemaFile())
			continue
		}
		t.Run(e.Name.Text, func(t *testing.T) {
			schema, err := os.ReadFile(filepath.Join(dir, e.SchemaFile()))
			if err != nil {
				t.Fatal(err)
			}
			table, err := os.ReadFile(filepath.Join(dir, e.File))
			if err != nil {
				t.Fatal(err)
			}
			out[e.Name.Text] = holdsTo(t, profile, schema, table)
		})
	}
	again, err := Execute(context.Background(), s, Options{})
	if err != nil {
		t.Fatal(err)
	}
	for _, o := range again.Record.Outputs {
		if o.Wrote {
			t.Errorf("%s was written again though nothing changed", o.Path)
		}
	}
	return out
}

// TestSchemasOfPears holds the tables of every kind to their schemas.
func TestSchemasOfPears(t *testing.T) {
	dir := t.TempDir()
	from := "../examples/pears"
	text, err := os.ReadFile(filepath.Join(from, "study.hcl"))
	if err != nil {
		t.Fatal(err)
	}
	if err := os.Mkdir(filepath.Join(dir, "data"), 0o777); err != nil {
		t.Fatal(err)
	}
	for _, f := range []string{"data/readings-2025.csv", "data/readings-2026.csv"} {
		b, err := os.ReadFile(filepath.Join(from, f))
		if err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(dir, f), b, 0o666); err != nil {
			t.Fatal(err)
		}
	}
	got := withSchemas(t, dir, string(text))
	if len(got) != 10 {
		t.Fatalf("%d exports were checked, expected 10", len(got))
	}
	units := map[string]string{}
	for _, f := range got["grid"].Fields {
		units[f.Name] = f.Unit
	}
	for name, want := range map[string]string{"day": "d", "fit": "N", "slope": "N/d", "cultivar": ""} {
		if units[name] != want {
			t.Errorf("the unit of %s is %q, expected %q", name, units[name], want)
		}
	}
	for _, f := range got["evidence"].Fields {
		if f.Name == "gcv" && f.Unit != "N^2" {
			t.Errorf("the unit of gcv is %q, expected N^2", f.Unit)
		}
	}
}

const datedStudy = `study { title = "A pond by date (invented)" }
input "d" {
  file    = "d.csv"
  columns = { when = date, group = date, code = number("kg"), y = number("K per m") }
}
curve "c" {
  from     = d
  response = y
  along    = when
  by       = [group, code]
  smoothness {
    rule = fixed_df
    df   = 5
  }
  grid { GRID }
READINGS
}
export "grid" {
  of   = c
  what = grid
  file = "out/grid.csv"
}
export "readings" {
  of   = c
  what = readings
  file = "out/readings.csv"
}
export "residuals" {
  of   = c
  what = residuals
  file = "out/residuals.csv"
}
export "coefficients" {
  of   = c
  what = coefficients
  file = "out/coefficients.csv"
}
`

// TestSchemasOfDates: places on an axis of dates fall between days.
func TestSchemasOfDates(t *testing.T) {
	data := []string{"when,group,code,y"}
	for g := range 3 {
		for i := range 30 {
			day := time.Date(2026, 3, 1+i, 0, 0, 0, 0, time.UTC).Format("2006-01-02")
			if i%7 == 3 {
				day += "T06:30:00"
			}
			data = append(data, fmt.Sprintf("%s,2026-0%d-01,%d,%.4f", day, 1+g, g%2, math.Sin(float64(i)/5+float64(g))))
		}
	}
	cases := map[string]struct{ grid, readings, gridType, valueType, atType, key string }{
		"between days": {"points = 17", `  reading "up" {
    crosses   = 0.1
    direction = rising
  }
  reading "start" { value_at = "2026-03-02" }`, "datetime", "any", "any", "reading"},
		"whole days": {"step = 3", `  reading "start" { value_at = "2026-03-02" }
  reading "later" { value_at = "2026-03-12" }`, "date", "number", "datetime", "reading"},
		"many": {"step = 0.5", `  reading "down" {
    crosses = 0.1
    all     = true
  }`, "datetime", "datetime", "number", ""},
	}
	for name, c := range cases {
		t.Run(name, func(t *testing.T) {
			dir := t.TempDir()
			if err := os.WriteFile(filepath.Join(dir, "d.csv"), []byte(strings.Join(data, "\n")+"\n"), 0o666); err != nil {
				t.Fatal(err)
			}
			got := withSchemas(t, dir, strings.NewReplacer("GRID", c.grid, "READINGS", c.readings).Replace(datedStudy))
			field := func(export, name string) schemaField {
				if got[export] != nil {
					for _, f := range got[export].Fields {
						if f.Name == name {
							return f
						}
					}
				}
				t.Errorf("%s has no field %q", export, name)
				return schemaField{}
			}
			if f := field("grid", "when"); f.Type != c.gridType || f.Unit != "" {
				t.Errorf("when in the grid is %q, unit %q; expected %q without", f.Type, f.Unit, c.gridType)
			}
			if f := field("readings", "value"); f.Type != c.valueType {
				t.Errorf("value is %q, expected %q", f.Type, c.valueType)
			} else if f.Type == "number" && f.Unit != "K per m" {
				t.Errorf("the unit of value is %q", f.Unit)
			}
			if f := field("readings", "at"); f.Type != c.atType {
				t.Errorf("at is %q, expected %q", f.Type, c.atType)
			}
			if f := field("grid", "code"); f.Type != "number" || f.Unit != "kg" {
				t.Errorf("the group's number is %q, unit %q", f.Type, f.Unit)
			}
			if f := field("grid", "slope"); f.Unit != "K per m/d" {
				t.Errorf("the unit of slope is %q", f.Unit)
			}
			if k := got["readings"].PrimaryKey; (len(k) == 4 && k[2] == c.key) != (c.key != "") {
				t.Errorf("the key of readings is %q", k)
			}
		})
	}
}

// TestSchemaAmbiguousKey: where a by column is called as one of the table's
// own, no key can be named.
func TestSchemaAmbiguousKey(t *testing.T) {
	s := &spec.Study{Title: "t", Curves: []*spec.Curve{{Name: spec.Name{Text: "c"}, By: []spec.Column{{Name: spec.Name{Text: "n"}}}}}}
	for what, want := range map[string]bool{spec.ExportFits: false, spec.ExportGrid: true} {
		b, err := exportSchema(s, &spec.Export{Of: "c", What: what, File: "a.csv", Schema: true})
		if err != nil {
			t.Fatal(err)
		}
		if got := bytes.Contains(b, []byte("primaryKey")); got != want {
			t.Errorf("%s: a key is named: %v, expected %v", what, got, want)
		}
	}
}
