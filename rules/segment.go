package rules

import (
	"errors"
	"fmt"
	"time"

	"steelyard/rules/posterior"
)

func (s *State) applySegment(e *Event) (Outcomes, error) {
	if err := s.CheckSegment(e); err != nil {
		return Outcomes{}, err
	}
	fresh := map[string]*process{}
	for _, name := range e.Segment.Processes {
		p := *s.processes[name]
		memory := *p.memory
		p.memory = &memory
		if err := p.startSegment(e, name, s.history, func(index uint64) bool { return s.withdrawn[index] }); err != nil {
			return Outcomes{}, err
		}
		fresh[name] = &p
	}
	var out Outcomes
	due := map[string]bool{}
	for name, p := range fresh {
		s.processes[name] = p
		s.touched[processPiece+name] = true
		s.testsChanged(name, nil, p.tests != nil)
		due[name] = true
	}
	for _, r := range s.ready {
		if s.alarms[r.Name].active() && speaksOf(r.claim, due) {
			s.restart(e, r.Name, &out)
		}
	}
	if !e.Segment.Since.IsZero() {
		s.lookAt(e, due, &out)
	}
	return out, nil
}

// CheckSegment says in a sentence why an event that starts a segment would be refused; nil
// where it would not. It changes nothing.
func (s *State) CheckSegment(e *Event) error {
	since := e.Segment.Since
	switch {
	case len(e.Segment.Processes) == 0:
		return errors.New("no process is named that a segment could start for")
	case since.After(e.At):
		return fmt.Errorf("a segment can't start at %s, which is still to come", since.Format(time.RFC3339))
	case !since.IsZero() && s.history == nil:
		return errors.New("a segment can't start in the past without the journal before: the engine was not given any")
	}
	for _, name := range e.Segment.Processes {
		if _, _, ok := s.plan.split(name); !ok {
			return fmt.Errorf("there is no process %q in the plan", name)
		}
		if s.processes[name].tests != nil && !since.IsZero() {
			return fmt.Errorf("in %s %s, so a segment of it can only start with what arrives from now on: leave the time out",
				name, s.processes[name].Retests.Says())
		}
		if p := s.processes[name]; !since.IsZero() && since.Before(p.SegmentSince) {
			return fmt.Errorf("a segment of %s can't start at %s: the one that it would end began later, at %s",
				name, since.Format(time.RFC3339), p.SegmentSince.Format(time.RFC3339))
		}
	}
	return nil
}

// startSegment forgets what was measured before the event or, where the event says since when,
// before that; what has been measured since then is taken up again from the journal.
func (p *process) startSegment(e *Event, name string, h History, out func(index uint64) bool) error {
	began := p.Began
	p.memory.StartSegment()
	p.startGauge()
	p.Segment++
	p.Began, p.SegmentNote = e.Index, e.Segment.Note
	p.SegmentSince, p.SegmentFrom = e.At, e.Segment.Since
	if p.tests != nil {
		p.tests.base = posterior.NewMemory(p.Family, p.Remember)
	}
	if p.SegmentFrom.IsZero() {
		return nil
	}
	p.SegmentSince = p.SegmentFrom
	p.Began = began // what came since then may be in it
	return h.Events(began, e.Index, func(old *Event) error {
		if old.Batch == nil || out(old.Index) {
			return nil
		}
		for i := range old.Batch.Series {
			if series := &old.Batch.Series[i]; series.Process == name {
				p.remember(old, series, timesOf(old, series))
				p.gauged(old, series)
			}
		}
		return nil
	})
}

// restart returns an active alarm to normal because its evidence begins anew.
func (s *State) restart(e *Event, rule string, out *Outcomes) {
	c := Change{Cause: EvidenceRestart, Note: e.Segment.Note, By: e.Segment.By, How: e.Segment.How}
	s.step(e, rule, s.alarms[rule].without(), c, out)
}
