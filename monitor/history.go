package monitor

import (
	"steelyard/rules"
	"steelyard/store"
)

// history is the journal as the engine reads it: what is in the store and, behind that, what
// the commit at hand will add.
type history struct {
	store  *store.Store
	coming *[]store.Entry // nil where nothing is being committed
	out    map[uint64]bool
}

// Events is for rules.History. Of batches in out only what they held is shown.
func (h *history) Events(from, to uint64, visit func(*rules.Event) error) error {
	show := func(e *rules.Event) error {
		if h.out[e.Index] && e.Batch != nil {
			e = &rules.Event{Index: e.Index, At: e.At, Batch: &rules.Batch{Source: e.Batch.Source, File: e.Batch.File, Held: e.Batch.Held}}
		}
		return visit(e)
	}
	err := h.store.Journal(from, to, func(e rules.Event, _ rules.Outcomes) error { return show(&e) })
	if err != nil || h.coming == nil {
		return err
	}
	for i := range *h.coming {
		if e := &(*h.coming)[i].Event; from <= e.Index && e.Index < to {
			if err := show(e); err != nil {
				return err
			}
		}
	}
	return nil
}

// replaying is a fresh engine that reads the journal of the store.
func (d *Desk) replaying() *rules.State {
	state := rules.NewState()
	state.Consult(&history{store: d.store})
	return state
}
