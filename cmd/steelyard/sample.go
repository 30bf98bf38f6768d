package main

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/monitor/intake"
	"steelyard/rules"
)

// sample is what would become of a file: the answer of check.
type sample struct {
	Type    string         `json:"type"` // "reading"
	File    string         `json:"file"`
	Source  string         `json:"source"`
	Totals  totals         `json:"totals"`
	Batch   *rules.Batch   `json:"batch,omitempty"`
	Held    *rules.Held    `json:"held,omitempty"`
	Remarks []string       `json:"remarks,omitempty"`
	Ignored []string       `json:"ignored,omitempty"` // columns that nothing is mapped to
	Rows    []rowOfASample `json:"rows,omitempty"`    // where they were asked for

	plan *rules.Plan
	zone *time.Location
}

// totals are how many rows became what.
type totals struct {
	Counted int `json:"counted"`
	Parts   int `json:"reference_parts"` // among those counted
	Beyond  int `json:"beyond"`          // rows with a reading beyond a gauge's limit, among those counted
	Held    int `json:"held"`
	LeftOut int `json:"left_out"`
	NoValue int `json:"no_value"`
}

// rowOfASample is what one row would become: counted, held, left out, or none of it as it has no value.
type rowOfASample struct {
	Line    int          `json:"line"`
	Becomes string       `json:"becomes"` // "counted", "held", "left out", "no value"
	Time    time.Time    `json:"time,omitzero"`
	Serial  string       `json:"serial,omitempty"`
	Values  []sampleCell `json:"values,omitempty"`
	Why     string       `json:"why,omitempty"`
	Text    string       `json:"text,omitempty"` // of a held row
}

// sampleCell is one measurement of a row.
type sampleCell struct {
	Process string  `json:"process"`
	Value   float64 `json:"value"`
	Of      float64 `json:"of,omitempty"`     // where it is not 1
	Beyond  string  `json:"beyond,omitempty"` // "above" or "below": the value is only a bound
	Part    bool    `json:"reference_part,omitempty"`
}

// readSample makes the account of a reading. What a batch would be refused for by an engine that knows
// nothing but this file (a gauge that is stuck within it) holds it whole.
func readSample(cfg *config.Config, src *config.Source, name string, g *intake.Reading) *sample {
	r := &sample{
		Type: "reading", File: name, Source: src.Name, Batch: g.Batch, Held: g.Held, Remarks: g.Remarks, Ignored: g.Ignored,
		plan: &cfg.Plan, zone: src.Form.Zone,
	}
	for row := range g.Rows(&cfg.Plan) {
		r.add(row)
	}
	if g.Batch == nil {
		return r
	}
	engine := rules.NewState()
	_, err := engine.Apply(&rules.Event{Adopted: &rules.Adopted{Plan: cfg.Plan}})
	if err == nil {
		var out rules.Outcomes
		out, err = engine.Apply(&rules.Event{Index: 1, At: time.Now(), Batch: g.Batch})
		r.Remarks = append(slices.Clone(r.Remarks), out.Remarks...)
	}
	if err != nil {
		r.Batch, r.Held = nil, &rules.Held{Source: src.Name, File: g.Batch.File, SHA256: g.Batch.SHA256, Size: g.Batch.To, Reason: err.Error()}
	}
	return r
}

func (r *sample) add(row intake.Row) {
	one := rowOfASample{Line: row.Line, Time: row.Time, Serial: row.Serial, Becomes: "counted"}
	t := &r.Totals
	switch {
	case row.Held != "":
		one.Becomes, one.Why, one.Text = "held", row.Held, row.Text
		t.Held++
	case row.Aside != "":
		one.Becomes, one.Why = "left out", row.Aside
		t.LeftOut++
	case len(row.Values) == 0:
		one.Becomes = "no value"
		t.NoValue++
	default:
		t.Counted++
	}
	for i, v := range row.Values {
		cell := sampleCell{Process: v.Process, Value: v.Value, Part: v.Part, Beyond: map[int]string{1: "above", -1: "below"}[v.Side]}
		if v.Of != 1 {
			cell.Of = v.Of
		}
		one.Values = append(one.Values, cell)
		if i == 0 && v.Part {
			t.Parts++
		}
	}
	if slices.ContainsFunc(one.Values, func(c sampleCell) bool { return c.Beyond != "" }) {
		t.Beyond++
	}
	r.Rows = append(r.Rows, one)
}

