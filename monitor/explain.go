package monitor

import (
	"cmp"
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"steelyard/rules"
	"steelyard/rules/posterior"
)

// looksAround is how many looks before and after the crossing an explanation shows.
const looksAround = 8

// Explanation is what an auditor is shown of one alarm.
type Explanation struct {
	Type      string         `json:"type"` // "explanation"
	Alarm     string         `json:"alarm"`
	Site      string         `json:"site"`
	Says      string         `json:"says"`
	Rule      rules.Rule     `json:"rule"` // as it was in force
	Version   string         `json:"version"`
	Priors    []PriorInForce `json:"priors"`
	Adopted   AdoptedAs      `json:"adopted"`
	Steps     []Step         `json:"steps"`
	Crossing  Crossing       `json:"crossing"`
	Looks     []LookAt       `json:"looks"` // of the rule, around the crossing
	Batches   []BatchOf      `json:"batches"`
	Earlier   int            `json:"earlier_batches"` // of the same evidence, not listed
	Processes []BeforeAfter  `json:"processes"`
	Caution   string         `json:"caution"`

	// Withdrawn are batches of the same evidence that were taken out since, and Stands whether
	// the alarm would have been raised at its record without them; nil where there are none.
	Withdrawn []WithdrawnSince `json:"withdrawn_since,omitempty"`
	Stands    *bool            `json:"stands_without,omitempty"`
}

// PriorInForce is what was believed of a characteristic before its data.
type PriorInForce struct {
	Characteristic string             `json:"characteristic"`
	Family         posterior.Family   `json:"family"`
	Prior          posterior.Prior    `json:"prior"`
	Remember       posterior.Remember `json:"remember"`
	Tests          string             `json:"tests,omitempty"` // which test of a serial counts
}

// AdoptedAs says which configuration was in force.
type AdoptedAs struct {
	Record uint64    `json:"record"`
	At     time.Time `json:"at"`
	File   string    `json:"file"`
	Digest string    `json:"digest"`
	By     string    `json:"by"`
}

// Step is one change of the alarm, in words.
type Step struct {
	Record uint64           `json:"record"`
	At     time.Time        `json:"at"`
	Cause  rules.Cause      `json:"cause"`
	From   rules.AlarmState `json:"from"`
	To     rules.AlarmState `json:"to"`
	Text   string           `json:"text"`
}

// Crossing is the look at which the alarm was raised.
type Crossing struct {
	Record      uint64    `json:"record"`
	At          time.Time `json:"at"`
	Probability float64   `json:"probability"`
	Contrary    float64   `json:"contrary"`
	Raise       float64   `json:"raise"`
	Source      string    `json:"source,omitempty"`
	File        string    `json:"file,omitempty"`
	SHA256      string    `json:"sha256,omitempty"`
	Rows        int       `json:"rows"`
	FirstLine   int       `json:"first_line,omitempty"`
	LastLine    int       `json:"last_line,omitempty"`
}

// LookAt is one look at the rule.
type LookAt struct {
	Record      uint64    `json:"record"`
	At          time.Time `json:"at"`
	File        string    `json:"file,omitempty"`
	Probability *float64  `json:"probability,omitempty"`
	Contrary    *float64  `json:"contrary,omitempty"`
	Withheld    string    `json:"withheld,omitempty"`
	Crossed     bool      `json:"crossed,omitempty"`
}

// BatchOf is one batch that the evidence rests on.
type BatchOf struct {
	Record   uint64         `json:"record"`
	At       time.Time      `json:"at"`
	Source   string         `json:"source"`
	File     string         `json:"file"`
	SHA256   string         `json:"sha256"`
	Values   map[string]int `json:"values"` // measurements of each process of the claim
	HeldRows int            `json:"held_rows,omitempty"`
}

// BeforeAfter is what was believed of a process before and after the crossing batch.
type BeforeAfter struct {
	Process string         `json:"process"`
	Before  rules.Standing `json:"before"`
	After   rules.Standing `json:"after"`
}

// mostBatches is how many batches, the newest, an explanation lists one by one.
const mostBatches = 40

