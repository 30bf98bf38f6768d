package rules

import (
	"encoding/json"
	"errors"
	"fmt"
	"slices"
)

// History is the journal that stands before the event being applied. Whoever drives a State
// with events that take batches out hands it one: run that over its store and what it has not
// committed yet, verify and explain that over the records they read.
type History interface {
	// Events gives the events from one index up to, but not including, another to visit, in
	// order; the error of visit ends it and is returned.
	Events(from, to uint64, visit func(*Event) error) error
}

// Consult tells the state where to read the journal before an event.
func (s *State) Consult(h History) { s.history = h }

// IsWithdrawn says whether the batch that an event counted has been withdrawn since.
func (s *State) IsWithdrawn(index uint64) bool { return s.withdrawn[index] }

// takesOut says whether the event takes batches out of what counts.
func (e *Event) takesOut() bool {
	return e.Withdrawn != nil || e.Batch != nil && len(e.Batch.Replaces) > 0
}

func (s *State) applyWithdrawn(e *Event) (Outcomes, error) {
	if e.Withdrawn.Reason == "" {
		return Outcomes{}, errors.New("a withdrawal needs a reason")
	}
	due, err := s.withdraw(e, e.Withdrawn.Batches)
	if err != nil {
		return Outcomes{}, err
	}
	var out Outcomes
	s.lookAt(e, due, &out)
	return out, nil
}

// withdraw makes the state what it would be had the batches never been counted, and says which
// processes that concerned. On an error nothing has changed.
func (s *State) withdraw(e *Event, batches []uint64) (map[string]bool, error) {
	first, err := s.concerned(e, batches)
	if err != nil {
		return nil, err
	}
	r, err := s.rebuild(e, first, batches)
	if err != nil {
		return nil, err
	}
	for _, index := range batches {
		s.withdrawn[index] = true
	}
	s.touched[withdrawnPiece] = true
	concerned := map[string]bool{}
	for name := range first {
		concerned[name] = true
		gone := s.processes[name].allTests()
		s.processes[name], s.recalls[name] = r.processes[name], r.recalls[name]
		s.touched[processPiece+name], s.touched[recallPiece+name] = true, true
		s.testsChanged(name, append(gone, s.processes[name].allTests()...), s.processes[name].tests != nil)
	}
	return concerned, nil
}

// concerned finds the processes that batches are about and, of each, the first of the batches.
// It refuses what can't be withdrawn.
func (s *State) concerned(e *Event, batches []uint64) (first map[string]uint64, err error) {
	if s.history == nil {
		return nil, errors.New("batches can't be withdrawn without the journal before: the engine was not given any")
	}
	if len(batches) == 0 {
		return nil, errors.New("no batch is named that could be withdrawn")
	}
	first = map[string]uint64{}
	for i, index := range batches {
		switch {
		case index >= e.Index:
			return nil, fmt.Errorf("record %d can't be withdrawn: the journal has no such record yet", index)
		case i > 0 && index <= batches[i-1]:
			return nil, fmt.Errorf("the batches to withdraw are to be named in ascending order, each once; %d follows %d", index, batches[i-1])
		case s.withdrawn[index]:
			return nil, fmt.Errorf("the batch of record %d was withdrawn before", index)
		}
		err := s.history.Events(index, index+1, func(old *Event) error {
			if old.Batch == nil {
				return fmt.Errorf("record %d can't be withdrawn: it counted no batch", index)
			}
			for _, series := range old.Batch.Series {
				if _, ok := first[series.Process]; !ok {
					first[series.Process] = index
				}
			}
			return nil
		})
		if err != nil {
			return nil, err
		}
	}
	return first, nil
}

// rebuilding is processes being made anew from the journal.
type rebuilding struct {
	state     *State
	from      map[string]uint64 // of each, the first event that is not in it yet
	out       map[uint64]bool   // batches that don't count
	processes map[string]*process
	recalls   map[string][]recall
}

