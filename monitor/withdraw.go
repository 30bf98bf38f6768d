package monitor

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"steelyard/rules"
)

// Withdrawal is what a person asks to be taken out: Batches, by their records, or every batch
// of a source of which a measurement was made at or after From and before To (the time of
// arrival, where the source has no times). A batch is taken out whole.
type Withdrawal struct {
	Batches  []uint64
	Source   string
	From, To time.Time
	Reason   string
	By, How  string
	Try      bool // say what would be taken out, and change nothing
}

// Withdrawn is what followed from a withdrawal.
type Withdrawn struct {
	Type    string           `json:"type"` // "withdrawn"
	Tried   bool             `json:"tried"`
	Record  uint64           `json:"record,omitempty"` // of the withdrawal; none where it was tried
	At      time.Time        `json:"at"`
	Reason  string           `json:"reason"`
	By      string           `json:"by"`
	How     string           `json:"how"`
	Batches []WithdrawnBatch `json:"batches"`
	Changes []Step           `json:"changes"`  // of alarms, that followed
	NotThen []PastRaise      `json:"not_then"` // raised before, and would not have been
	Then    []PastRaise      `json:"then"`     // not raised before, and would have been
	Before  uint64           `json:"before"`   // the record up to which the past was gone through
	Caution string           `json:"caution"`
}

// WithdrawnBatch is one batch that was taken out.
type WithdrawnBatch struct {
	Record uint64         `json:"record"`
	At     time.Time      `json:"at"`
	Source string         `json:"source"`
	File   string         `json:"file"`
	Values map[string]int `json:"values"`           // measurements of each process
	Beyond int            `json:"beyond,omitempty"` // rows measured before From, or from To on
}

// Withdraw takes batches out of what counts. The state is then as if they had never been
// counted, and the alarms follow; the answer says which raises of the past would not have
// happened. What is withdrawn stays in the journal.
func (d *Desk) Withdraw(w Withdrawal) (*Withdrawn, error) {
	if w.Reason = strings.TrimSpace(w.Reason); w.Reason == "" {
		return nil, errors.New("a withdrawal needs a reason: what was found, and how")
	}
	batches, err := d.toWithdraw(&w)
	if err != nil {
		return nil, err
	}
	a := &Withdrawn{Type: "withdrawn", Tried: w.Try, Reason: w.Reason, By: w.By, How: w.How, Batches: batches, Caution: rules.ReleaseNote}
	event := rules.Withdrawn{Source: w.Source, From: w.From, To: w.To, Reason: w.Reason, By: w.By, How: w.How}
	for _, b := range batches {
		event.Batches = append(event.Batches, b.Record)
	}
	a.At, a.Before = d.now(), d.store.Next()
	if !w.Try {
		if err := d.commitWithdrawal(event, a); err != nil {
			return nil, err
		}
	}
	out := map[uint64]bool{}
	for _, index := range event.Batches {
		out[index] = true
	}
	were, would, err := d.raisesWithout(out, a.Before)
	if err != nil && !w.Try {
		return nil, fmt.Errorf("the batches are withdrawn (record %d), but what would have happened without them can't be told: %w", a.Record, err)
	}
	if err != nil {
		return nil, err
	}
	a.NotThen, a.Then = compareRaises(were, would)
	return a, nil
}

func (d *Desk) commitWithdrawal(event rules.Withdrawn, a *Withdrawn) error {
	list := []happening{{event: rules.Event{Withdrawn: &event}}}
	outcomes, refused, err := d.commit(list)
	if err = errors.Join(err, refusal(refused)); err != nil {
		return err
	}
	e := &list[0].event
	d.report(e, &outcomes[0])
	a.Record, a.At, a.Before = e.Index, e.At, e.Index
	a.Changes = d.stepsOf(e, &outcomes[0])
	return nil
}

// refusal is the refusal of a single event.
func refusal(refused []error) error {
	if len(refused) > 0 {
		return refused[0]
	}
	return nil
}