// Explain shows what an alarm rests on, from the journal alone: the state before the
// crossing is that of a fresh engine driven with every record before it.
func (d *Desk) Explain(number int) (*Explanation, error) {
	records, err := d.store.AlarmRecords(number)
	if err != nil {
		return nil, err
	}
	if len(records) == 0 {
		return nil, fmt.Errorf("there is no alarm A%d in the journal", number)
	}
	x := &explainer{number: number, zone: d.cfg.Site.Zone, state: d.replaying(),
		rests: map[uint64]bool{}, already: map[uint64]bool{}}
	x.Type, x.Alarm, x.Caution = "explanation", fmt.Sprintf("A%d", number), rules.ReleaseNote
	crossing, last, end := records[0], records[len(records)-1], d.store.Next()
	if err := d.store.Journal(crossing, crossing+1, x.findRule); err != nil {
		return nil, err
	}
	if err := d.store.Journal(0, crossing, x.before); err != nil {
		return nil, err
	}
	if err := d.store.Journal(crossing, crossing+1, x.cross); err != nil {
		return nil, err
	}
	err = d.store.Journal(crossing+1, end, func(e rules.Event, out rules.Outcomes) error {
		if e.Index > last && x.after >= looksAround {
			return errSeenEnough
		}
		return x.later(e, out)
	})
	if err != nil && !errors.Is(err, errSeenEnough) {
		return nil, err
	}
	if err := d.withdrawnSince(x, end); err != nil {
		return nil, err
	}
	return &x.Explanation, nil
}

// explainer goes through the journal up to and a little past one crossing.
type explainer struct {
	Explanation
	number    int
	zone      *time.Location
	state     *rules.State
	processes []string // of the claim
	after     int      // looks seen since the crossing

	rests   map[uint64]bool // records of the batches that the claim's processes had taken
	already map[uint64]bool // and of those withdrawn before the crossing, or with it
}

// raised is the change that raised the alarm, in the outcomes of the crossing.
func (x *explainer) raised(out *rules.Outcomes) (*rules.Change, error) {
	i := slices.IndexFunc(out.Changes, func(c rules.Change) bool { return c.Alarm == x.number && c.Cause == rules.Raised })
	if i < 0 {
		return nil, fmt.Errorf("the journal's index says that a record raised A%d, and the record does not", x.number)
	}
	return &out.Changes[i], nil
}

// findRule learns from the crossing which rule and processes to follow.
func (x *explainer) findRule(_ rules.Event, out rules.Outcomes) error {
	c, err := x.raised(&out)
	if err != nil {
		return err
	}
	x.Rule.Name, x.Version = c.Rule, c.Version
	for _, u := range c.Units {
		x.processes = append(x.processes, u.Process)
	}
	return nil
}

// before drives the engine up to the crossing and keeps what led up to it.
func (x *explainer) before(e rules.Event, out rules.Outcomes) error {
	if _, err := x.state.Apply(&e); err != nil {
		return fmt.Errorf("record %d: %w", e.Index, err)
	}
	x.evidence(&e)
	if l, ok := x.lookIn(&e, &out); ok {
		x.Looks = append(x.Looks, l)
		x.Looks = x.Looks[max(0, len(x.Looks)-looksAround):]
	}
	return nil
}

// evidence keeps the configuration in force and the batches that the claim rests on.
func (x *explainer) evidence(e *rules.Event) {
	for _, w := range takenOut(e) {
		x.already[w.Batch] = true
		x.Batches = slices.DeleteFunc(x.Batches, func(b BatchOf) bool { return b.Record == w.Batch })
	}
	switch {
	case e.Adopted != nil:
		x.Adopted = AdoptedAs{e.Index, e.At, e.Adopted.File, e.Adopted.Digest, e.Adopted.By}
	case e.Batch != nil:
		b := BatchOf{Record: e.Index, At: e.At, Source: e.Batch.Source, File: e.Batch.File, SHA256: e.Batch.SHA256,
			Values: map[string]int{}, HeldRows: len(e.Batch.Held)}
		for _, s := range e.Batch.Series {
			if slices.Contains(x.processes, s.Process) {
				b.Values[s.Process] += len(s.Value)
			}
		}
		if len(b.Values) == 0 {
			return
		}
		x.rests[e.Index] = true
		x.Batches = append(x.Batches, b)
		if len(x.Batches) > mostBatches {
			x.Batches = x.Batches[1:]
			x.Earlier++
		}
	}
}