// rebuild makes processes anew without the batches: of each, from the newest recall that is
// older than the first of them, else from the beginning.
func (s *State) rebuild(e *Event, first map[string]uint64, batches []uint64) (*rebuilding, error) {
	r := &rebuilding{
		state: s, from: map[string]uint64{}, out: map[uint64]bool{},
		processes: map[string]*process{}, recalls: map[string][]recall{},
	}
	for _, index := range batches {
		r.out[index] = true
	}
	from := e.Index
	for name, index := range first {
		if err := r.begin(name, index); err != nil {
			return nil, err
		}
		from = min(from, r.from[name])
	}
	return r, s.history.Events(from, e.Index, r.add)
}

// begin takes a process up at the newest recall before an event.
func (r *rebuilding) begin(name string, before uint64) error {
	list := r.state.recalls[name]
	for len(list) > 0 && list[len(list)-1].Index > before {
		list = list[:len(list)-1]
	}
	r.recalls[name], r.processes[name] = slices.Clone(list), nil
	if len(list) == 0 {
		return nil
	}
	at := list[len(list)-1]
	p := &process{}
	err := json.Unmarshal(at.Process, p)
	if err == nil {
		err = p.read()
	}
	if err == nil && at.Tests != nil {
		p.tests, err = at.Tests.read(p)
	}
	if err != nil {
		return fmt.Errorf("state of %s as it was before record %d: %w", name, at.Index, err)
	}
	r.processes[name], r.from[name] = p, at.Index
	return nil
}

// add does with one event of the journal what Apply did with the processes being made anew.
func (r *rebuilding) add(old *Event) error {
	switch {
	case old.Adopted != nil:
		old.Adopted.Plan.each(func(name string, c *Characteristic) {
			if r.concerns(name, old) {
				r.processes[name] = fitted(r.processes[name], c, old.Index)
			}
		})
	case old.Segment != nil:
		for _, name := range old.Segment.Processes {
			if !r.concerns(name, old) {
				continue
			}
			if err := r.processes[name].startSegment(old, name, r.state.history, r.isOut); err != nil {
				return err
			}
		}
	case old.Batch != nil && !r.isOut(old.Index):
		for _, series := range old.Batch.Series {
			if name := series.Process; r.concerns(name, old) {
				r.recalls[name] = r.state.remind(name, r.recalls[name], r.processes[name], old)
			}
		}
		for i := range old.Batch.Series {
			if series := &old.Batch.Series[i]; r.concerns(series.Process, old) {
				r.processes[series.Process].take(old, series)
			}
		}
	}
	return nil
}

// isOut says whether a batch does not count.
func (r *rebuilding) isOut(index uint64) bool { return r.out[index] || r.state.withdrawn[index] }

// concerns says whether an event of the journal is still to be added to a process.
func (r *rebuilding) concerns(name string, old *Event) bool {
	_, ok := r.processes[name]
	return ok && old.Index >= r.from[name]
}

// recall is a process as it was before an event: where a process is made anew from, so that
// withdrawing something recent does not read the whole journal. What the engine decides never
// rests on where the recalls are.
type recall struct {
	Index   uint64          `json:"index"`
	Process json.RawMessage `json:"process"`
	Tests   *tests          `json:"tests,omitempty"`
}

// recallEvery is how many batches of a process lie between two recalls of it, and mostRecalls
// how many of them are kept.
const (
	recallEvery = 256
	mostRecalls = 2
)

// remind adds a recall to those of a process when one is due before an event.
func (s *State) remind(name string, list []recall, p *process, e *Event) []recall {
	if p.Batches%s.every != s.every-1 || len(list) > 0 && list[len(list)-1].Index >= e.Index {
		return list
	}
	if p.write() != nil {
		return list // a recall saves time and nothing else
	}
	text, err := json.Marshal(p)
	if err != nil {
		return list
	}
	known, err := p.tests.copied()
	if err != nil {
		return list
	}
	list = append(slices.Clone(list), recall{e.Index, text, known})
	s.touched[recallPiece+name] = true
	return list[max(0, len(list)-mostRecalls):]
}

// copied are tests as they are now, to be kept; nil where there are none.
func (t *tests) copied() (c *tests, err error) {
	if t == nil {
		return nil, nil
	}
	c = &tests{}
	for _, b := range t.Batches {
		own := *b
		own.Out = slices.Clone(b.Out)
		c.Batches = append(c.Batches, &own)
	}
	c.Base, err = t.base.AppendBinary(nil)
	return c, err
}
