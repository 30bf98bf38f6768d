// Package exhibit makes of one crossing a page that proves itself: one HTML file, printable, without scripts, that
// holds the journal's records the crossing rests on, the proof that each of them is in the journal
// under a signed checkpoint, and what they say, in words and drawings.
//
// The page is a function of what it holds, and of nothing else: the engine is driven with the records, and
// what it gives is what is shown. So Check, which needs no store, can hold every line of the page against the
// records, the records against their proofs, and the proofs against the key.
//
//	<!doctype html> … the page …
//	<script type="application/json" id="records"> Content as JSON </script>
//
// Content is of format 1. A reader refuses another.
package exhibit

import (
	"encoding/base64"
	"encoding/json"
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"
	"time"

	"steelyard/rules"
	"steelyard/rules/posterior"
	"steelyard/store"
	"steelyard/store/ledger"
)

// Content is what a page holds.
type Content struct {
	Format     int    `json:"format"`
	Alarm      int    `json:"alarm"`
	Zone       string `json:"zone"`       // of the times on the page, as the IANA names it
	Verifying  string `json:"verifying"`  // the key to verify with, as the store names it
	Checkpoint string `json:"checkpoint"` // signed
	Items      []Item `json:"items"`      // in the order of the journal
	LeftOut    int    `json:"left_out"`   // batches that the evidence rests on as well, and that were too many
}

// Item is one record with its proof.
type Item struct {
	Index  uint64   `json:"index"`
	Record string   `json:"record"` // its bytes, in base64
	Hashes []string `json:"hashes"` // RFC 6962, section 2.1.1
}

const format = 1

// mostRows is how many measured rows a page holds at most; the oldest batches are left out beyond.
const mostRows = 200_000

// Collect takes from a store what belongs on the page of one alarm.
func Collect(s *store.Store, alarm int, zone *time.Location) (*Content, error) {
	steps, err := s.AlarmRecords(alarm)
	if err != nil {
		return nil, err
	}
	if len(steps) == 0 {
		return nil, fmt.Errorf("there is no alarm A%d in the journal", alarm)
	}
	c := &collector{steps: steps, crossing: steps[0], alarm: alarm, plan: map[string]setting{}}
	if err := s.Journal(c.crossing, c.crossing+1, c.begin); err != nil {
		return nil, err
	}
	if err := s.Journal(0, c.crossing, c.before); err != nil {
		return nil, err
	}
	content := &Content{Format: format, Alarm: alarm, Zone: zone.String(), Verifying: s.Verifying()}
	wanted := c.wanted(content)
	for _, index := range wanted {
		p, err := s.Prove(index)
		if err != nil {
			return nil, err
		}
		item := Item{Index: index}
		for _, h := range p.Hashes {
			item.Hashes = append(item.Hashes, h.String())
		}
		if content.Checkpoint != "" && content.Checkpoint != string(p.Checkpoint) {
			return Collect(s, alarm, zone) // the journal went on meanwhile: all under one checkpoint
		}
		content.Checkpoint = string(p.Checkpoint)
		if err := s.Records(index, index+1, func(_ uint64, record []byte) error {
			item.Record = base64.StdEncoding.EncodeToString(record)
			return nil
		}); err != nil {
			return nil, err
		}
		content.Items = append(content.Items, item)
	}
	return content, nil
}

// collector goes through the journal up to a crossing and keeps the numbers of what it rests on.
type collector struct {
	steps     []uint64
	crossing  uint64
	alarm     int
	at        time.Time
	processes []string
	plan      map[string]setting // of each process of the claim
	started   uint64
	adopted   uint64
	segments  []uint64
	batches   []taken
	any       bool // something was started
}

// setting is what, when it changes, starts a process's evidence anew.
type setting struct {
	family   posterior.Family
	remember posterior.Remember
}

// taken is a batch with what it brought to each process.
type taken struct {
	index uint64
	at    time.Time
	rows  int
	units map[string]int
}

