package rules

import (
	"encoding/json"
	"fmt"
	"maps"
	"math"
	"slices"
	"strings"
	"time"

	"steelyard/rules/claim"
	"steelyard/rules/evidence"
	"steelyard/rules/posterior"
)

// State is everything the engine knows. It is not safe for concurrent use: the monitor's one
// writer owns it, and readers are given copies.
type State struct {
	plan      Plan
	ready     []weighed
	rulesOf   map[string][]int // process to indexes of the rules that speak of it
	processes map[string]*process
	alarms    map[string]*alarm // rule name to its alarm
	counters  counters
	withdrawn map[uint64]bool     // batches that no longer count, by their index
	decided   map[uint64][]int    // lines of held rows that were decided on, by the event that held them; 0 of a file
	recalls   map[string][]recall // of each process, the older first
	history   History             // the journal before the event that is being applied
	every     int64               // batches of a process between two recalls of it
	touched   map[string]bool     // pieces changed since Pieces was last called

	scratch  []evidence.Process
	trusting bool // see Trust
}

// process is what the engine knows of one process.
type process struct {
	Family       posterior.Family   `json:"family"`
	Remember     posterior.Remember `json:"remember"`
	Retests      Retests            `json:"retests,omitzero"`
	Taken        int64              `json:"taken"`   // measurements since the store began
	Batches      int64              `json:"batches"` // that they came in
	Segment      int                `json:"segment"` // number of the segment, counted from 0
	SegmentSince time.Time          `json:"segment_since,omitzero"`
	SegmentNote  string             `json:"segment_note,omitempty"`
	SegmentFrom  time.Time          `json:"segment_from,omitzero"` // measurements made earlier do not count in the segment
	Began        uint64             `json:"began"`                 // the event with which the segment, or the process, began
	LastMeasured time.Time          `json:"last_measured,omitzero"`
	LastTaken    time.Time          `json:"last_taken,omitzero"`
	Memory       []byte             `json:"memory"`
	Gauge        *gauge             `json:"gauge,omitempty"` // nil where nothing is asked of the gauge

	memory *posterior.Memory
	tests  *tests // nil where no serial is known
}

// alarm is what the engine knows of one rule.
type alarm struct {
	Number   int        `json:"number"` // 0 before the first raise
	Step     int        `json:"step"`
	State    AlarmState `json:"state"`
	Since    time.Time  `json:"since,omitzero"` // of State
	Raised   time.Time  `json:"raised,omitzero"`
	Version  string     `json:"version"`
	Last     *Look      `json:"last,omitempty"`
	LastAt   time.Time  `json:"last_at,omitzero"`
	LookedAt uint64     `json:"looked_at"`        // event of the last look
	Counted  time.Time  `json:"counted,omitzero"` // of a quiet rule: when something was last counted
}

type counters struct {
	Alarms int `json:"alarms"` // raised so far
}

// NewState is the state before the first event.
func NewState() *State {
	return &State{
		rulesOf:   map[string][]int{},
		processes: map[string]*process{},
		alarms:    map[string]*alarm{},
		withdrawn: map[uint64]bool{},
		decided:   map[uint64][]int{},
		recalls:   map[string][]recall{},
		every:     recallEvery,
		touched:   map[string]bool{},
	}
}

// Names of the pieces a state is kept in.
const (
	planPiece      = "plan"
	countersPiece  = "counters"
	withdrawnPiece = "withdrawn"
	decidedPiece   = "decided"
	processPiece   = "process/"
	recallPiece    = "recall/"
	rulePiece      = "rule/"
)

// Pieces are the parts of the state that have changed since the last call, encoded, each
// under its name. Restore makes the state of them again, bit for bit.
func (s *State) Pieces() (map[string][]byte, error) {
	pieces := map[string][]byte{}
	for name := range s.touched {
		var part any
		switch {
		case strings.HasPrefix(name, testsPiece), strings.HasPrefix(name, basePiece):
			text, err := s.testsOf(name)
			if err != nil {
				return nil, fmt.Errorf("state of %s: %w", name, err)
			}
			pieces[name] = text
			continue
		case name == planPiece:
			part = &s.plan
		case name == countersPiece:
			part = &s.counters
		case strings.HasPrefix(name, processPiece):
			p := s.processes[strings.TrimPrefix(name, processPiece)]
			if err := p.write(); err != nil {
				return nil, fmt.Errorf("state of %s: %w", name, err)
			}
			part = p
		case name == withdrawnPiece:
			part = slices.Sorted(maps.Keys(s.withdrawn))
		case name == decidedPiece:
			part = s.decided
		case strings.HasPrefix(name, recallPiece):
			part = s.recalls[strings.TrimPrefix(name, recallPiece)]
		default:
			a, ok := s.alarms[strings.TrimPrefix(name, rulePiece)]
			if !ok {
				pieces[name] = nil
				continue
			}
			part = a
		}
		text, err := json.Marshal(part)
		if err != nil {
			return nil, fmt.Errorf("state of %s: %w", name, err)
		}
		pieces[name] = text
	}
	clear(s.touched)
	return pieces, nil
}