func (r *sample) anyHeld() bool { return r.Held != nil || r.Totals.Held > 0 }

// print shows the account for people: the held rows always, the others where they are asked for.
func (r *sample) print(d *desk, all bool) {
	t := r.Totals
	d.line("\n%s, as source %s reads it: %d rows counted, %d held, %d left out, %d without a value",
		r.File, r.Source, t.Counted, t.Held, t.LeftOut, t.NoValue)
	if r.Held != nil {
		d.line("  HELD WHOLE, so none of it counts: %s", r.Held.Reason)
	} else {
		r.series(d)
	}
	if len(r.Ignored) > 0 {
		d.line("  columns that nothing is mapped to: %s", strings.Join(r.Ignored, ", "))
	}
	for _, remark := range r.Remarks {
		d.line("  remark: %s", remark)
	}
	for _, row := range r.Rows {
		if all || row.Becomes == "held" {
			d.line("  line %d %s", row.Line, r.row(&row))
		}
	}
}

// series shows what would go to each process.
func (r *sample) series(d *desk) {
	for _, s := range r.Batch.Series {
		unit := ""
		if o, ok := r.plan.OffsetNamed(s.Process); ok {
			d.line("  offset of rig %s: %s of reference parts, read minus certified from %s to %s %s",
				s.Process, many(len(s.Value), "reading"), short(slices.Min(s.Value)), short(slices.Max(s.Value)), o.Unit)
			continue
		}
		for _, c := range r.plan.Characteristics {
			if strings.HasPrefix(s.Process, c.Name+".") {
				unit = c.Unit
			}
		}
		text := fmt.Sprintf("  %s: %s", s.Process, many(len(s.Value), "value"))
		if len(s.Value) > 0 {
			text += fmt.Sprintf(" from %v to %v %s", slices.Min(s.Value), slices.Max(s.Value), unit)
		}
		if len(s.Beyond) > 0 {
			text += fmt.Sprintf(", and %s beyond the gauge's limits", many(len(s.Beyond), "reading"))
		}
		d.line("%s", text)
	}
	for _, a := range r.Batch.Aside {
		d.line("  left out: %s with the %s %q, lines %d to %d", many(a.Rows, "row"), a.Kind, a.Text, a.First, a.Last)
	}
}

// row shows what one row would become.
func (r *sample) row(row *rowOfASample) string {
	switch row.Becomes {
	case "held":
		return fmt.Sprintf("HELD: %s\n    it reads: %s", row.Why, row.Text)
	case "left out":
		return "left out: " + row.Why
	case "no value":
		return "has no value in a column that is measured"
	}
	text := "counts:"
	if !row.Time.IsZero() {
		text += " " + row.Time.In(r.zone).Format(time.RFC3339)
	}
	if row.Serial != "" {
		text += " " + row.Serial
	}
	for _, v := range row.Values {
		switch {
		case v.Part:
			text += fmt.Sprintf(" reference part, offset of rig %s %s", v.Process, short(v.Value))
		case v.Beyond != "":
			text += fmt.Sprintf(" %s %s %v, beyond the gauge", v.Process, v.Beyond, v.Value)
		case v.Of != 0:
			text += fmt.Sprintf(" %s = %v of %v", v.Process, v.Value, v.Of)
		default:
			text += fmt.Sprintf(" %s = %v", v.Process, v.Value)
		}
	}
	return text
}

// many is a number of things.
func many(n int, thing string) string {
	if n == 1 {
		return "1 " + thing
	}
	return fmt.Sprintf("%d %ss", n, thing)
}

// short leaves out the last digits of a difference, which say how float64 rounds and nothing else.
func short(x float64) string { return strconv.FormatFloat(x, 'g', 10, 64) }
