package exhibit

import (
	"bytes"
	_ "embed"
	"encoding/json"
	"fmt"
	"html/template"
	"math"
	"strconv"
	"strings"
	"time"

	"steelyard/rules"
	"steelyard/store"
)

//go:embed page.html
var pageText string

var pageTemplate = template.Must(template.New("page").Parse(pageText))

// What stands around the records in the page.
const (
	openRecords  = `<script type="application/json" id="records">`
	closeRecords = `</script>`
)

// between is what stands between two texts.
func between(text, open, end string) (string, error) {
	_, rest, found := strings.Cut(text, open)
	inside, _, closed := strings.Cut(rest, end)
	if !found || !closed {
		return "", fmt.Errorf("that is no exhibit: it has no %s", open)
	}
	return inside, nil
}

// view is what the template shows.
type view struct {
	Alarm, Site, Says, Caution, Program   string
	Rule                                  rules.Rule
	Version, Config, Digest, Adopted, By  string
	AdoptedRecord                         uint64
	Settings                              []string
	Record                                uint64
	At, Probability, Contrary, Odds       string
	Recomputed                            string
	Source, File, SHA256                  string
	Unit                                  string
	Quantity                              string
	Beliefs                               []belief
	Trace                                 template.HTML
	Curves                                []drawn
	Batches                               []batchRow
	Held                                  []string
	LeftOut                               int
	Steps                                 []stepRow
	Values                                []valueRow
	Rows                                  int
	Checkpoint, Verifying, Records, Under string
	Data                                  template.JS
}

type belief struct{ Process, When, Units, Estimate, Interval, Unit string }

type drawn struct {
	Process string
	SVG     template.HTML
}

type batchRow struct {
	At, Source, File, SHA256, Values string
	Record                           uint64
}

type stepRow struct {
	At, Cause, Text string
	Record          uint64
}

type valueRow struct{ Record, Line, At, Serial, Process, Value, Of string }

// page renders the page; nothing in it comes from anywhere but the records.
func (d *driven) page() ([]byte, error) {
	data, err := json.Marshal(d.content)
	if err != nil {
		return nil, err
	}
	v := view{Data: template.JS(data), Caution: rules.ReleaseNote, LeftOut: d.content.LeftOut, Rows: d.rows}
	d.showRule(&v)
	d.showCrossing(&v)
	d.showEvidence(&v)
	v.Checkpoint, v.Verifying, v.Records = d.content.Checkpoint, d.content.Verifying, strconv.Itoa(len(d.entries))
	v.Under = strings.Split(d.content.Checkpoint+"\n\n", "\n")[1]
	var page bytes.Buffer
	if err := pageTemplate.Execute(&page, v); err != nil {
		return nil, err
	}
	return page.Bytes(), nil
}

func (d *driven) clock(t time.Time) string {
	if t.IsZero() {
		return ""
	}
	return t.In(d.zone).Format("2006-01-02 15:04:05 -0700")
}

func (d *driven) showRule(v *view) {
	v.Alarm, v.Site, v.Rule, v.Version, v.Program = fmt.Sprintf("A%d", d.content.Alarm), d.plan.Site, d.rule, d.change.Version, d.program
	v.Says = d.raisedText
	if d.adopted != nil {
		a := d.adopted.Event.Adopted
		v.Config, v.Digest, v.By, v.Adopted, v.AdoptedRecord = a.File, a.Digest, a.By, d.clock(d.adopted.Event.At), d.adopted.Event.Index
	}
	for _, ch := range d.plan.Characteristics {
		for _, u := range d.change.Units {
			if strings.HasPrefix(u.Process, ch.Name+".") {
				prior, _ := json.Marshal(ch.Prior)
				remember, _ := json.Marshal(ch.Remember)
				lower, upper := ch.Limits()
				v.Settings = append(v.Settings, fmt.Sprintf("%s: %s family, prior %s, remembers %s, limits %v to %v %s %s",
					ch.Name, ch.Family, prior, remember, lower, upper, ch.Unit, ch.Retests.Says()))
				break
			}
		}
	}
}