// Restore makes a state of its pieces. The error names the piece that can't be read.
func Restore(pieces map[string][]byte) (*State, error) {
	s := NewState()
	for name, text := range pieces {
		if err := s.restore(name, text); err != nil {
			return nil, fmt.Errorf("saved state %q: %w", name, err)
		}
	}
	if err := s.restoreTests(pieces); err != nil {
		return nil, err
	}
	ready, err := s.plan.compile()
	if err != nil {
		return nil, fmt.Errorf("saved plan: %w", err)
	}
	s.use(ready)
	return s, nil
}

func (s *State) restore(name string, text []byte) error {
	switch {
	case name == planPiece:
		return json.Unmarshal(text, &s.plan)
	case name == countersPiece:
		return json.Unmarshal(text, &s.counters)
	case strings.HasPrefix(name, processPiece):
		p := &process{}
		if err := json.Unmarshal(text, p); err != nil {
			return err
		}
		s.processes[strings.TrimPrefix(name, processPiece)] = p
		return p.read()
	case name == withdrawnPiece:
		var list []uint64
		if err := json.Unmarshal(text, &list); err != nil {
			return err
		}
		for _, index := range list {
			s.withdrawn[index] = true
		}
		return nil
	case strings.HasPrefix(name, testsPiece), strings.HasPrefix(name, basePiece):
		return nil // restoreTests
	case name == decidedPiece:
		return json.Unmarshal(text, &s.decided)
	case strings.HasPrefix(name, recallPiece):
		var list []recall
		s.recalls[strings.TrimPrefix(name, recallPiece)] = nil
		if err := json.Unmarshal(text, &list); err != nil {
			return err
		}
		s.recalls[strings.TrimPrefix(name, recallPiece)] = list
		return nil
	case strings.HasPrefix(name, rulePiece):
		a := &alarm{}
		if err := json.Unmarshal(text, a); err != nil {
			return err
		}
		s.alarms[strings.TrimPrefix(name, rulePiece)] = a
		return nil
	}
	return fmt.Errorf("no piece of that name belongs to a state")
}

// write encodes the memory into Memory; read decodes it from there.
func (p *process) write() (err error) {
	p.Memory, err = p.memory.AppendBinary(nil)
	return err
}

func (p *process) read() error {
	p.memory = posterior.NewMemory(p.Family, p.Remember)
	return p.memory.UnmarshalBinary(p.Memory)
}

// use puts compiled rules in force.
func (s *State) use(ready []weighed) {
	s.ready = ready
	clear(s.rulesOf)
	for i, r := range ready {
		for _, p := range r.claim.Processes {
			s.rulesOf[p] = append(s.rulesOf[p], i)
		}
	}
}

// Apply makes the state what it is after the event and says what followed. An event that
// can't be applied (it names a process, line or alarm that is not there) leaves the state as
// it was; the error is a sentence for whoever caused the event.
func (s *State) Apply(e *Event) (Outcomes, error) {
	switch {
	case e.Batch != nil:
		return s.applyBatch(e)
	case e.Adopted != nil:
		return s.applyAdopted(e)
	case e.Acknowledged != nil:
		return s.applyAcknowledged(e)
	case e.Segment != nil:
		return s.applySegment(e)
	case e.Withdrawn != nil:
		return s.applyWithdrawn(e)
	case e.Decided != nil:
		return Outcomes{}, s.decide(e, e.Decided)
	case e.Moment != nil:
		return s.applyMoment(e)
	case e.Stepped != nil, e.Started != nil, e.Stopped != nil, e.Held != nil, e.Again != nil, e.Watching != nil, e.Sealed != nil:
		return Outcomes{}, nil
	}
	return Outcomes{}, fmt.Errorf("event %d says nothing that the engine knows", e.Index)
}

