package monitor

import (
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/monitor/intake"
	"steelyard/rules"
	"steelyard/store"
)

// HeldItem is one file held whole, or one row of a file that was counted, with what became of it.
type HeldItem struct {
	Type    string          `json:"type"` // "held"
	Held    string          `json:"held"` // its name for a decision: 12 a file, 12:5 a row
	Record  uint64          `json:"record"`
	At      time.Time       `json:"at"`
	Source  string          `json:"source"`
	File    string          `json:"file"`
	Line    int             `json:"line,omitempty"` // 0: a file held whole
	Reason  string          `json:"reason"`
	Text    string          `json:"text,omitempty"` // of a row, as it was written
	Rows    []rules.HeldRow `json:"rows,omitempty"` // of a file held whole, where it was read that far
	Size    int64           `json:"size,omitempty"`
	Kept    string          `json:"kept,omitempty"` // the copy of the file, absolute; empty where there is none
	Decided bool            `json:"decided"`
}

// HeldRef names something held: the record that holds it and, of a counted file, the line of the
// row; all its rows that wait where Line is 0.
type HeldRef struct {
	Record uint64
	Line   int
}

// Decision is what a person decides on something held.
type Decision struct {
	HeldRef
	Take    bool // count it after all; else it is set aside for good
	Replace bool // taking a file: in the place of what its name brought before
	Reason  string
	By, How string
}

// HeldDecided is what followed from a decision.
type HeldDecided struct {
	Type      string    `json:"type"` // "decided"
	Record    uint64    `json:"record"`
	At        time.Time `json:"at"`
	Held      uint64    `json:"held"`
	Lines     []int     `json:"lines,omitempty"`
	Take      bool      `json:"take"`
	Reason    string    `json:"reason"`
	By        string    `json:"by"`
	How       string    `json:"how"`
	File      string    `json:"file"`
	Source    string    `json:"source"`
	Rows      int       `json:"rows"`       // that count now
	StillHeld int       `json:"still_held"` // rows of a taken file that are held in turn
	Changes   []Step    `json:"changes"`
	Caution   string    `json:"caution"`
}

// Held lists what waits for a decision, the oldest first.
func (d *Desk) Held() (items []HeldItem, err error) {
	waiting, err := d.store.Waiting()
	if err != nil {
		return nil, err
	}
	for _, w := range waiting {
		all, err := d.ShowHeld(HeldRef{Record: w.Record})
		if err != nil {
			return nil, err
		}
		for _, i := range all {
			if !i.Decided {
				i.Rows = nil
				items = append(items, i)
			}
		}
	}
	return items, nil
}

