package monitor

import (
	"fmt"
	"time"

	"steelyard/rules"
)

// PastRaise is an alarm that was raised and would not have been, at that record, without some
// batches; or one that would have been raised and was not.
type PastRaise struct {
	Alarm     string     `json:"alarm,omitempty"` // empty of one that was not raised
	Rule      string     `json:"rule"`
	Says      string     `json:"says"`
	Record    uint64     `json:"record"`
	At        time.Time  `json:"at"`
	Instead   *uint64    `json:"instead,omitempty"` // the record at which it would have been raised
	InsteadAt *time.Time `json:"instead_at,omitempty"`
}

// raise is one alarm being raised.
type raise struct {
	alarm  int
	rule   string
	says   string
	record uint64
	at     time.Time
}

// raisesWithout goes through the records up to one and says which alarms were raised, and which
// would have been had some batches never been counted.
func (d *Desk) raisesWithout(out map[uint64]bool, to uint64) (were, would []raise, err error) {
	state := rules.NewState()
	state.Trust()
	state.Consult(&history{store: d.store, out: out})
	err = d.store.Journal(0, to, func(e rules.Event, outcomes rules.Outcomes) error {
		var without rules.Outcomes
		if left := e; lacking(&left, out) {
			var err error
			if without, err = state.Apply(&left); err != nil {
				return fmt.Errorf("record %d, without what is withdrawn: %w", e.Index, err)
			}
		}
		plan := state.Plan()
		add := func(list []raise, o *rules.Outcomes) []raise {
			for _, c := range o.Changes {
				if c.Cause == rules.Raised && c.Look != nil { // not one of a quiet rule: what arrived, arrived
					list = append(list, raise{c.Alarm, c.Rule, plan.Says(c.Rule), e.Index, e.At})
				}
			}
			return list
		}
		were, would = add(were, &outcomes), add(would, &without)
		return nil
	})
	return were, would, err
}

// lacking makes of an event what it would have been without some batches; it is false where
// nothing is left of it. Answers are left out: the alarms would have other numbers, and no
// answer changes what is raised.
func lacking(e *rules.Event, out map[uint64]bool) bool {
	left := func(batches []uint64) (list []uint64) {
		for _, index := range batches {
			if !out[index] {
				list = append(list, index)
			}
		}
		return list
	}
	switch {
	case e.Acknowledged != nil, e.Moment != nil:
		return false
	case e.Withdrawn != nil:
		w := *e.Withdrawn
		w.Batches, e.Withdrawn = left(w.Batches), &w
		return len(w.Batches) > 0
	case e.Batch == nil:
		return true
	}
	b := *e.Batch
	b.Replaces, e.Batch = left(b.Replaces), &b
	if !out[e.Index] {
		return true
	}
	// What it took the place of does not count again.
	e.Batch, e.Withdrawn = nil, &rules.Withdrawn{Batches: b.Replaces, Reason: "replaced"}
	return len(b.Replaces) > 0
}

// compareRaises finds the raises on one side only. One that would have come at another record,
// between the raises of the same rule before and after it, is told as that.
func compareRaises(were, would []raise) (not, more []PastRaise) {
	type key struct {
		rule   string
		record uint64
	}
	has := func(list []raise) map[key]bool {
		m := map[key]bool{}
		for _, r := range list {
			m[key{r.rule, r.record}] = true
		}
		return m
	}
	wereAt, wouldAt := has(were), has(would)
	told := map[key]bool{} // as coming instead of another
	for i, r := range were {
		if wouldAt[key{r.rule, r.record}] {
			continue
		}
		p := PastRaise{Alarm: alarmName(r.alarm), Rule: r.rule, Says: r.says, Record: r.record, At: r.at}
		before, after := neighbours(were, i)
		for _, w := range would {
			k := key{w.rule, w.record}
			if w.rule == r.rule && w.record >= before && w.record < after && !wereAt[k] && !told[k] {
				told[k] = true
				p.Instead, p.InsteadAt = &w.record, &w.at
				break
			}
		}
		not = append(not, p)
	}
	for _, w := range would {
		if k := (key{w.rule, w.record}); !wereAt[k] && !told[k] {
			more = append(more, PastRaise{Rule: w.rule, Says: w.says, Record: w.record, At: w.at})
		}
	}
	return not, more
}

// neighbours are the records of the raises of the same rule before and after one.
func neighbours(list []raise, i int) (before, after uint64) {
	after = ^uint64(0)
	for k, r := range list {
		switch {
		case r.rule != list[i].rule:
		case k < i:
			before = r.record
		case k > i:
			return before, r.record
		}
	}
	return before, after
}