func (s *State) applyBatch(e *Event) (Outcomes, error) {
	for k, series := range e.Batch.Series {
		if slices.ContainsFunc(e.Batch.Series[:k], func(other Series) bool { return other.Process == series.Process }) {
			return Outcomes{}, fmt.Errorf("source %s, file %s: the batch has two series of %s; one of each process is expected",
				e.Batch.Source, e.Batch.File, series.Process)
		}
		p, ok := s.processes[series.Process]
		if _, _, planned := s.plan.split(series.Process); !ok || !planned {
			return Outcomes{}, fmt.Errorf("source %s, file %s: there is no process %q in the plan",
				e.Batch.Source, e.Batch.File, series.Process)
		}
		for i, v := range series.Value {
			if err := p.Family.Accepts(v, series.of(i)); err != nil {
				return Outcomes{}, fmt.Errorf("source %s, file %s, line %d: %w",
					e.Batch.Source, e.Batch.File, e.Batch.Rows.Line[series.Row[i]], err)
			}
		}
		if err := s.acceptsBeyond(e.Batch, &series); err != nil {
			return Outcomes{}, err
		}
	}
	due := map[string]bool{}
	decision := e.Batch.Decided
	if decision != nil {
		if err := s.checkDecision(e, decision); err != nil {
			return Outcomes{}, err
		}
	} else if err := s.unlikely(e.Batch); err != nil {
		return Outcomes{}, err
	}
	if len(e.Batch.Replaces) > 0 {
		var err error
		if due, err = s.withdraw(e, e.Batch.Replaces); err != nil {
			return Outcomes{}, err
		}
	}
	if decision != nil {
		s.note(decision)
	}
	for _, series := range e.Batch.Series {
		name := series.Process
		s.recalls[name] = s.remind(name, s.recalls[name], s.processes[name], e)
		due[name] = true
	}
	var out Outcomes
	for i := range e.Batch.Series {
		s.take(e, &e.Batch.Series[i], &out)
	}
	s.lookAt(e, due, &out)
	s.heard(e, &out)
	return out, nil
}

// lookAt evaluates the rules that speak of any of the processes, in the order of the plan.
func (s *State) lookAt(e *Event, processes map[string]bool, out *Outcomes) {
	for i := range s.ready {
		if speaksOf(s.ready[i].claim, processes) {
			s.look(e, i, out)
		}
	}
}

func speaksOf(c *claim.Claim, processes map[string]bool) bool {
	return slices.ContainsFunc(c.Processes, func(p string) bool { return processes[p] })
}

// of is the number looked at, or the exposure, of observation i.
func (s *Series) of(i int) float64 {
	if s.Of == nil {
		return 1
	}
	return s.Of[i]
}

// take adds a series to what its process remembers.
func (s *State) take(e *Event, series *Series, out *Outcomes) {
	p := s.processes[series.Process]
	n := p.take(e, series)
	out.Remarks = append(out.Remarks, n.remarks(p, e, series)...)
	s.touched[processPiece+series.Process] = true
	s.testsChanged(series.Process, n.changed, n.settled)
}

// take adds a series to what the process knows, and says what became of it.
func (p *process) take(e *Event, series *Series) (n tally) {
	times := timesOf(e, series)
	p.Taken += int64(len(times))
	p.Batches++
	p.LastTaken = e.At
	if len(times) > 0 {
		if last := time.Unix(0, slices.Max(times)).UTC(); last.After(p.LastMeasured) {
			p.LastMeasured = last
		}
	}
	stuck := p.gauged(e, series)
	if p.tests != nil {
		n = p.test(e, series, times)
	} else {
		n.before = p.remember(e, series, times)
	}
	n.stuck = stuck
	return n
}

// timesOf are the times at which a series was measured; that of the event where the source has none.
func timesOf(e *Event, series *Series) []int64 {
	times := make([]int64, len(series.Value))
	for i, row := range series.Row {
		times[i] = e.At.UnixNano()
		if e.Batch.Rows.Time != nil {
			times[i] = e.Batch.Rows.Time[row]
		}
	}
	return times
}

// remember adds what of a series belongs to the segment to the memory.
func (p *process) remember(e *Event, series *Series, times []int64) (before int) {
	values, of := series.Value, series.Of
	if from := p.SegmentFrom; !from.IsZero() && slices.ContainsFunc(times, func(t int64) bool { return t < from.UnixNano() }) {
		values, of, times, before = since(from.UnixNano(), values, of, times)
		if len(values) == 0 {
			return before
		}
	}
	p.memory.AddBatch(values, of, notLater(times, e.At))
	return before
}

// since leaves out the measurements made before a moment, and counts them.
func since(from int64, values, of []float64, times []int64) (v, o []float64, t []int64, before int) {
	for i := range values {
		if times[i] < from {
			before++
			continue
		}
		v, t = append(v, values[i]), append(t, times[i])
		if of != nil {
			o = append(o, of[i])
		}
	}
	return v, o, t, before
}

