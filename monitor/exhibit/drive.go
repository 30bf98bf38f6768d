package exhibit

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"steelyard/rules"
	"steelyard/rules/evidence"
	"steelyard/store"
)

// driven is what the engine makes of the records of a page.
type driven struct {
	content *Content
	entries []*store.Entry
	zone    *time.Location

	state    *rules.State
	crossing *store.Entry
	change   *rules.Change
	plan     rules.Plan
	rule     rules.Rule
	adopted  *store.Entry
	program  string

	recorded, again rules.Look // of the rule, at the crossing
	before, after   []rules.Standing
	curves          []curve
	unit            *unit
	looks           []look
	batches         []*store.Entry
	steps           []step
	rows            int
	raisedText      string
}

// look is one look at the rule, as it was recorded.
type look struct {
	entry *store.Entry
	look  rules.Look
}

// step is a change of the alarm in words.
type step struct {
	Record uint64
	At     time.Time
	Cause  rules.Cause
	Text   string
}

// unit is the row of the crossing batch from which on the probability stayed at or above raise.
type unit struct {
	Line        int
	Serial      string
	At          time.Time // when it was measured; zero where the file does not say
	Number, Of  int       // in the batch
	Probability string
}

// curve is what is believed of a process before and after, as points.
type curve struct {
	Process       string
	Unit          string
	From, To      float64
	Before, After []float64 // densities at equal distances; nil where there is none
}

// history is the journal as far as the page holds it.
type history []*store.Entry

// Events is for rules.History.
func (h history) Events(from, to uint64, visit func(*rules.Event) error) error {
	for _, e := range h {
		if from <= e.Event.Index && e.Event.Index < to {
			if err := visit(&e.Event); err != nil {
				return err
			}
		}
	}
	return nil
}

// drive drives two engines with the records up to the crossing: one goes over it at once, the other unit by unit.
func drive(c *Content, entries []*store.Entry) (*driven, error) {
	d := &driven{content: c, entries: entries, state: rules.NewState()}
	var err error
	if d.zone, err = time.LoadLocation(c.Zone); err != nil {
		return nil, fmt.Errorf("the time zone of the exhibit: %w", err)
	}
	slow := rules.NewState()
	d.state.Trust() // what is on the page was counted, on more than is on the page
	slow.Trust()
	d.state.Consult(history(entries))
	slow.Consult(history(entries))
	for _, e := range entries {
		d.count(e)
		if d.crossing != nil {
			continue
		}
		if i := slices.IndexFunc(e.Outcomes.Changes, func(ch rules.Change) bool { return ch.Alarm == c.Alarm && ch.Cause == rules.Raised }); i >= 0 {
			d.crossing, d.change = e, &e.Outcomes.Changes[i]
			if err := d.cross(slow); err != nil {
				return nil, err
			}
			continue
		}
		event, ok := drivable(&e.Event)
		if !ok {
			continue
		}
		if _, err := d.state.Apply(event); err != nil {
			return nil, fmt.Errorf("record %d: %w", e.Event.Index, err)
		}
		if _, err := slow.Apply(event); err != nil {
			return nil, fmt.Errorf("record %d: %w", e.Event.Index, err)
		}
		if err := d.lookIn(e); err != nil {
			return nil, err
		}
	}
	if d.crossing == nil {
		return nil, fmt.Errorf("no record of the exhibit raises A%d", c.Alarm)
	}
	d.tell()
	return d, nil
}

// drivable is an event as far as it can be driven without the rest of the journal: what it took out is not on the
// page, and answers belong to alarms by numbers that only the whole journal gives.
func drivable(e *rules.Event) (*rules.Event, bool) {
	switch {
	case e.Withdrawn != nil, e.Acknowledged != nil, e.Decided != nil, e.Moment != nil:
		return nil, false
	case e.Batch != nil && len(e.Batch.Replaces) > 0:
		event, batch := *e, *e.Batch
		batch.Replaces = nil
		event.Batch = &batch
		return &event, true
	}
	return e, true
}

