package daylog

import (
	"fmt"
	"strings"
	"time"

	"steelyard/rules"
)

// withdrawn says what was taken out, by whom and why.
func (c *Collector) withdrawn(e *rules.Event) {
	w := e.Withdrawn
	which := records(w.Batches)
	if w.Source != "" {
		at := func(t time.Time) string { return t.In(c.zone).Format("2006-01-02 15:04:05 -07:00") }
		which += fmt.Sprintf(" (every batch of %s with a measurement from %s up to %s)", w.Source, at(w.From), at(w.To))
	}
	c.remark(e.At, "Withdrawn by %s (%s): the batches of %s. Reason: %s.", w.By, w.How, which, strings.TrimSuffix(w.Reason, "."))
}

// mostNamed is how many records a sentence names one by one.
const mostNamed = 12

// records names records for a sentence.
func records(indexes []uint64) string {
	var names []string
	for _, index := range indexes[:min(len(indexes), mostNamed)] {
		names = append(names, fmt.Sprint(index))
	}
	if len(indexes) > mostNamed {
		names = append(names, fmt.Sprintf("%d more up to %d", len(indexes)-mostNamed, indexes[len(indexes)-1]))
	}
	if len(names) == 1 {
		return "record " + names[0]
	}
	return "the records " + strings.Join(names[:len(names)-1], ", ") + " and " + names[len(names)-1]
}

// decided says who decided what on something held, and why.
func (c *Collector) decided(at time.Time, d *rules.Decided) {
	what, verb := fmt.Sprintf("the file held in record %d", d.Held), "set aside for good"
	switch len(d.Lines) {
	case 0:
	case 1:
		what = fmt.Sprintf("line %d, held in record %d", d.Lines[0], d.Held)
	default:
		what = fmt.Sprintf("%d rows held in record %d, the first of line %d", len(d.Lines), d.Held, d.Lines[0])
	}
	if d.Take {
		verb = "taken after all"
	}
	c.remark(at, "%s (%s) decided on %s: %s. Reason: %s.", d.By, d.How, what, verb, strings.TrimSuffix(d.Reason, "."))
}
