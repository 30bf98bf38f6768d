package monitor

import (
	"bufio"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"time"
	"unicode/utf8"

	"steelyard/monitor/feed"
	"steelyard/rules"
)

// Export is what is to be written out of the journal.
type Export struct {
	What     string    // "measurements", "looks" or "crossings"
	Form     string    // "csv" (RFC 4180, with a header) or "jsonl"
	From, To time.Time // taken in from From on and before To; zero for no bound
}

// exported are the columns of each kind.
var exported = map[string][]string{
	"measurements": {"record", "taken_in", "source", "file", "line", "measured", "serial", "process", "value", "of", "withdrawn"},
	"looks":        {"record", "at", "file", "rule", "probability", "contrary", "log10_odds", "withheld"},
	"crossings": {"record", "at", "alarm", "step", "rule", "version", "cause", "from", "to", "probability", "contrary", "median", "lower", "upper",
		"source", "file", "by", "note"},
}

// Check says in a sentence what is wrong with the question.
func (q Export) Check() error {
	if _, ok := exported[q.What]; !ok {
		return fmt.Errorf("read %q; expected measurements, looks or crossings", q.What)
	}
	if q.Form != "csv" && q.Form != "jsonl" {
		return fmt.Errorf("read the form %q; expected csv or jsonl", q.Form)
	}
	return nil
}

// Export writes measurements, looks or crossings of a stretch of time, for spreadsheets, R and Python. Numbers have 17
// digits; times are RFC 3339 in UTC. In CSV a text that a spreadsheet would take for a formula begins with an apostrophe.
func (d *Desk) Export(q Export, w io.Writer) error {
	if err := q.Check(); err != nil {
		return err
	}
	buffered := bufio.NewWriter(w)
	x := &exporter{q: q, columns: exported[q.What], desk: d, json: json.NewEncoder(buffered), csv: csv.NewWriter(buffered)}
	x.json.SetEscapeHTML(false)
	if q.Form == "csv" {
		if err := x.csv.Write(x.columns); err != nil {
			return err
		}
	}
	if err := d.store.Journal(0, d.store.Next(), x.record); err != nil {
		return err
	}
	x.csv.Flush()
	if err := x.csv.Error(); err != nil {
		return err
	}
	return buffered.Flush()
}

type exporter struct {
	q       Export
	columns []string
	desk    *Desk
	plan    rules.Plan
	json    *json.Encoder
	csv     *csv.Writer
}

func (x *exporter) record(e rules.Event, out rules.Outcomes) error {
	if e.Adopted != nil {
		x.plan = e.Adopted.Plan
	}
	// Each by its own time: a clock may have been set back, so that times do not always ascend.
	if e.At.Before(x.q.From) || !x.q.To.IsZero() && !e.At.Before(x.q.To) {
		return nil
	}
	switch x.q.What {
	case "looks":
		return x.looks(&e, &out)
	case "crossings":
		return x.crossings(&e, &out)
	}
	return x.measurements(&e)
}

func (x *exporter) measurements(e *rules.Event) error {
	b := e.Batch
	if b == nil {
		return nil
	}
	withdrawn := x.desk.isWithdrawn(e.Index)
	for _, s := range b.Series {
		for i, v := range s.Value {
			row := s.Row[i]
			var measured, serial any
			if b.Rows.Time != nil {
				measured = time.Unix(0, b.Rows.Time[row]).UTC()
			}
			if b.Rows.Serial != nil {
				serial = b.Rows.Serial[row]
			}
			of := 1.0
			if s.Of != nil {
				of = s.Of[i]
			}
			if err := x.row(e.Index, e.At, b.Source, b.File, b.Rows.Line[row], measured, serial, s.Process, v, of, withdrawn); err != nil {
				return err
			}
		}
	}
	return nil
}

func (x *exporter) looks(e *rules.Event, out *rules.Outcomes) error {
	var file any
	if e.Batch != nil {
		file = e.Batch.File
	}
	for _, l := range out.Looks {
		rule := ""
		if l.Rule < len(x.plan.Rules) {
			rule = x.plan.Rules[l.Rule].Name
		}
		p, q, odds := sides(&l)
		if err := x.row(e.Index, e.At, file, rule, p, q, odds, l.Withheld); err != nil {
			return err
		}
	}
	return nil
}

// sides are the figures of a look; nil where it was withheld.
func sides(l *rules.Look) (p, q, odds any) {
	if l == nil || l.Withheld != "" {
		return nil, nil, nil
	}
	o := l.Odds()
	return o.Probability(), o.Contrary(), math.Max(math.Min(o.Log10(), 1e300), -1e300)
}

func (x *exporter) crossings(e *rules.Event, out *rules.Outcomes) error {
	for i := range out.Changes {
		c := &out.Changes[i]
		p, q, _ := sides(c.Look)
		var median, lower, upper any
		if c.Quantity != nil {
			median, lower, upper = c.Quantity.Median, c.Quantity.Lower, c.Quantity.Upper
		}
		if err := x.row(e.Index, e.At, feed.AlarmName(c.Alarm), c.Step, c.Rule, c.Version, string(c.Cause), string(c.From), string(c.To), p, q,
			median, lower, upper, c.Source, c.File, c.By, c.Note); err != nil {
			return err
		}
	}
	return nil
}

// row writes one row; nil is an empty field, and no member.
func (x *exporter) row(values ...any) error {
	if x.q.Form == "jsonl" {
		object := map[string]any{"type": strings.TrimSuffix(x.q.What, "s")}
		for i, v := range values {
			if v != nil && v != "" {
				if f, ok := v.(float64); ok {
					v = json.Number(strconv.FormatFloat(f, 'g', 17, 64))
				}
				object[x.columns[i]] = v
			}
		}
		return x.json.Encode(object)
	}
	fields := make([]string, len(values))
	for i, v := range values {
		switch v := v.(type) {
		case nil:
		case float64:
			fields[i] = strconv.FormatFloat(v, 'g', 17, 64)
		case time.Time:
			fields[i] = v.UTC().Format(time.RFC3339Nano)
		case string:
			fields[i] = noFormula(v)
		default:
			fields[i] = fmt.Sprint(v)
		}
	}
	return x.csv.Write(fields)
}

// noFormula marks a text that a spreadsheet would take for a formula as text: one that begins with = + - @, in either
// width, or with a sign that can't be seen.
func noFormula(text string) string {
	first, _ := utf8.DecodeRuneInString(text)
	if text != "" && (first < ' ' || strings.ContainsRune("=+-@＝＋－＠", first)) {
		return "'" + text
	}
	return text
}

// Export is for Counter: what the daemon writes is passed on as it comes.
func (r *remote) Export(q Export, w io.Writer) error {
	if err := q.Check(); err != nil {
		return err
	}
	return r.stream("/export", q, w)
}
