package runner

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"batten/spec"
	"batten/spec/expr"
)

// schemaVersion is raised when the schema of the same export changes.
const schemaVersion = 1

// tableSchema is a Table Schema of the Data Package standard, version 1
// (https://specs.frictionlessdata.io/table-schema/). unit is a property of our
// own, which the standard allows.
type tableSchema struct {
	Title         string        `json:"title"`
	Description   string        `json:"description"`
	Fields        []schemaField `json:"fields"`
	MissingValues []string      `json:"missingValues"`
	PrimaryKey    []string      `json:"primaryKey,omitempty"`
}

type schemaField struct {
	Name        string `json:"name"`
	Type        string `json:"type"`
	Format      string `json:"format,omitempty"`
	Title       string `json:"title,omitempty"`
	Description string `json:"description,omitempty"`
	Unit        string `json:"unit,omitempty"`
}

// exportSchema describes an export's columns. It follows from the spec alone,
// so that a new row of data does not change it.
func exportSchema(s *spec.Study, e *spec.Export) ([]byte, error) {
	t := &tableSchema{MissingValues: []string{""}}
	of := e.Of
	var names []string // of the group's columns
	if c := s.ContrastByName(e.Of); c != nil {
		of = c.Of
		t.Title = fmt.Sprintf("%s of contrast %s: %s minus %s", e.What, c.Name.Text, c.Minus[0], c.Minus[1])
		names = otherThan(s.CurveByName(of), c.Across)
	}
	c := s.CurveByName(of)
	if c == nil {
		return nil, fmt.Errorf("export %q is of %q, which is no curve", e.Name.Text, e.Of)
	}
	if t.Title == "" {
		t.Title = fmt.Sprintf("%s of curve %s", e.What, c.Name.Text)
		names = byNames(c)
	}
	t.Description = fmt.Sprintf("Study: %s. %s along %s. Text that a spreadsheet would take for a formula begins with an apostrophe that is not part of it.",
		s.Title, c.Response.Name.Text, c.Along.Name.Text)
	for _, b := range c.By {
		if slices.Contains(names, b.Name.Text) {
			t.Fields = append(t.Fields, groupField(b))
		}
	}
	fields, key := schemaFields(c, e.What)
	t.Fields = append(t.Fields, fields...)
	if key != nil || e.What == spec.ExportFits {
		t.PrimaryKey = slices.Concat(names, key)
	}
	if !distinctNames(t.Fields) {
		t.PrimaryKey = nil // a by column bears the name of one of the table's: the key would be ambiguous
	}
	var out bytes.Buffer
	enc := json.NewEncoder(&out)
	enc.SetEscapeHTML(false)
	enc.SetIndent("", "  ")
	if err := enc.Encode(t); err != nil {
		return nil, err
	}
	return out.Bytes(), nil
}

// otherThan names a curve's by columns but one.
func otherThan(c *spec.Curve, name string) []string {
	var out []string
	if c != nil {
		for _, b := range byNames(c) {
			if b != name {
				out = append(out, b)
			}
		}
	}
	return out
}

func distinctNames(fs []schemaField) bool {
	seen := map[string]bool{}
	for _, f := range fs {
		if seen[f.Name] {
			return false
		}
		seen[f.Name] = true
	}
	return true
}

func groupField(b spec.Column) schemaField {
	f := schemaField{Name: b.Name.Text, Type: "string", Title: "group: " + b.Name.Text}
	switch b.Kind {
	case expr.Number:
		f.Type, f.Unit = "number", b.Unit
	case expr.Date:
		f.Type, f.Format = momentType(false)
	}
	return f
}

// momentType is the type of a column of dates. Places between days are written
// with their time of day, days without it; only format "any" covers both.
func momentType(days bool) (typ, format string) {
	if days {
		return "date", ""
	}
	return "datetime", "any"
}