func (c *collector) begin(e rules.Event, out rules.Outcomes) error {
	for _, change := range out.Changes {
		if change.Alarm == c.alarm && change.Cause == rules.Raised {
			for _, u := range change.Units {
				c.processes = append(c.processes, u.Process)
			}
			c.at = e.At
			return nil
		}
	}
	return fmt.Errorf("the record %d does not raise A%d", e.Index, c.alarm)
}

func (c *collector) before(e rules.Event, _ rules.Outcomes) error {
	switch {
	case e.Started != nil:
		c.started, c.any = e.Index, true
	case e.Adopted != nil:
		c.adopt(&e)
	case e.Segment != nil:
		c.startSegment(&e)
	case e.Withdrawn != nil:
		c.takeOut(e.Withdrawn.Batches)
	case e.Batch != nil:
		c.takeOut(e.Batch.Replaces)
		t := taken{e.Index, e.At, len(e.Batch.Rows.Line), map[string]int{}}
		for _, s := range e.Batch.Series {
			if slices.Contains(c.processes, s.Process) {
				t.units[s.Process] += len(s.Value)
			}
		}
		if len(t.units) > 0 {
			c.batches = append(c.batches, t)
		}
	}
	return nil
}

func (c *collector) adopt(e *rules.Event) {
	c.adopted = e.Index
	for i := range e.Adopted.Plan.Characteristics {
		ch := &e.Adopted.Plan.Characteristics[i]
		for _, line := range ch.Lines {
			name := rules.ProcessName(ch.Name, line)
			now := setting{ch.Family, ch.Remember}
			if was, ok := c.plan[name]; ok && was != now {
				c.forget(name)
			}
			c.plan[name] = now
		}
	}
}

// startSegment lets go of what stood before, unless the segment began in the past: then some of it counts.
func (c *collector) startSegment(e *rules.Event) {
	concerned := false
	for _, name := range e.Segment.Processes {
		if slices.Contains(c.processes, name) {
			concerned = true
			if e.Segment.Since.IsZero() {
				c.forget(name)
			}
		}
	}
	if concerned {
		c.segments = append(c.segments, e.Index)
	}
}

func (c *collector) forget(process string) {
	for i := range c.batches {
		delete(c.batches[i].units, process)
	}
	c.batches = slices.DeleteFunc(c.batches, func(t taken) bool { return len(t.units) == 0 })
}

func (c *collector) takeOut(batches []uint64) {
	c.batches = slices.DeleteFunc(c.batches, func(t taken) bool { return slices.Contains(batches, t.index) })
}

// wanted are the numbers of the records for the page.
func (c *collector) wanted(content *Content) []uint64 {
	set := map[uint64]bool{c.adopted: true, c.crossing: true}
	if c.any {
		set[c.started] = true
	}
	for _, i := range slices.Concat(c.segments, c.steps) {
		set[i] = true
	}
	have, rows := map[string]int{}, 0
	for _, t := range slices.Backward(c.batches) {
		needed := false
		for name, n := range t.units {
			needed = needed || c.reaches(name, have[name], t.at)
			have[name] += n
		}
		switch {
		case !needed:
		case rows+t.rows > mostRows:
			content.LeftOut++
		default:
			rows += t.rows
			set[t.index] = true
		}
	}
	return slices.Sorted(maps.Keys(set))
}

// reaches says whether what a process remembers reaches back to a batch, behind which it has taken some units.
func (c *collector) reaches(process string, behind int, at time.Time) bool {
	r := c.plan[process].remember
	switch {
	case r.Units > 0:
		return behind < r.Units
	case r.Hours > 0:
		return at.After(c.at.Add(-time.Duration(r.Hours * float64(time.Hour))))
	}
	return true
}

