package monitor

import (
	"errors"
	"time"

	"steelyard/rules"
)

// WithdrawnSince is a batch that an alarm rested on and that was withdrawn after it was raised.
type WithdrawnSince struct {
	Batch  uint64    `json:"batch"`  // the record that counted it
	Record uint64    `json:"record"` // the record that took it out
	At     time.Time `json:"at"`
	Reason string    `json:"reason"`
	By     string    `json:"by,omitempty"` // empty where another batch took its place
}

// withdrawnSince tells what an alarm rested on and no longer counts, and whether the alarm would
// have been raised at its record without it.
func (d *Desk) withdrawnSince(x *explainer, end uint64) error {
	gone := map[uint64]bool{}
	d.mu.Lock()
	for index := range x.rests {
		if d.state.IsWithdrawn(index) {
			gone[index] = true
		}
	}
	d.mu.Unlock()
	for index := range x.already {
		delete(gone, index)
	}
	if len(gone) == 0 {
		return nil
	}
	err := d.store.Journal(x.Crossing.Record+1, end, func(e rules.Event, _ rules.Outcomes) error {
		for _, w := range takenOut(&e) {
			if gone[w.Batch] {
				x.Withdrawn = append(x.Withdrawn, w)
			}
		}
		return nil
	})
	if err != nil || len(x.Withdrawn) == 0 {
		return err
	}
	_, would, err := d.raisesWithout(gone, x.Crossing.Record+1)
	if err != nil {
		return err
	}
	stands := false
	for _, r := range would {
		stands = stands || r.rule == x.Rule.Name && r.record == x.Crossing.Record
	}
	x.Stands = &stands
	return nil
}

// takenOut is what an event took out of what counts.
func takenOut(e *rules.Event) (list []WithdrawnSince) {
	switch {
	case e.Withdrawn != nil:
		for _, index := range e.Withdrawn.Batches {
			list = append(list, WithdrawnSince{index, e.Index, e.At, e.Withdrawn.Reason, e.Withdrawn.By})
		}
	case e.Batch != nil:
		for _, index := range e.Batch.Replaces {
			list = append(list, WithdrawnSince{index, e.Index, e.At, "file " + e.Batch.File + " of " + e.Batch.Source + " takes its place", ""})
		}
	}
	return list
}

// errSeenEnough ends a visit of the journal.
var errSeenEnough = errors.New("seen enough")