// wholeDays tells whether every place of a curve's grid is a day, whatever the
// data are.
func wholeDays(g *spec.Grid) bool {
	for _, x := range g.At {
		if x != math.Trunc(x) {
			return false
		}
	}
	return len(g.At) > 0 || g.Step > 0 && g.Step == math.Trunc(g.Step)
}

// schemaFields are the columns after the group's, in the order in which
// exporter.columns and exportContrast write them, and those that with the
// group's name a row.
func schemaFields(c *spec.Curve, what string) (fields []schemaField, key []string) {
	x, y := c.Along.Unit, c.Response.Unit
	along, response := c.Along.Name.Text, c.Response.Name.Text
	square := squared(y)
	if c.Weight != nil && c.Weight.Unit != "" || c.Sigma != nil {
		square = "" // sums of w r^2: their unit depends on the weights'
	}
	add := func(name, typ, unit, title string) {
		fields = append(fields, schemaField{Name: name, Type: typ, Unit: unit, Title: title})
	}
	place := func(name, title string, days bool) {
		f := schemaField{Name: name, Type: "number", Unit: x, Title: title}
		if c.Along.Kind == expr.Date {
			f.Type, f.Format = momentType(days)
			f.Unit = ""
		}
		fields = append(fields, f)
	}
	rss := func() { add("rss", "number", square, "weighted residual sum of squares") }
	switch what {
	case spec.ExportGrid:
		place(along, "place on the curve", wholeDays(&c.Grid))
		add("fit", "number", y, response+" by the curve")
		add("se", "number", y, "standard error of the curve")
		add("lower", "number", y, "lower end of the band")
		add("upper", "number", y, "upper end of the band")
		add("slope", "number", compound(y, "/", x), "first derivative of the curve")
		return fields, []string{along}
	case spec.ExportFits:
		add("n", "integer", "", "rows in the fit")
		add("distinct", "integer", "", "distinct places among them")
		add("rule", "string", "", "smoothness rule")
		add("lambda", "number", "", "smoothing parameter, on the original scale of x, y and the weights")
		add("edf", "number", "", "effective degrees of freedom")
		rss()
		add("sigma", "number", sigmaUnit(c), "residual standard deviation of a row of weight 1")
		criteria(add, square)
		add("score", "number", "", "the chosen rule's own score")
		add("flags", "string", "", "flags, joined by ;")
		return fields, nil
	case spec.ExportReadings:
		return readingFields(c), readingKey(c)
	case spec.ExportEvidence:
		add("lambda", "number", "", "smoothing parameter of the candidate")
		add("edf", "number", "", "effective degrees of freedom")
		rss()
		criteria(add, square)
		add("score", "number", "", "the chosen rule's own score")
		add("role", "string", "", "candidate, minimum or chosen")
		return fields, nil
	case spec.ExportResiduals:
		add("row", "integer", "", "line in its file")
		place(along, "place of the row", false)
		add(response, "number", y, "response of the row")
		w := ""
		if c.Weight != nil {
			w = c.Weight.Unit
		}
		add("weight", "number", w, "prior weight: the variance of the row is sigma^2 / weight")
		add("fitted", "number", y, "the curve at the row")
		add("residual", "number", y, "response less fitted")
		add("leverage", "number", "", "diagonal of the smoother matrix")
		add("left_out", "number", y, "the curve at the row, fitted without it")
		add("file", "string", "", "the row's file")
		return fields, []string{"file", "row"}
	case spec.ExportTests:
		add("test", "string", "", "no_difference, parallel or surely_apart")
		add("method", "string", "", "how the test is made")
		add("largest", "number", "", "test statistic, in standard errors")
		add("p", "number", "", "p-value")
		add("p_holm", "number", "", "p-value adjusted over the pairs by Holm's method")
		place("from", "start of the stretch", wholeDays(&c.Grid))
		place("to", "end of the stretch", wholeDays(&c.Grid))
		return fields, []string{"test", "from"}
	}
	place("knot", "distinct place of the data", false)
	add("value", "number", y, "g at the knot")
	if c.Order == 3 {
		add("slope", "number", compound(y, "/", x), "first derivative of g at the knot")
	}
	if c.Order > 1 {
		add("curvature", "number", compound(compound(y, "/", x), "/", x), "second derivative of g at the knot")
	}
	return fields, []string{"knot"}
}