// Checked is what Check found.
type Checked struct {
	Type        string `json:"type"` // "exhibit verified"
	Alarm       string `json:"alarm"`
	Records     int    `json:"records"`
	Rows        int    `json:"rows"`
	Under       uint64 `json:"under"` // records of the checkpoint
	Origin      string `json:"origin"`
	Key         string `json:"key"`
	KeyHandedIn bool   `json:"key_handed_in"`
	Driven      bool   `json:"driven"` // the probability at the crossing follows from the rows of the page
	Says        string `json:"says"`
	Caution     string `json:"caution"`
}

// Check verifies a page by itself: every record is in the journal under the checkpoint, which is signed with one
// of the keys (the page's own where none is given); the probability at the crossing follows from the rows;
// and the page is, byte for byte, the one that these records make.
func Check(page []byte, keys []string) (*Checked, error) {
	content, err := contentOf(page)
	if err != nil {
		return nil, err
	}
	key := content.Verifying
	if keys != nil {
		if !slices.Contains(keys, key) {
			return nil, errors.New("the exhibit is signed with another key than the one handed in")
		}
	}
	entries, under, err := content.open(key)
	if err != nil {
		return nil, err
	}
	d, err := drive(content, entries)
	if err != nil {
		return nil, err
	}
	if content.LeftOut == 0 && !d.follows() {
		return nil, fmt.Errorf("the probability recorded at the crossing, %.17g, does not follow from the rows, which give %.17g",
			math.Exp(d.recorded.LogFor), math.Exp(d.again.LogFor))
	}
	if again, err := d.page(); err != nil || string(again) != string(page) {
		return nil, errors.Join(errors.New("the page is not the one that its records make: what it shows was changed"), err)
	}
	return &Checked{Type: "exhibit verified", Alarm: fmt.Sprintf("A%d", content.Alarm), Records: len(entries), Rows: d.rows, Under: under.Size,
		Origin: under.Origin, Key: key, KeyHandedIn: keys != nil, Driven: content.LeftOut == 0, Says: d.raisedText, Caution: rules.ReleaseNote}, nil
}

// open decodes the records and checks every proof.
func (c *Content) open(key string) (entries []*store.Entry, under ledger.Checkpoint, err error) {
	if c.Format != format {
		return nil, under, fmt.Errorf("the exhibit has format %d and this program reads %d", c.Format, format)
	}
	for _, item := range c.Items {
		record, err := base64.StdEncoding.DecodeString(item.Record)
		if err != nil {
			return nil, under, fmt.Errorf("record %d: %w", item.Index, err)
		}
		p := ledger.Proof{Index: item.Index, Checkpoint: []byte(c.Checkpoint)}
		for _, text := range item.Hashes {
			h, err := ledger.ParseHash(text)
			if err != nil {
				return nil, under, fmt.Errorf("record %d: %w", item.Index, err)
			}
			p.Hashes = append(p.Hashes, h)
		}
		if under, err = p.Check(record, key); err != nil {
			return nil, under, fmt.Errorf("record %d: %w", item.Index, err)
		}
		e, err := store.Decode(record)
		if err != nil {
			return nil, under, fmt.Errorf("record %d: %w", item.Index, err)
		}
		if e.Event.Index != item.Index {
			return nil, under, fmt.Errorf("record %d says that it is record %d", item.Index, e.Event.Index)
		}
		entries = append(entries, e)
	}
	return entries, under, nil
}

// Page makes the page of what was collected.
func Page(c *Content) ([]byte, error) {
	entries, _, err := c.open(c.Verifying)
	if err != nil {
		return nil, err
	}
	d, err := drive(c, entries)
	if err != nil {
		return nil, err
	}
	return d.page()
}

func contentOf(page []byte) (*Content, error) {
	text, err := between(string(page), openRecords, closeRecords)
	if err != nil {
		return nil, err
	}
	c := &Content{}
	if err := json.Unmarshal([]byte(text), c); err != nil {
		return nil, fmt.Errorf("the records of the exhibit can't be read: %w", err)
	}
	return c, nil
}