// ShowHeld shows what a record holds: the file, or its rows, decided on or not.
func (d *Desk) ShowHeld(ref HeldRef) (items []HeldItem, err error) {
	if ref.Record >= d.store.Next() {
		return nil, fmt.Errorf("there is no record %d: the journal has %d", ref.Record, d.store.Next())
	}
	e, err := d.record(ref.Record)
	if err != nil {
		return nil, err
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	item := HeldItem{Type: "held", Record: e.Index, At: e.At, Held: fmt.Sprint(e.Index)}
	switch {
	case e.Held != nil:
		h := e.Held
		item.Source, item.File, item.Reason, item.Rows, item.Size = h.Source, h.File, h.Reason, h.Rows, h.Size
		item.Kept, item.Decided = d.keptCopy(h.Kept), d.state.IsDecided(e.Index, 0)
		if ref.Line != 0 {
			return nil, fmt.Errorf("record %d holds the file %s whole; it is decided on as a whole: %d", e.Index, h.File, e.Index)
		}
		return []HeldItem{item}, nil
	case e.Batch != nil:
		b := e.Batch
		item.Source, item.File, item.Kept = b.Source, b.File, d.keptCopy(b.SHA256)
		for _, row := range b.Held {
			if ref.Line == 0 || ref.Line == row.Line {
				item.Held, item.Line, item.Reason, item.Text = fmt.Sprintf("%d:%d", e.Index, row.Line), row.Line, row.Reason, row.Text
				item.Decided = d.state.IsDecided(e.Index, row.Line)
				items = append(items, item)
			}
		}
	}
	switch {
	case len(items) == 0 && ref.Line != 0:
		return nil, fmt.Errorf("record %d holds no row of line %d", ref.Record, ref.Line)
	case len(items) == 0:
		return nil, fmt.Errorf("record %d holds nothing; `steelyard held` lists what waits", ref.Record)
	}
	return items, nil
}

// keptCopy is the path of a copy that was kept; empty where there is none.
func (d *Desk) keptCopy(name string) string {
	path := filepath.Join(d.heldFolder(), name)
	if _, err := os.Stat(path); name == "" || err != nil {
		return ""
	}
	return path
}

// Decide counts something held after all, read anew from the copy that was kept as its source is
// configured today, or sets it aside for good. What is set aside stays in the journal and the copy
// where it is. Limits of what is plausible hold nothing back that a person takes.
func (d *Desk) Decide(q Decision) (*HeldDecided, error) {
	if q.Reason = strings.TrimSpace(q.Reason); q.Reason == "" {
		return nil, errors.New("a decision needs a reason: what was found, and how")
	}
	// From looking at what was counted to the commit, nothing else may be counted.
	d.counts.Lock()
	defer d.counts.Unlock()
	items, err := d.ShowHeld(q.HeldRef)
	if err != nil {
		return nil, err
	}
	if items = slices.DeleteFunc(items, func(i HeldItem) bool { return i.Decided }); len(items) == 0 {
		return nil, fmt.Errorf("what record %d holds was decided on before", q.Record)
	}
	decision := &rules.Decided{Held: q.Record, Take: q.Take, Reason: q.Reason, By: q.By, How: q.How}
	for _, i := range items {
		if i.Line > 0 {
			decision.Lines = append(decision.Lines, i.Line)
		}
	}
	h := happening{event: rules.Event{Decided: decision}}
	if q.Take {
		if h, err = d.takeHeld(&q, items, decision); err != nil {
			return nil, err
		}
	}
	list := []happening{h}
	outcomes, refused, err := d.commit(list)
	if err = errors.Join(err, refusal(refused)); err != nil {
		return nil, err
	}
	e := &list[0].event
	d.report(e, &outcomes[0])
	a := &HeldDecided{
		Type: "decided", Record: e.Index, At: e.At, Held: q.Record, Lines: decision.Lines, Take: q.Take, Reason: q.Reason, By: q.By, How: q.How,
		File: items[0].File, Source: items[0].Source, Changes: d.stepsOf(e, &outcomes[0]), Caution: rules.ReleaseNote,
	}
	if e.Batch != nil {
		a.Rows, a.StillHeld = len(e.Batch.Rows.Line), len(e.Batch.Held)
	}
	return a, nil
}

// takeHeld is the batch that taking something held brings, with what intake must remember of it.
func (d *Desk) takeHeld(q *Decision, items []HeldItem, decision *rules.Decided) (happening, error) {
	item := &items[0]
	src := d.source(item.Source)
	switch {
	case item.Source == config.MarksName:
		return happening{}, errors.New("a mark is not taken after all: set it with `steelyard mark`, then set this aside")
	case src == nil:
		return happening{}, fmt.Errorf("there is no source %q in the configuration any more, so its file can't be read", item.Source)
	case item.Kept == "":
		return happening{}, fmt.Errorf("%s: no copy was kept, since it was not read whole; drop it anew under a new name, then set this aside", item.File)
	}
	content, err := os.ReadFile(item.Kept)
	if errors.Is(err, fs.ErrNotExist) || err == nil && !isCopy(item.Kept, content) {
		return happening{}, fmt.Errorf("%s: the copy that was kept (%s) is gone or was changed", item.File, item.Kept)
	}
	if err != nil {
		return happening{}, err
	}
	memory, known, err := d.store.File(item.Source, item.File)
	if err != nil {
		return happening{}, err
	}
	if item.Line > 0 {
		if d.isWithdrawn(q.Record) {
			return happening{}, fmt.Errorf("the batch of record %d, to which the row belongs, has been withdrawn", q.Record)
		}
		b, err := takeRows(src, &d.cfg.Plan, item.File, content, decision.Lines)
		if err != nil {
			return happening{}, err
		}
		b.Decided = decision
		return happening{event: rules.Event{Batch: b}}, nil
	}
	sha := sha256.Sum256(content)
	index, source, file, found, err := d.store.Taken(sha)
	if err != nil {
		return happening{}, err
	}
	if found && !d.isWithdrawn(index) {
		return happening{}, fmt.Errorf("%s: this content has been counted meanwhile as %s of %s (record %d); set this aside", item.File, file, source, index)
	}
	b, err := takeFile(src, &d.cfg.Plan, item.File, content)
	if err != nil {
		return happening{}, err
	}
	if b.Decided = decision; q.Replace {
		if b.Replaces, err = d.counting(item.Source, item.File); err != nil {
			return happening{}, err
		}
	}
	// The watcher goes on knowing the file that stands under this name now.
	taken := store.FileMemory{Source: item.Source, File: item.File, Size: item.Size, SHA256: sha, Counted: true, Batch: true}
	files := []store.FileMemory{taken}
	if known {
		memory.Counted = true
		files = append(files, memory)
	}
	return happening{event: rules.Event{Batch: b}, files: files}, nil
}

func isCopy(path string, content []byte) bool {
	sum := sha256.Sum256(content)
	return filepath.Base(path) == hex.EncodeToString(sum[:])
}

// takeFile reads a kept copy as its source is configured today; where so no row of it counts, also
// without the limits of what is plausible.
func takeFile(src *config.Source, plan *rules.Plan, file string, content []byte) (*rules.Batch, error) {
	reading := intake.NewReader(src, plan).Read(file, time.Time{}, content)
	if reading.Batch != nil {
		return reading.Batch, nil
	}
	if waived := intake.NewReader(anyValue(src), plan).Read(file, time.Time{}, content); waived.Batch != nil {
		return waived.Batch, nil
	}
	return nil, fmt.Errorf("it can't be read as the source is configured today: %s", reading.Held.Reason)
}

// takeRows are the rows of the given lines alone, read without the limits of what is plausible.
func takeRows(src *config.Source, plan *rules.Plan, file string, content []byte, lines []int) (*rules.Batch, error) {
	reading := intake.NewReader(anyValue(src), plan).Read(file, time.Time{}, content)
	b := reading.Batch
	if b == nil {
		return nil, fmt.Errorf("it can't be read as the source is configured today: %s", reading.Held.Reason)
	}
	for _, line := range lines {
		if slices.Contains(b.Rows.Line, line) {
			continue
		}
		for _, h := range b.Held {
			if h.Line == line {
				return nil, fmt.Errorf("it can't be read as the source is configured today: %s", h.Reason)
			}
		}
		return nil, fmt.Errorf("%s, line %d: it holds no value as the source is configured today", file, line)
	}
	only(b, lines)
	return b, nil
}

// only leaves the rows of the given lines in a batch.
func only(b *rules.Batch, lines []int) {
	old := b.Rows
	b.Rows, b.Held, b.Aside, b.Remarks, b.Ignored = rules.Rows{}, nil, nil, nil, nil
	place := map[int]int{} // of a row, before and now
	for i, line := range old.Line {
		if !slices.Contains(lines, line) {
			continue
		}
		place[i] = len(b.Rows.Line)
		b.Rows.Line = append(b.Rows.Line, line)
		if old.Time != nil {
			b.Rows.Time = append(b.Rows.Time, old.Time[i])
		}
		if old.Serial != nil {
			b.Rows.Serial = append(b.Rows.Serial, old.Serial[i])
		}
	}
	var left []rules.Series
	for _, s := range b.Series {
		some := rules.Series{Process: s.Process}
		for k, row := range s.Row {
			now, ok := place[row]
			if !ok {
				continue
			}
			some.Row, some.Value = append(some.Row, now), append(some.Value, s.Value[k])
			if s.Of != nil {
				some.Of = append(some.Of, s.Of[k])
			}
		}
		for _, r := range s.Beyond {
			if now, ok := place[r.Row]; ok {
				some.Beyond = append(some.Beyond, rules.Bound{Row: now, Limit: r.Limit, Above: r.Above})
			}
		}
		if len(some.Row)+len(some.Beyond) > 0 {
			left = append(left, some)
		}
	}
	b.Series = left
}

// anyValue is a source to which every value is plausible.
func anyValue(src *config.Source) *config.Source {
	wide := *src
	wide.Columns.Measured = slices.Clone(src.Columns.Measured)
	for i := range wide.Columns.Measured {
		wide.Columns.Measured[i].Lower, wide.Columns.Measured[i].Upper = math.Inf(-1), math.Inf(1)
	}
	return &wide
}
