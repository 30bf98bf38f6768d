package rules

import (
	"errors"
	"fmt"
	"slices"
)

// decide notes a decision to set something held aside.
func (s *State) decide(e *Event, d *Decided) error {
	if d.Take {
		return errors.New("a decision to take what was held comes with the batch that it brings")
	}
	if err := s.checkDecision(e, d); err != nil {
		return err
	}
	s.note(d)
	return nil
}

// IsDecided says whether a decision was made on a row that an event held, or on the file that it
// held whole, where line is 0.
func (s *State) IsDecided(held uint64, line int) bool { return slices.Contains(s.decided[held], line) }

func (s *State) note(d *Decided) {
	lines := d.Lines
	if len(lines) == 0 {
		lines = []int{0}
	}
	all := append(slices.Clone(s.decided[d.Held]), lines...)
	slices.Sort(all)
	s.decided[d.Held] = all
	s.touched[decidedPiece] = true
}

// checkDecision refuses a decision on what is not held, or was decided on before.
func (s *State) checkDecision(e *Event, d *Decided) error {
	switch {
	case d.Reason == "":
		return errors.New("a decision on what is held needs a reason")
	case s.history == nil:
		return errors.New("nothing held can be decided on without the journal before: the engine was not given any")
	case d.Held >= e.Index:
		return fmt.Errorf("record %d holds nothing: the journal has no such record yet", d.Held)
	}
	var rows []HeldRow
	err := s.history.Events(d.Held, d.Held+1, func(old *Event) error {
		switch {
		case old.Held != nil && len(d.Lines) > 0:
			return fmt.Errorf("record %d holds the file %s whole; it is decided on as a whole", d.Held, old.Held.File)
		case old.Held == nil && (old.Batch == nil || len(old.Batch.Held) == 0):
			return fmt.Errorf("record %d holds nothing", d.Held)
		case old.Held == nil && len(d.Lines) == 0:
			return fmt.Errorf("record %d counted the file %s and holds rows of it; a decision names their lines", d.Held, old.Batch.File)
		case old.Batch != nil:
			rows = old.Batch.Held
		}
		return nil
	})
	if err != nil {
		return err
	}
	if len(d.Lines) == 0 && s.IsDecided(d.Held, 0) {
		return fmt.Errorf("the file that record %d holds was decided on before", d.Held)
	}
	for i, line := range d.Lines {
		switch {
		case i > 0 && line <= d.Lines[i-1]:
			return fmt.Errorf("the lines to decide on are to be named in ascending order, each once; %d follows %d", line, d.Lines[i-1])
		case !slices.ContainsFunc(rows, func(r HeldRow) bool { return r.Line == line }):
			return fmt.Errorf("record %d holds no row of line %d", d.Held, line)
		case s.IsDecided(d.Held, line):
			return fmt.Errorf("line %d, which record %d holds, was decided on before", line, d.Held)
		}
	}
	return nil
}