func criteria(add func(name, typ, unit, title string), square string) {
	add("gcv", "number", square, "generalised cross-validation score")
	add("loocv", "number", square, "leave-one-out cross-validation score")
	add("reml", "number", "", "restricted likelihood criterion")
}

// squared is the square of a unit.
func squared(u string) string {
	switch {
	case u == "":
		return ""
	case strings.ContainsAny(u, " /*^"):
		return "(" + u + ")^2"
	}
	return u + "^2"
}

// sigmaUnit is the response's unit, where the weights have none.
func sigmaUnit(c *spec.Curve) string {
	if c.Weight != nil && c.Weight.Unit != "" || c.Sigma != nil {
		return ""
	}
	return c.Response.Unit
}

// kinds are those that a reading's rows bear.
func kinds(r *spec.Reading) []string {
	switch r.Kind {
	case spec.Maximum, spec.Minimum, spec.Steepest:
		return []string{r.Kind, r.Kind + "_at"}
	case spec.Surely:
		return []string{"surely_" + r.Direction}
	}
	return []string{r.Kind}
}

// readingFields are the columns of a table of readings. Its rows differ in
// kind: where some hold dates and others numbers, the type is "any"; where
// their units differ, the unit stands in each row.
func readingFields(c *spec.Curve) []schemaField {
	date := c.Along.Kind == expr.Date
	var dates, numbers, atDates, atNumbers bool
	units := map[string]bool{}
	for i := range c.Readings {
		for _, k := range kinds(&c.Readings[i]) {
			dates, numbers = dates || date && isPlace(k), numbers || !date || !isPlace(k)
			atDates, atNumbers = atDates || date && !isPlace(k), atNumbers || !date || isPlace(k)
			if !(date && isPlace(k)) {
				units[unitOf(c, k)] = true
			}
		}
	}
	typed := func(name, title string, dates, numbers bool) schemaField {
		f := schemaField{Name: name, Type: "number", Title: title}
		switch {
		case dates && numbers:
			f.Type, f.Description = "any", "a number, or an ISO date where the reading is a place"
		case dates:
			f.Type, f.Format = momentType(false)
		}
		return f
	}
	var unit string
	for u := range units {
		unit = u
	}
	value := func(name, title string) schemaField {
		f := typed(name, title, dates, numbers)
		if len(units) == 1 && f.Type == "number" {
			f.Unit = unit
		}
		return f
	}
	return []schemaField{
		{Name: "reading", Type: "string", Title: "name of the reading"},
		{Name: "kind", Type: "string", Title: "what the reading is"},
		typed("at", "where it is taken, or the level that is crossed", atDates, atNumbers),
		value("value", "the reading"),
		value("lower", "lower end of its interval; -Inf where it is open"),
		value("upper", "upper end of its interval; Inf where it is open"),
		{Name: "unit", Type: "string", Title: "unit of value, lower and upper"},
		{Name: "note", Type: "string", Title: "why there is no value, or what to heed"},
	}
}

// readingKey names a reading's row; nil where a reading may have several.
func readingKey(c *spec.Curve) []string {
	for _, r := range c.Readings {
		if r.All || r.Kind == spec.Surely {
			return nil
		}
	}
	return []string{"reading", "kind"}
}

// schemaOut is the file of an export's schema.
func (r *Run) schemaOut(e *spec.Export) (out, error) {
	b, err := exportSchema(r.Study, e)
	if err != nil {
		return out{}, err
	}
	k := newKey("schema", schemaVersion)
	k.add("bytes", digest(b))
	return out{e.SchemaFile(), k.String(), func(w io.Writer) error {
		_, err := w.Write(b)
		return err
	}}, nil
}
