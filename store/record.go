package store

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"slices"
	"time"

	"steelyard/rules"
)

// A record is one event with what followed from it. Its bytes are written once; what is
// hashed, copied or proved later is these bytes, never a second encoding.
//
//	version  1 byte: 2, or 3 where it says what programs of version 2 do not know: a withdrawal, a
//	         batch that replaces others, a decision on what was held, a segment from a moment on, a plan
//	         that says which test of a serial counts; or 4 (rowsVersion) where neither knows what it says
//	head     its length (uvarint), then a JSON array of two objects, the event and the
//	         outcomes, with the names of package rules, but without what follows here; floats
//	         in the shortest form that reads back to the same bits, times in RFC 3339, UTC
//	rows     only where the event is a batch: columns Line (whole numbers), Time (times),
//	         Serial (texts)
//	series   only where the event is a batch: their number + 1, or 0 for nil (uvarint), and of
//	         each the columns Process (texts, of one), Row (whole numbers), Value and Of (floats); in
//	         version 4 then Beyond: Row (whole numbers), Limit (floats), Above (whole numbers, 0 or 1)
//	looks    columns Rule (whole numbers), Withheld (texts), LogFor and LogAgainst (floats)
//
// The columns are drawn in columns.go. Nothing follows the looks. A reader refuses a version
// that it does not know. Within one version names may be added to the head, and a reader
// ignores those it does not know: so whatever changes what the engine does with an event gets
// a new version, which only the records that say it have. The same entry always gives the same
// bytes.
const (
	recordVersion    = 2
	correctedVersion = 3
)

// versionOf is the least version that says all that the event does.
func versionOf(e *rules.Event) byte {
	knowsSerials := func(c rules.Characteristic) bool { return c.Retests != rules.Retests{} }
	switch {
	case saysMore(e):
		return rowsVersion
	case e.Adopted != nil && slices.ContainsFunc(e.Adopted.Plan.Characteristics, knowsSerials):
		return correctedVersion
	case e.Withdrawn != nil, e.Decided != nil, e.Batch != nil && e.Batch.Decided != nil, e.Batch != nil && len(e.Batch.Replaces) > 0, e.Segment != nil && !e.Segment.Since.IsZero():
		return correctedVersion
	}
	return recordVersion
}

// eventHead is an event without the columns, which stand after the head. Its fields hide
// those of the same name in what it embeds.
type eventHead struct {
	*rules.Event
	Batch *batchHead `json:"batch,omitempty"`
}

type batchHead struct {
	*rules.Batch
	Rows   *struct{} `json:"rows,omitempty"`
	Series *struct{} `json:"series,omitempty"`
}

type outcomesHead struct {
	*rules.Outcomes
	Looks *struct{} `json:"looks,omitempty"`
}

// encode writes a record. It refuses what JSON has no form for: a float that is not finite
// outside the columns, a year beyond 9999.
func encode(e *Entry) ([]byte, error) {
	event, outcomes := inUTC(e)
	head := eventHead{Event: &event}
	if event.Batch != nil {
		head.Batch = &batchHead{Batch: event.Batch}
	}
	var text bytes.Buffer
	j := json.NewEncoder(&text)
	j.SetEscapeHTML(false) // a claim stays readable
	if err := j.Encode([]any{head, outcomesHead{Outcomes: &outcomes}}); err != nil {
		return nil, err
	}
	text.Truncate(text.Len() - 1) // the newline

	b := append(make([]byte, 0, text.Len()+1024), versionOf(&event))
	b = binary.AppendUvarint(b, uint64(text.Len()))
	b = append(b, text.Bytes()...)
	if event.Batch != nil {
		b = appendBatch(b, event.Batch, b[0])
	}
	return appendLooks(b, outcomes.Looks), nil
}

// inUTC is an entry with all its times in UTC, so that the bytes do not depend on the zone of
// the machine.
func inUTC(e *Entry) (rules.Event, rules.Outcomes) {
	event, outcomes := e.Event, e.Outcomes
	event.At = event.At.UTC()
	set(&event.Started, func(s *rules.Started) *time.Time { return &s.LastAlive })
	set(&event.Batch, func(b *rules.Batch) *time.Time { return &b.Written })
	set(&event.Segment, func(s *rules.Segment) *time.Time { return &s.Since })
	set(&event.Withdrawn, func(w *rules.Withdrawn) *time.Time { return &w.From })
	set(&event.Withdrawn, func(w *rules.Withdrawn) *time.Time { return &w.To })
	set(&event.Moment, func(m *rules.Moment) *time.Time { return &m.Since })
	set(&event.Stepped, func(s *rules.Stepped) *time.Time { return &s.Was })
	set(&event.Stepped, func(s *rules.Stepped) *time.Time { return &s.Is })
	if outcomes.Changes != nil {
		outcomes.Changes = append(make([]rules.Change, 0, len(outcomes.Changes)), outcomes.Changes...)
	}
	for i := range outcomes.Changes {
		outcomes.Changes[i].At = outcomes.Changes[i].At.UTC()
		outcomes.Changes[i].Since = outcomes.Changes[i].Since.UTC()
	}
	return event, outcomes
}