// stepsOf are the changes of alarms in a record, in words.
func (d *Desk) stepsOf(e *rules.Event, out *rules.Outcomes) (steps []Step) {
	d.mu.Lock()
	plan := d.state.Plan()
	d.mu.Unlock()
	for i := range out.Changes {
		c := &out.Changes[i]
		told := slices.DeleteFunc(plan.Tell(c, d.cfg.Site.Zone), func(s string) bool { return s == rules.ReleaseNote })
		steps = append(steps, Step{e.Index, e.At, c.Cause, c.From, c.To, alarmName(c.Alarm) + ": " + strings.Join(told, " ")})
	}
	return steps
}

func alarmName(number int) string { return fmt.Sprintf("A%d", number) }

// toWithdraw reads the batches that are asked for, in the order of the journal.
func (d *Desk) toWithdraw(w *Withdrawal) (list []WithdrawnBatch, err error) {
	byStretch := w.Source != "" || !w.From.IsZero() || !w.To.IsZero()
	switch {
	case byStretch && len(w.Batches) > 0:
		return nil, errors.New("either batches are named by their records, or a source with two times: not both")
	case byStretch:
		return d.batchesWithin(w)
	case len(w.Batches) == 0:
		return nil, errors.New("no batch is named: records such as 12, or a source with two times, are expected")
	}
	indexes := slices.Compact(slices.Sorted(slices.Values(w.Batches)))
	for _, index := range indexes {
		if index >= d.store.Next() {
			return nil, fmt.Errorf("there is no record %d: the journal has %d", index, d.store.Next())
		}
		e, err := d.record(index)
		if err != nil {
			return nil, err
		}
		switch {
		case e.Batch == nil:
			return nil, fmt.Errorf("record %d counted no batch; explain and the log of the daemon name the records of batches", index)
		case d.isWithdrawn(index):
			return nil, fmt.Errorf("the batch of record %d (%s of %s) was withdrawn before", index, e.Batch.File, e.Batch.Source)
		}
		list = append(list, withdrawnBatch(e))
	}
	return list, nil
}

// record reads one event of the journal.
func (d *Desk) record(index uint64) (event *rules.Event, err error) {
	err = d.store.Journal(index, index+1, func(e rules.Event, _ rules.Outcomes) error {
		event = &e
		return nil
	})
	return event, err
}

func (d *Desk) isWithdrawn(index uint64) bool {
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.state.IsWithdrawn(index)
}

func withdrawnBatch(e *rules.Event) WithdrawnBatch {
	b := WithdrawnBatch{Record: e.Index, At: e.At, Source: e.Batch.Source, File: e.Batch.File, Values: map[string]int{}}
	for _, s := range e.Batch.Series {
		b.Values[s.Process] += len(s.Value)
	}
	return b
}

// batchesWithin are the batches of a source that count and have a measurement within a stretch.
func (d *Desk) batchesWithin(w *Withdrawal) (list []WithdrawnBatch, err error) {
	switch {
	case w.Source == "":
		return nil, errors.New("two times need the source whose batches are meant")
	case w.From.IsZero() || w.To.IsZero() || !w.From.Before(w.To):
		return nil, errors.New("the source needs two times, the first before the second")
	}
	indexes, err := d.store.Batches(w.Source, "")
	if err != nil {
		return nil, err
	}
	slices.Sort(indexes)
	for _, index := range indexes {
		if d.isWithdrawn(index) {
			continue
		}
		e, err := d.record(index)
		if err != nil {
			return nil, err
		}
		if within, beyond := rowsWithin(e, w.From, w.To); within > 0 {
			b := withdrawnBatch(e)
			b.Beyond = beyond
			list = append(list, b)
		}
	}
	if len(list) == 0 {
		return nil, fmt.Errorf("no batch of %s that counts has a measurement from %s up to %s", w.Source,
			w.From.In(d.cfg.Site.Zone).Format(time.RFC3339), w.To.In(d.cfg.Site.Zone).Format(time.RFC3339))
	}
	return list, nil
}

// rowsWithin counts the rows of a batch that were measured within a stretch, and the others.
func rowsWithin(e *rules.Event, from, to time.Time) (within, beyond int) {
	rows := &e.Batch.Rows
	for i := range rows.Line {
		at := e.At
		if rows.Time != nil {
			at = time.Unix(0, rows.Time[i])
		}
		if at.Before(from) || !at.Before(to) {
			beyond++
		} else {
			within++
		}
	}
	return within, beyond
}