// count keeps what a record is for the page.
func (d *driven) count(e *store.Entry) {
	switch {
	case e.Event.Started != nil && d.crossing == nil:
		d.program = e.Event.Started.Program
	case e.Event.Adopted != nil && d.crossing == nil:
		d.adopted = e
	case e.Event.Batch != nil:
		d.rows += len(e.Event.Batch.Rows.Line)
		if d.crossing == nil {
			d.batches = append(d.batches, e)
		}
	}
}

// ruleIndex is where the rule stands in the plan in force.
func (d *driven) ruleIndex(name string) (int, error) {
	plan := d.state.Plan()
	i := slices.IndexFunc(plan.Rules, func(r rules.Rule) bool { return r.Name == name })
	if i < 0 {
		return 0, fmt.Errorf("the plan in force has no rule %q", name)
	}
	return i, nil
}

// lookIn keeps the recorded looks; which rule they are of is known by the number in the plan then in force.
func (d *driven) lookIn(e *store.Entry) error {
	for _, l := range e.Outcomes.Looks {
		d.looks = append(d.looks, look{e, l})
	}
	return nil
}

// cross goes over the crossing.
func (d *driven) cross(slow *rules.State) error {
	d.plan = d.state.Plan()
	i, err := d.ruleIndex(d.change.Rule)
	if err != nil {
		return err
	}
	if d.rule = d.plan.Rules[i]; d.rule.Quiet != nil {
		return errors.New("its rule waits for something to be counted and was raised by the clock: there are no measurements to show")
	}
	ofRule := func(looks []rules.Look) (rules.Look, error) {
		for _, l := range looks {
			if l.Rule == i {
				return l, nil
			}
		}
		return rules.Look{}, errors.New("there is no look at the rule in the crossing")
	}
	if d.recorded, err = ofRule(d.crossing.Outcomes.Looks); err != nil {
		return err
	}
	if err := d.lookIn(d.crossing); err != nil {
		return err
	}
	d.looks = slices.DeleteFunc(d.looks, func(l look) bool { return l.look.Rule != i })
	d.before = d.standings(d.state)
	if d.unit, err = d.unitByUnit(slow, i); err != nil {
		return err
	}
	if err := d.draw(slow); err != nil {
		return err
	}
	event, ok := drivable(&d.crossing.Event)
	if !ok {
		return errors.New("the crossing was not made by measurements, and can't be driven from them")
	}
	out, err := d.state.Apply(event)
	if err != nil {
		return err
	}
	if d.again, err = ofRule(out.Looks); err != nil {
		return err
	}
	d.after = d.standings(d.state)
	if event.Batch != nil {
		d.batches = append(d.batches, d.crossing)
	}
	return nil
}

// standings are where the claim's processes stand in an engine.
func (d *driven) standings(state *rules.State) (all []rules.Standing) {
	for _, st := range state.Standings() {
		if slices.ContainsFunc(d.change.Units, func(u rules.Units) bool { return u.Process == st.Process }) {
			all = append(all, st)
		}
	}
	return all
}

// agreement is how near the logarithms of what was recorded and what follows from the page must be: a window of
// units is merged from other pieces where older batches are not there.
const agreement = 1e-9

func (d *driven) follows() bool {
	near := func(a, b float64) bool { return math.Abs(a-b) <= agreement*math.Max(1, math.Abs(b)) }
	return d.recorded.Withheld == "" && d.again.Withheld == "" &&
		near(d.again.LogFor, d.recorded.LogFor) && near(d.again.LogAgainst, d.recorded.LogAgainst)
}

// mostUnits is how many rows of a batch are gone through one by one.
const mostUnits = 5000

// unitByUnit finds the unit at which the claim became as probable as raise, for good within the batch, and leaves
// the engine behind it.
func (d *driven) unitByUnit(slow *rules.State, rule int) (*unit, error) {
	b := d.crossing.Event.Batch
	if b == nil || len(b.Rows.Line) > mostUnits {
		event, _ := drivable(&d.crossing.Event)
		_, err := slow.Apply(event)
		return nil, err
	}
	var found *unit
	for row := range b.Rows.Line {
		event := d.crossing.Event
		event.Batch = oneRow(b, row)
		if len(event.Batch.Series) == 0 {
			continue
		}
		out, err := slow.Apply(&event)
		if err != nil {
			return nil, err
		}
		for _, l := range out.Looks {
			if l.Rule != rule {
				continue
			}
			if l.Withheld != "" || l.Odds().Probability() < d.rule.Raise {
				found = nil
			} else if found == nil {
				found = &unit{Line: b.Rows.Line[row], Number: row + 1, Of: len(b.Rows.Line), Probability: rules.ProbabilityText(l.Odds())}
				if b.Rows.Serial != nil {
					found.Serial = b.Rows.Serial[row]
				}
				if b.Rows.Time != nil {
					found.At = time.Unix(0, b.Rows.Time[row]).UTC()
				}
			}
		}
	}
	return found, nil
}