// set puts a copy with one time in UTC in the place of what p points at, where there is any.
func set[T any](p **T, at func(*T) *time.Time) {
	if *p == nil {
		return
	}
	c := **p
	*at(&c) = at(&c).UTC()
	*p = &c
}

func appendBatch(b []byte, batch *rules.Batch, version byte) []byte {
	b = appendInts(b, batch.Rows.Line)
	b = appendTimes(b, batch.Rows.Time)
	b = appendTexts(b, batch.Rows.Serial)
	b = appendCount(b, len(batch.Series), batch.Series == nil)
	for i := range batch.Series {
		s := &batch.Series[i]
		b = appendTexts(b, []string{s.Process})
		b = appendInts(b, s.Row)
		b = appendFloats(b, s.Value)
		b = appendFloats(b, s.Of)
		if version == rowsVersion {
			b = appendBeyond(b, s.Beyond)
		}
	}
	return b
}

func appendLooks(b []byte, looks []rules.Look) []byte {
	if looks == nil {
		return appendCount(b, 0, true)
	}
	rule, withheld := make([]int, len(looks)), make([]string, len(looks))
	logFor, logAgainst := make([]float64, len(looks)), make([]float64, len(looks))
	for i, l := range looks {
		rule[i], withheld[i], logFor[i], logAgainst[i] = l.Rule, l.Withheld, l.LogFor, l.LogAgainst
	}
	b = appendInts(b, rule)
	b = appendTexts(b, withheld)
	b = appendFloats(b, logFor)
	return appendFloats(b, logAgainst)
}

// Decode reads the bytes of a record, as Records gives them.
func Decode(record []byte) (*Entry, error) { return decode(record) }

// Encode writes an entry as Commit does: so the outcomes that an engine gives again can be compared with the
// record to the last bit.
func Encode(e *Entry) ([]byte, error) { return encode(e) }

// decode reads a record.
func decode(b []byte) (*Entry, error) {
	if len(b) == 0 || b[0] < recordVersion || b[0] > rowsVersion {
		return nil, fmt.Errorf("its version is not one of those that this program reads, %d to %d", recordVersion, rowsVersion)
	}
	c := &columns{rest: b[1:]}
	text := c.take(c.uvarint())
	if c.err != nil {
		return nil, c.err
	}
	e := &Entry{}
	head := eventHead{Event: &e.Event}
	parts := []any{&head, &outcomesHead{Outcomes: &e.Outcomes}}
	if err := json.Unmarshal(text, &parts); err != nil {
		return nil, err
	}
	if head.Batch != nil {
		if e.Event.Batch = head.Batch.Batch; e.Event.Batch == nil {
			e.Event.Batch = &rules.Batch{}
		}
		readBatch(c, e.Event.Batch, b[0])
	}
	e.Outcomes.Looks = readLooks(c)
	if c.err == nil && len(c.rest) > 0 {
		c.fail("%d bytes follow its end", len(c.rest))
	}
	return e, c.err
}

func readBatch(c *columns, batch *rules.Batch, version byte) {
	batch.Rows = rules.Rows{Line: c.ints(), Time: c.times(), Serial: c.texts()}
	n, isNil := c.count()
	if isNil {
		return
	}
	batch.Series = make([]rules.Series, 0, n)
	for range n {
		s := rules.Series{}
		if name := c.texts(); len(name) == 1 {
			s.Process = name[0]
		} else {
			c.fail("a series has %d names", len(name))
		}
		s.Row, s.Value, s.Of = c.ints(), c.floats(), c.floats()
		if version == rowsVersion {
			s.Beyond = readBeyond(c)
		}
		if c.err != nil {
			return
		}
		batch.Series = append(batch.Series, s)
	}
}

func readLooks(c *columns) []rules.Look {
	rule := c.ints()
	if rule == nil {
		return nil
	}
	withheld, logFor, logAgainst := c.texts(), c.floats(), c.floats()
	if n := len(rule); c.err == nil && (len(withheld) != n || len(logFor) != n || len(logAgainst) != n) {
		c.fail("its looks have columns of different lengths")
	}
	if c.err != nil {
		return nil
	}
	looks := make([]rules.Look, len(rule))
	for i := range looks {
		looks[i] = rules.Look{Rule: rule[i], LogFor: logFor[i], LogAgainst: logAgainst[i], Withheld: withheld[i]}
	}
	return looks
}