func (s *State) applyAdopted(e *Event) (Outcomes, error) {
	plan := e.Adopted.Plan
	ready, err := plan.compile()
	if err != nil {
		return Outcomes{}, err
	}
	var out Outcomes
	if len(s.ready) > 0 || len(s.plan.Characteristics) > 0 {
		out.Remarks = differences(&s.plan, &plan)
	}
	before := s.ready
	s.plan = plan
	s.touched[planPiece] = true
	s.touched[countersPiece] = true
	s.fitProcesses(e, &out)
	s.use(ready)
	versions := map[string]string{}
	for _, r := range ready {
		versions[r.Name] = r.version
	}
	for _, r := range before {
		if a, ok := s.alarms[r.Name]; ok && versions[r.Name] != a.Version {
			s.retire(e, r.Name, &out)
		}
	}
	for i, r := range ready {
		if _, ok := s.alarms[r.Name]; !ok {
			s.alarms[r.Name] = &alarm{State: Normal, Version: r.version}
			s.touched[rulePiece+r.Name] = true
			s.look(e, i, &out)
		}
	}
	return out, nil
}

// fitProcesses makes a process for each the plan has, and starts one anew whose family or
// way of remembering has changed: what it held does not answer the new question.
func (s *State) fitProcesses(e *Event, out *Outcomes) {
	s.plan.each(func(name string, c *Characteristic) {
		old := s.processes[name]
		if old != nil && old.asked() != c.Gauge {
			s.touched[processPiece+name] = true
		}
		p := fitted(old, c, e.Index)
		if p == old {
			return
		}
		if old != nil {
			out.Remarks = append(out.Remarks, fmt.Sprintf(
				"%s: its family, what it remembers or which test of a serial counts has changed, so its evidence starts anew", name))
		}
		gone := old.allTests()
		s.processes[name] = p
		s.touched[processPiece+name] = true
		s.testsChanged(name, gone, true)
	})
}

// fitted is the process as a characteristic now wants it: itself where it fits, else one that
// starts anew with the event. There may have been none before.
func fitted(old *process, c *Characteristic, event uint64) *process {
	if old != nil && old.Family == c.Family && old.Remember == c.Remember && old.Retests == c.Retests {
		old.fitGauge(c)
		return old
	}
	p := &process{Family: c.Family, Remember: c.Remember, Retests: c.Retests, Began: event}
	p.memory, p.tests = posterior.NewMemory(c.Family, c.Remember), newTests(p)
	p.fitGauge(c)
	if old != nil {
		p.Taken, p.Batches, p.Segment = old.Taken, old.Batches, old.Segment+1
		p.LastMeasured, p.LastTaken = old.LastMeasured, old.LastTaken
	}
	return p
}

// retire ends the alarm of a rule that is gone or is no longer the same rule.
func (s *State) retire(e *Event, name string, out *Outcomes) {
	a := s.alarms[name]
	if a.State != Normal {
		s.step(e, name, Normal, Change{Cause: PlanChanged}, out)
	}
	delete(s.alarms, name)
	s.touched[rulePiece+name] = true
}

// active says whether the condition of the alarm stands.
func (a *alarm) active() bool { return a.State == Unacknowledged || a.State == Acked }

// without is the state of an active alarm once its condition no longer stands.
func (a *alarm) without() AlarmState {
	if a.State == Unacknowledged {
		return Returned
	}
	return Normal
}

func (s *State) applyAcknowledged(e *Event) (Outcomes, error) {
	ack := e.Acknowledged
	for _, r := range s.ready {
		a := s.alarms[r.Name]
		if a.Number != ack.Alarm || a.Number == 0 {
			continue
		}
		var out Outcomes
		change := Change{Cause: Answered, By: ack.By, How: ack.How, Note: ack.Note}
		switch a.State {
		case Unacknowledged:
			s.step(e, r.Name, Acked, change, &out)
		case Returned:
			s.step(e, r.Name, Normal, change, &out)
		default:
			return Outcomes{}, fmt.Errorf("alarm A%d does not wait for an answer: it is %s", ack.Alarm, a.State)
		}
		return out, nil
	}
	if ack.Alarm > 0 && ack.Alarm <= s.counters.Alarms {
		return Outcomes{}, fmt.Errorf("alarm A%d is over: its rule has raised again since, or is no longer in the plan", ack.Alarm)
	}
	return Outcomes{}, fmt.Errorf("there is no alarm A%d; %d have been raised so far", ack.Alarm, s.counters.Alarms)
}