func (d *driven) showCrossing(v *view) {
	odds := d.recorded.Odds()
	v.Record, v.At = d.crossing.Event.Index, d.clock(d.crossing.Event.At)
	v.Probability, v.Contrary = strconv.FormatFloat(odds.Probability(), 'g', 17, 64), strconv.FormatFloat(odds.Contrary(), 'g', 17, 64)
	v.Odds = rules.OddsText(odds)
	v.Recomputed = strconv.FormatFloat(d.again.Odds().Probability(), 'g', 17, 64)
	if b := d.crossing.Event.Batch; b != nil {
		v.Source, v.File, v.SHA256 = b.Source, b.File, b.SHA256
	}
	if u := d.unit; u != nil {
		v.Unit = fmt.Sprintf("Taken unit by unit, the probability reached %v with unit %d of %d of the file (line %d%s%s), at %s, and stayed there.",
			d.rule.Raise, u.Number, u.Of, u.Line, prefixed(", serial ", u.Serial), prefixed(", measured ", d.clock(u.At)), u.Probability)
	}
	if q := d.change.Quantity; q != nil {
		v.Quantity = fmt.Sprintf("%.6g, 95 %% between %.6g and %.6g", q.Median, q.Lower, q.Upper)
	}
	for i := range d.before {
		v.Beliefs = append(v.Beliefs, believed(&d.before[i], "before"), believed(&d.after[i], "after"))
	}
	v.Trace = d.trace()
	for i := range d.curves {
		v.Curves = append(v.Curves, drawn{d.curves[i].Process, d.curves[i].svg()})
	}
}

func prefixed(with, text string) string {
	if text == "" {
		return ""
	}
	return with + text
}

func believed(st *rules.Standing, when string) belief {
	b := belief{Process: st.Process, When: when, Units: strconv.FormatFloat(st.Units, 'g', 6, 64), Unit: st.Unit, Estimate: st.Why}
	if q := st.Estimate; q != nil {
		b.Estimate = st.Quantity + " " + strconv.FormatFloat(q.Median, 'g', 7, 64)
		b.Interval = fmt.Sprintf("%.7g to %.7g", q.Lower, q.Upper)
	}
	return b
}

func (d *driven) showEvidence(v *view) {
	for _, e := range d.batches {
		b := e.Event.Batch
		var parts []string
		for _, s := range b.Series {
			parts = append(parts, fmt.Sprintf("%d of %s", len(s.Value), s.Process))
			d.showValues(v, e, &s)
		}
		v.Batches = append(v.Batches, batchRow{d.clock(e.Event.At), b.Source, b.File, b.SHA256, strings.Join(parts, ", "), e.Event.Index})
		for _, h := range b.Held {
			v.Held = append(v.Held, fmt.Sprintf("record %d, %s line %d: %s", e.Event.Index, b.File, h.Line, h.Reason))
		}
	}
	for _, s := range d.steps {
		v.Steps = append(v.Steps, stepRow{d.clock(s.At), string(s.Cause), s.Text, s.Record})
	}
}

func (d *driven) showValues(v *view, e *store.Entry, s *rules.Series) {
	rows := &e.Event.Batch.Rows
	for i, x := range s.Value {
		row := s.Row[i]
		r := valueRow{Record: strconv.FormatUint(e.Event.Index, 10), Line: strconv.Itoa(rows.Line[row]), Process: s.Process,
			Value: strconv.FormatFloat(x, 'g', -1, 64)}
		if rows.Time != nil {
			r.At = d.clock(time.Unix(0, rows.Time[row]))
		}
		if rows.Serial != nil {
			r.Serial = rows.Serial[row]
		}
		if s.Of != nil {
			r.Of = strconv.FormatFloat(s.Of[i], 'g', -1, 64)
		}
		v.Values = append(v.Values, r)
	}
}

// Sizes of the drawings.
const (
	wide, high = 720, 220
	margin     = 46
)

