package daylog

import (
	"fmt"
	"slices"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// mostHeld is how many held files and rows a log lists one by one; the rest are counted.
const mostHeld = 500

// Collector makes a Log of the journal's records, taken in order.
type Collector struct {
	log     Log
	day     Day
	zone    *time.Location
	sources map[string]*Source
	lost    map[string]*Gap // sources that can't be looked at now
	plan    rules.Plan
	heldMax int
}

// NewCollector begins the log of a day. Plan is the one in force when the day began; zone
// gives the clock by which times are written.
func NewCollector(day Day, plan rules.Plan, zone *time.Location) *Collector {
	return &Collector{
		day: day, plan: plan, zone: zone,
		sources: map[string]*Source{}, lost: map[string]*Gap{},
		log: Log{Type: "daylog", Day: day.Label, From: day.From, Caution: rules.ReleaseNote},
	}
}

// Add takes one record of the day.
func (c *Collector) Add(e *rules.Event, out *rules.Outcomes) {
	if c.log.Records[1] == 0 {
		c.log.Records[0] = e.Index
	}
	c.log.Records[1] = e.Index + 1
	switch {
	case e.Batch != nil:
		c.batch(e)
	case e.Held != nil:
		c.source(e.Held.Source).HeldFiles++
		c.held(Held{At: e.At, Record: e.Index, Source: e.Held.Source, File: e.Held.File, Reason: e.Held.Reason})
		if e.Held.Source == config.MarksName { // of other files held whole the first reason says enough
			for _, row := range e.Held.Rows {
				c.held(Held{At: e.At, Record: e.Index, Source: e.Held.Source, File: e.Held.File, Line: row.Line, Reason: row.Reason, Text: row.Text})
			}
		}
	case e.Again != nil:
		c.source(e.Again.Source).Again++
	case e.Started != nil:
		c.started(e)
	case e.Watching != nil:
		c.watching(e)
	case e.Adopted != nil:
		c.adopted(e)
	case e.Withdrawn != nil:
		c.withdrawn(e)
	case e.Decided != nil:
		c.decided(e.At, e.Decided)
	case e.Stepped != nil:
		c.stepped(e)
	case e.Sealed != nil:
		c.remark(e.At, "The records %d to %d were moved into the volume %s; its SHA-256 is %s.", e.Sealed.From, e.Sealed.To-1, e.Sealed.File, e.Sealed.SHA256)
	case e.Segment != nil:
		since := ""
		if t := e.Segment.Since; !t.IsZero() {
			since = " at " + t.In(c.zone).Format("2006-01-02 15:04:05")
		}
		c.remark(e.At, "A new segment began%s for %s (%s), by %s.",
			since, strings.Join(e.Segment.Processes, ", "), e.Segment.Note, e.Segment.By)
	}
	for i := range out.Changes {
		ch := &out.Changes[i]
		c.log.Changes = append(c.log.Changes, Change{
			At: ch.At, Record: e.Index, Alarm: fmt.Sprintf("A%d", ch.Alarm), Rule: ch.Rule,
			Cause: ch.Cause, To: ch.To, Text: withoutNote(c.plan.Tell(ch, c.zone)),
		})
	}
	for _, r := range out.Remarks {
		c.remark(e.At, "%s.", strings.TrimSuffix(r, "."))
	}
}

// withoutNote leaves out the release note, which the log says once for all.
func withoutNote(told []string) string {
	return strings.Join(slices.DeleteFunc(slices.Clone(told), func(s string) bool { return s == rules.ReleaseNote }), " ")
}

func (c *Collector) source(name string) *Source {
	s, ok := c.sources[name]
	if !ok {
		s = &Source{Name: name}
		c.sources[name] = s
	}
	return s
}

func (c *Collector) batch(e *rules.Event) {
	b := e.Batch
	if len(b.Replaces) > 0 {
		c.remark(e.At, "File %s of %s (record %d) takes the place of %s, which counts no more.", b.File, b.Source, e.Index, records(b.Replaces))
	}
	s := c.source(b.Source)
	if b.Decided != nil {
		c.decided(e.At, b.Decided)
	}
	if b.Decided == nil || len(b.Decided.Lines) == 0 {
		s.Files++
	}
	s.Rows += len(b.Rows.Line)
	c.rows(e, s)
	s.HeldRows += len(b.Held)
	for _, row := range b.Held {
		c.held(Held{At: e.At, Record: e.Index, Source: b.Source, File: b.File, Line: row.Line, Reason: row.Reason, Text: row.Text})
	}
}

func (c *Collector) held(h Held) {
	if len(c.log.Held) < mostHeld {
		c.log.Held = append(c.log.Held, h)
		return
	}
	c.heldMax++
}

func (c *Collector) started(e *rules.Event) {
	last := e.Started.LastAlive
	if last.IsZero() {
		c.remark(e.At, "The program began to watch for the first time, on %s (%s).", e.Started.Host, e.Started.Program)
		return
	}
	why := "the program before it ended without order (killed, or the power failed)"
	if e.Started.Clean {
		why = "the program had been stopped"
	}
	if last.Before(c.day.From) {
		last = c.day.From
	}
	c.log.Gaps = append(c.log.Gaps, Gap{From: last, To: e.At, What: "everything", Why: why})
	c.remark(e.At, "The program began to watch, on %s (%s).", e.Started.Host, e.Started.Program)
}

func (c *Collector) watching(e *rules.Event) {
	w := e.Watching
	if !w.Able {
		c.lost[w.Source] = &Gap{From: e.At, What: "source " + w.Source, Why: w.Why}
		return
	}
	gap, ok := c.lost[w.Source]
	if !ok {
		gap = &Gap{From: c.day.From, What: "source " + w.Source, Why: "it could not be looked at when the day began"}
	}
	gap.To = e.At
	delete(c.lost, w.Source)
	c.log.Gaps = append(c.log.Gaps, *gap)
}

func (c *Collector) adopted(e *rules.Event) {
	c.plan = e.Adopted.Plan
	c.remark(e.At, "The configuration %s (SHA-256 %.12s…) came into force, adopted by %s.",
		e.Adopted.File, e.Adopted.Digest, e.Adopted.By)
}

func (c *Collector) remark(at time.Time, format string, args ...any) {
	c.log.Remarks = append(c.log.Remarks, at.In(c.zone).Format("15:04:05 ")+fmt.Sprintf(format, args...))
}

// Finish closes the log with the engine's state at the day's end, or at written while the day
// goes on.
func (c *Collector) Finish(state *rules.State, written time.Time) *Log {
	log := &c.log
	plan := state.Plan()
	log.Site, log.Written = plan.Site, written
	log.To, log.Whole = c.day.To, !written.Before(c.day.To)
	if !log.Whole {
		log.To = written
	}
	for _, s := range c.sources {
		log.Sources = append(log.Sources, *s)
	}
	slices.SortFunc(log.Sources, func(a, b Source) int { return strings.Compare(a.Name, b.Name) })
	for _, gap := range c.lost {
		log.Gaps = append(log.Gaps, *gap)
	}
	slices.SortStableFunc(log.Gaps, func(a, b Gap) int { return a.From.Compare(b.From) })
	if c.heldMax > 0 {
		log.Remarks = append(log.Remarks, fmt.Sprintf("%d more held files and rows are in the journal but not listed here.", c.heldMax))
	}
	log.Processes = state.Standings()
	for _, a := range state.Alarms() {
		log.Alarms = append(log.Alarms, Alarm{fmt.Sprintf("A%d", a.Alarm), a.State, a.Since, a.Says})
	}
	return log
}