// step moves the alarm of a rule to a state and records the change.
func (s *State) step(e *Event, rule string, to AlarmState, c Change, out *Outcomes) {
	a := s.alarms[rule]
	a.Step++
	c.Alarm, c.Step, c.Rule, c.Version = a.Number, a.Step, rule, a.Version
	c.From, c.To, c.At = a.State, to, e.At
	if e.Batch != nil {
		c.Source, c.File = e.Batch.Source, e.Batch.File
	}
	if w := e.Withdrawn; w != nil {
		c.Note, c.By, c.How = w.Reason, w.By, w.How
	}
	a.State, a.Since = to, e.At
	s.touched[rulePiece+rule] = true
	out.Changes = append(out.Changes, c)
}

// look evaluates rule i and moves its alarm.
func (s *State) look(e *Event, i int, out *Outcomes) {
	r := &s.ready[i]
	if r.Quiet != nil {
		s.listen(e, i)
		return
	}
	a := s.alarms[r.Name]
	s.age(e, r.claim)
	look := s.weigh(i)
	a.Last, a.LastAt, a.LookedAt = &look, e.At, e.Index
	s.touched[rulePiece+r.Name] = true
	out.Looks = append(out.Looks, look)
	if look.Withheld != "" {
		if a.active() && e.takesOut() {
			s.step(e, r.Name, a.without(), Change{Cause: TakenOut}, out)
		}
		return
	}
	p := look.Odds().Probability()
	switch {
	case p >= r.Raise && !a.active():
		s.raise(e, i, look, out)
	case p <= r.Clear && a.active():
		cause := Cleared
		if e.takesOut() {
			cause = TakenOut
		}
		s.step(e, r.Name, a.without(), s.figures(i, look, cause), out)
	}
}

// age lets what has left a window of time go from the processes of a claim, so that a look rests
// on the window as it is at the event, also for a line that is idle.
func (s *State) age(e *Event, c *claim.Claim) {
	for _, name := range c.Processes {
		if s.processes[name].pass(e.At) {
			s.touched[processPiece+name] = true
		}
	}
}

// raise begins a new alarm of rule i, and ends the one before it if that was never answered.
func (s *State) raise(e *Event, i int, look Look, out *Outcomes) {
	name := s.ready[i].Name
	if s.alarms[name].State == Returned {
		s.step(e, name, Normal, Change{Cause: Replaced}, out)
	}
	s.counters.Alarms++
	s.touched[countersPiece] = true
	a := s.alarms[name]
	a.Number, a.Step, a.Raised = s.counters.Alarms, 0, e.At
	s.step(e, name, Unacknowledged, s.figures(i, look, Raised), out)
}

// figures are the numbers of a look that people are told.
func (s *State) figures(i int, look Look, cause Cause) Change {
	c := Change{Cause: cause, Look: &look}
	r := &s.ready[i]
	if q, err := evidence.Estimate(r.claim, s.believed(r.claim)); err == nil && finite(q.Median, q.Lower, q.Upper) {
		c.Quantity = &q
	}
	for _, p := range r.claim.Processes {
		c.Units = append(c.Units, Units{p, units(s.processes[p])})
	}
	return c
}

func finite(xs ...float64) bool {
	for _, x := range xs {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return false
		}
	}
	return true
}

// weigh evaluates rule i.
func (s *State) weigh(i int) Look {
	r := &s.ready[i]
	for _, name := range r.claim.Processes {
		if n, need := units(s.processes[name]), r.needs(name); n < need {
			return Look{Rule: i, Withheld: fmt.Sprintf("%s has %s of the %s units the rule waits for",
				name, number(n), number(need))}
		}
	}
	if why := s.censored(r.claim.Processes); why != "" {
		return Look{Rule: i, Withheld: why}
	}
	odds, err := evidence.Weigh(r.claim, s.believed(r.claim))
	if err != nil {
		return Look{Rule: i, Withheld: err.Error()}
	}
	return Look{Rule: i, LogFor: max(odds.LogFor, LogZero), LogAgainst: max(odds.LogAgainst, LogZero)}
}

// units is how many units a process's evidence rests on; fractional under a discount.
func units(p *process) float64 {
	return p.memory.Sums().Units(p.Family)
}

// believed fills the scratch slice with what a claim's processes are believed to be.
func (s *State) believed(c *claim.Claim) []evidence.Process {
	s.scratch = s.scratch[:0]
	for _, name := range c.Processes {
		s.scratch = append(s.scratch, s.belief(name))
	}
	return s.scratch
}

func (s *State) belief(name string) evidence.Process {
	c, _, _ := s.plan.split(name)
	lower, upper := c.Limits()
	post := c.Prior.Posterior(c.Family, s.processes[name].memory.Sums())
	return evidence.Process{Posterior: post, Lower: lower, Upper: upper}
}