// trace draws the odds of the rule's looks, one after the other, with its two thresholds.
func (d *driven) trace() template.HTML {
	level := func(p float64) float64 { return math.Log10(p / (1 - p)) }
	lo, hi := math.Min(level(d.rule.Clear), -1), level(d.rule.Raise)+1
	var odds []float64
	for _, l := range d.looks {
		o := math.NaN()
		if l.look.Withheld == "" {
			o = math.Max(math.Min(l.look.Odds().Log10(), 12), -12)
			lo, hi = math.Min(lo, o), math.Max(hi, o)
		}
		odds = append(odds, o)
	}
	x := func(i int) float64 {
		return margin + float64(i)*(wide-2*margin)/math.Max(float64(len(odds)-1), 1)
	}
	y := func(o float64) float64 { return high - 30 - (o-lo)*(high-50)/(hi-lo) }
	var b strings.Builder
	fmt.Fprintf(&b, `<svg viewBox="0 0 %d %d" role="img" aria-label="Odds of the claim at each look, up to the crossing">`, wide, high)
	for _, t := range []struct {
		name string
		p    float64
	}{{"raise", d.rule.Raise}, {"clear", d.rule.Clear}} {
		fmt.Fprintf(&b, `<line class="level" x1="%d" x2="%d" y1="%.1f" y2="%.1f"/><text x="%d" y="%.1f">%s %v</text>`,
			margin, wide-margin, y(level(t.p)), y(level(t.p)), wide-margin+2, y(level(t.p))+4, t.name, t.p)
	}
	for o := math.Ceil(lo); o <= hi; o += math.Max(1, math.Ceil((hi-lo)/8)) {
		fmt.Fprintf(&b, `<text x="2" y="%.1f">%s</text>`, y(o)+4, oddsLabel(o))
	}
	path, pen := "", "M"
	for i, o := range odds {
		if math.IsNaN(o) {
			pen = "M"
			continue
		}
		path += fmt.Sprintf("%s%.1f %.1f ", pen, x(i), y(o))
		pen = "L"
	}
	fmt.Fprintf(&b, `<path class="odds" d="%s"/>`, strings.TrimSpace(path))
	if n := len(odds); n > 0 && !math.IsNaN(odds[n-1]) {
		fmt.Fprintf(&b, `<circle class="crossing" cx="%.1f" cy="%.1f" r="4"/>`, x(n-1), y(odds[n-1]))
	}
	fmt.Fprintf(&b, `<text x="%d" y="%d">%d looks, the crossing last; odds for the claim</text></svg>`, margin, high-6, len(odds))
	return template.HTML(b.String())
}

func oddsLabel(o float64) string {
	switch {
	case o > 0:
		return fmt.Sprintf("1e%.0f:1", o)
	case o < 0:
		return fmt.Sprintf("1:1e%.0f", -o)
	}
	return "even"
}

// svg draws what is believed of one process before (dashed) and after.
func (c *curve) svg() template.HTML {
	if c.After == nil {
		return "too little is known yet"
	}
	const tall = 130
	var b strings.Builder
	fmt.Fprintf(&b, `<svg viewBox="0 0 %d %d" role="img" aria-label="What is believed of it before and after the crossing">`, wide, tall)
	for _, line := range []struct {
		class string
		y     []float64
	}{{"before", c.Before}, {"after", c.After}} {
		path := ""
		for i, v := range line.y {
			path += fmt.Sprintf("%s%.1f %.1f ", []string{"L", "M"}[min(1, max(0, 1-i))], margin+float64(i)*(wide-2*margin)/(points-1), tall-24-v*(tall-40))
		}
		if path != "" {
			fmt.Fprintf(&b, `<path class="%s" d="%s"/>`, line.class, strings.TrimSpace(path))
		}
	}
	fmt.Fprintf(&b, `<line class="axis" x1="%d" x2="%d" y1="%d" y2="%d"/>`, margin, wide-margin, tall-24, tall-24)
	for i := range 5 {
		x := c.From + (c.To-c.From)*float64(i)/4
		fmt.Fprintf(&b, `<text x="%d" y="%d">%.5g</text>`, margin-14+i*(wide-2*margin)/4, tall-8, x)
	}
	fmt.Fprintf(&b, `<text x="%d" y="14">dashed: before; full: after (%s)</text></svg>`, margin, template.HTMLEscapeString(c.Unit))
	return template.HTML(b.String())
}