// oneRow is a batch of one of its rows.
func oneRow(b *rules.Batch, row int) *rules.Batch {
	one := *b
	one.Replaces, one.Held = nil, nil
	one.Rows = rules.Rows{Line: b.Rows.Line[row : row+1]}
	if b.Rows.Time != nil {
		one.Rows.Time = b.Rows.Time[row : row+1]
	}
	if b.Rows.Serial != nil {
		one.Rows.Serial = b.Rows.Serial[row : row+1]
	}
	one.Series = nil
	for _, s := range b.Series {
		part := rules.Series{Process: s.Process}
		for _, r := range s.Beyond {
			if r.Row == row {
				part.Beyond = []rules.Bound{{Limit: r.Limit, Above: r.Above}}
			}
		}
		i, ok := slices.BinarySearch(s.Row, row)
		if !ok && part.Beyond == nil {
			continue
		}
		if ok {
			part.Row, part.Value = []int{0}, s.Value[i:i+1]
		}
		if ok && s.Of != nil {
			part.Of = s.Of[i : i+1]
		}
		one.Series = append(one.Series, part)
	}
	return &one
}

// points is how many points a curve has.
const points = 161

// draw takes the densities of the processes' centres, before the crossing and after it.
func (d *driven) draw(after *rules.State) error {
	for _, st := range d.standings(after) {
		c := curve{Process: st.Process, Unit: st.Unit}
		if q := st.Estimate; q != nil && q.Upper > q.Lower {
			reach := q.Upper - q.Lower
			c.From, c.To = q.Lower-reach, q.Upper+reach
			// A process of which too little was known before has one curve.
			c.Before, _ = densitiesOf(func(x float64) (evidence.Odds, error) { return d.state.CentreAbove(c.Process, x) }, c.From, c.To)
			var err error
			if c.After, err = densitiesOf(func(x float64) (evidence.Odds, error) { return after.CentreAbove(c.Process, x) }, c.From, c.To); err != nil {
				return err
			}
		}
		d.curves = append(d.curves, c)
	}
	return nil
}

// densitiesOf are the probabilities of small stretches of equal length, the largest of them 1.
func densitiesOf(above func(x float64) (evidence.Odds, error), from, to float64) ([]float64, error) {
	step := (to - from) / points
	var list []float64
	top := 0.0
	last, err := above(from)
	for i := 1; i <= points && err == nil; i++ {
		var next evidence.Odds
		if next, err = above(from + float64(i)*step); err == nil {
			p := last.Probability() - next.Probability()
			if last.LogFor > -0.7 {
				p = next.Contrary() - last.Contrary()
			}
			list = append(list, math.Max(p, 0))
			top = math.Max(top, p)
			last = next
		}
	}
	if err != nil {
		return nil, err
	}
	for i := range list {
		list[i] /= top
	}
	return list, nil
}

// tell takes the steps of the alarm, in words.
func (d *driven) tell() {
	plan := d.plan
	for _, e := range d.entries {
		if e.Event.Adopted != nil && e.Event.Index > d.crossing.Event.Index {
			continue
		}
		for i := range e.Outcomes.Changes {
			ch := &e.Outcomes.Changes[i]
			if ch.Alarm != d.content.Alarm {
				continue
			}
			told := slices.DeleteFunc(plan.Tell(ch, d.zone), func(s string) bool { return s == rules.ReleaseNote })
			d.steps = append(d.steps, step{e.Event.Index, e.Event.At, ch.Cause, strings.Join(told, " ")})
			if e == d.crossing && ch.Cause == rules.Raised {
				d.raisedText = strings.Join(told, " ")
			}
		}
	}
}