// cross takes the figures of the raise and the belief on both sides of it.
func (x *explainer) cross(e rules.Event, out rules.Outcomes) error {
	c, err := x.raised(&out)
	if err != nil {
		return err
	}
	before := x.state.Standings()
	if _, err := x.state.Apply(&e); err != nil {
		return fmt.Errorf("record %d: %w", e.Index, err)
	}
	x.evidence(&e)
	plan := x.state.Plan()
	rule, ok := plan.Rule(c.Rule)
	if !ok {
		return fmt.Errorf("record %d raises A%d under the rule %q, which the plan then in force does not have", e.Index, x.number, c.Rule)
	}
	x.Rule, x.Site, x.Says = *rule, plan.Site, plan.Says(c.Rule)
	x.Crossing = Crossing{Record: e.Index, At: e.At, Raise: rule.Raise}
	if c.Look != nil { // a quiet rule is raised by the clock, and looks at nothing
		odds := c.Look.Odds()
		x.Crossing.Probability, x.Crossing.Contrary = odds.Probability(), odds.Contrary()
	}
	if b := e.Batch; b != nil && len(b.Rows.Line) > 0 {
		x.Crossing.Source, x.Crossing.File, x.Crossing.SHA256 = b.Source, b.File, b.SHA256
		x.Crossing.Rows, x.Crossing.FirstLine, x.Crossing.LastLine = len(b.Rows.Line), b.Rows.Line[0], b.Rows.Line[len(b.Rows.Line)-1]
	}
	for _, name := range x.processes {
		x.Processes = append(x.Processes, BeforeAfter{name, standingOf(before, name), standingOf(x.state.Standings(), name)})
	}
	for _, ch := range plan.Characteristics {
		if slices.ContainsFunc(x.processes, func(p string) bool { return strings.HasPrefix(p, ch.Name+".") }) {
			x.Priors = append(x.Priors, PriorInForce{ch.Name, ch.Family, ch.Prior, ch.Remember,
				cmp.Or(ch.Retests.Says(), "every row counts; tests of one serial are not told apart")})
		}
	}
	if l, ok := x.lookIn(&e, &out); ok {
		l.Crossed = true
		x.Looks = append(x.Looks, l)
	}
	x.steps(&e, &out)
	return nil
}

func standingOf(all []rules.Standing, process string) rules.Standing {
	if i := slices.IndexFunc(all, func(s rules.Standing) bool { return s.Process == process }); i >= 0 {
		return all[i]
	}
	return rules.Standing{Process: process, Why: "it was not in the plan yet"}
}

// later takes the looks and the steps that followed the crossing.
func (x *explainer) later(e rules.Event, out rules.Outcomes) error {
	x.steps(&e, &out)
	if _, err := x.state.Apply(&e); err != nil {
		return fmt.Errorf("record %d: %w", e.Index, err)
	}
	if x.after >= looksAround {
		return nil
	}
	if l, ok := x.lookIn(&e, &out); ok {
		x.Looks = append(x.Looks, l)
		x.after++
	}
	return nil
}

// steps takes the changes of the alarm in a record.
func (x *explainer) steps(e *rules.Event, out *rules.Outcomes) {
	plan := x.state.Plan()
	for i := range out.Changes {
		c := &out.Changes[i]
		if c.Alarm != x.number {
			continue
		}
		told := slices.DeleteFunc(plan.Tell(c, x.zone), func(s string) bool { return s == rules.ReleaseNote })
		x.Steps = append(x.Steps, Step{e.Index, e.At, c.Cause, c.From, c.To, strings.Join(told, " ")})
	}
}

// lookIn finds the look at the rule in a record, under the plan that the engine then has.
func (x *explainer) lookIn(e *rules.Event, out *rules.Outcomes) (LookAt, bool) {
	plan := x.state.Plan()
	for _, l := range out.Looks {
		if l.Rule >= len(plan.Rules) || plan.Rules[l.Rule].Name != x.Rule.Name {
			continue
		}
		at := LookAt{Record: e.Index, At: e.At, Withheld: l.Withheld}
		if e.Batch != nil {
			at.File = e.Batch.File
		}
		if l.Withheld == "" {
			p, q := l.Odds().Probability(), l.Odds().Contrary()
			at.Probability, at.Contrary = &p, &q
		}
		return at, true
	}
	return LookAt{}, false
}
