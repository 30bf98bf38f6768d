package rules

import (
	"cmp"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"

	"steelyard/rules/posterior"
)

// Retests says which test of a serial counts in a process, where it was tested more than once,
// and for how long serials are known. The zero value counts every test and knows no serial.
type Retests struct {
	Count string  `json:"count"`           // FirstTest, LastTest or EveryTest
	Units int     `json:"units,omitempty"` // the last so many units are known, 1 to 100000, or
	Days  float64 `json:"days,omitempty"`  // those taken in within so many days, above 0 to 366; 100000 units at most
}

// What may count.
const (
	EveryTest = "all"
	FirstTest = "first"
	LastTest  = "last"
)

const (
	mostSerials = 100000
	mostDays    = 366
)

// Check says in a sentence what is wrong; nil where nothing is.
func (r Retests) Check() error {
	switch {
	case r == Retests{}:
		return nil
	case !slices.Contains([]string{EveryTest, FirstTest, LastTest}, r.Count):
		return fmt.Errorf("retests: %q: one of %s, %s and %s is expected", r.Count, EveryTest, FirstTest, LastTest)
	case (r.Units != 0) == (r.Days != 0):
		return errors.New("serials: either units or days are expected")
	case r.Units != 0 && (r.Units < 1 || r.Units > mostSerials):
		return fmt.Errorf("serials: %d units: 1 to %d are expected", r.Units, mostSerials)
	case r.Days != 0 && !(r.Days > 0 && r.Days <= mostDays):
		return fmt.Errorf("serials: %v days: more than 0 and at most %d are expected", r.Days, mostDays)
	}
	return nil
}

// Says is what stands beside every number of the characteristic; empty where nothing was declared.
func (r Retests) Says() string {
	switch r.Count {
	case EveryTest:
		return "every test of a serial counts"
	case FirstTest, LastTest:
		return "the " + r.Count + " test of each serial counts"
	}
	return ""
}

// tests are the serials that a process knows. Whole batches are forgotten, so that a little more is
// known than was declared, never less. Where the last test counts, a unit that is tested again is
// taken out and the rest counted anew: from base, to which what was forgotten has been added.
type tests struct {
	Batches []*tested `json:"batches"` // that are known, the oldest first
	Base    []byte    `json:"base,omitempty"`

	known map[string]place // of each serial, the test that counts
	units int              // in batches
	base  *posterior.Memory
}

// tested are the tests of one batch that count, or have counted.
type tested struct {
	Event  uint64    `json:"event"`
	At     int64     `json:"at"` // when the event was taken in, ns since 1970
	Serial []string  `json:"serial"`
	Value  []float64 `json:"value,omitempty"` // only where the last test counts, as is what follows
	Of     []float64 `json:"of,omitempty"`
	Within []int64   `json:"within,omitempty"`
	Out    []int     `json:"out,omitempty"` // those that a later test has taken the place of
}

// place is where a test stands.
type place struct {
	b *tested
	i int
}

func newTests(p *process) *tests {
	if p.Retests == (Retests{}) {
		return nil
	}
	return &tests{known: map[string]place{}, base: posterior.NewMemory(p.Family, p.Remember)}
}

// add puts a batch behind the others.
func (t *tests) add(b *tested) {
	t.Batches, t.units = append(t.Batches, b), t.units+len(b.Serial)
	for i, serial := range b.Serial {
		if serial != "" && !slices.Contains(b.Out, i) {
			t.known[serial] = place{b, i}
		}
	}
}

// tally is what became of the measurements of a series.
type tally struct {
	before   int // made before the segment; they don't count in it
	repeated int // of serials counted before: not counted, or counted again where every test counts
	replaced int // whose earlier test counts no more
	outside  int // retests of units from before the segment; they don't count in it

	stuck string // a sentence, where the gauge begins to look stuck

	changed []uint64 // batches of tests that are not as they were
	settled bool     // base is not as it was
}

// test takes a series into a process that knows its serials.
func (p *process) test(e *Event, series *Series, times []int64) (n tally) {
	t := p.tests
	p.forget(&n, func(b *tested) bool {
		return p.Retests.Days != 0 && float64(e.At.UnixNano()-b.At) > p.Retests.Days*float64(24*time.Hour)
	})
	b := &tested{Event: e.Index, At: e.At.UnixNano()}
	counted := *series
	counted.Row, counted.Value, counted.Of = nil, nil, nil
	var at []int64
	anew := false
	for i, v := range series.Value {
		serial := ""
		if e.Batch.Rows.Serial != nil {
			serial = e.Batch.Rows.Serial[series.Row[i]]
		}
		old, isKnown := t.known[serial]
		switch {
		case !isKnown || serial == "":
		case p.Retests.Count == EveryTest:
			n.repeated++
		case p.Retests.Count == FirstTest:
			n.repeated++
			continue
		case old.b.Event < p.Began:
			n.outside++
			continue
		default:
			n.replaced++
			old.b.Out = append(old.b.Out, old.i)
			if old.b != b {
				anew, n.changed = true, append(n.changed, old.b.Event)
			}
		}
		if serial != "" {
			t.known[serial] = place{b, len(b.Serial)}
		}
		if serial != "" || p.Retests.Count == LastTest {
			b.Serial = append(b.Serial, serial)
		}
		counted.Row, counted.Value, at = append(counted.Row, series.Row[i]), append(counted.Value, v), append(at, times[i])
		if series.Of != nil {
			counted.Of = append(counted.Of, series.Of[i])
		}
	}
	within := notLater(at, e.At)
	if p.Retests.Count == LastTest {
		b.Value, b.Of, b.Within = counted.Value, counted.Of, within
	}
	if len(b.Serial) > 0 {
		t.Batches, t.units = append(t.Batches, b), t.units+len(b.Serial)
		n.changed = append(n.changed, b.Event)
	}
	switch {
	case anew:
		p.countAnew()
	case p.Retests.Count == LastTest:
		b.addTo(p.memory)
	case len(counted.Value) > 0:
		p.memory.AddBatch(counted.Value, counted.Of, within)
	}
	most := cmp.Or(p.Retests.Units, mostSerials)
	p.forget(&n, func(b *tested) bool { return t.units-len(b.Serial) >= most })
	return n
}

// countAnew makes the memory of the tests that count now.
func (p *process) countAnew() {
	p.memory = p.tests.base.Clone()
	for _, b := range p.tests.Batches {
		if b.Event >= p.Began {
			b.addTo(p.memory)
		}
	}
}

// addTo adds what counts of a batch to a memory.
func (b *tested) addTo(m *posterior.Memory) {
	values, of, within := b.Value, b.Of, b.Within
	if len(b.Out) > 0 {
		values, of, within = nil, nil, nil
		for i, v := range b.Value {
			if slices.Contains(b.Out, i) {
				continue
			}
			values, within = append(values, v), append(within, b.Within[i])
			if b.Of != nil {
				of = append(of, b.Of[i])
			}
		}
	}
	if len(values) > 0 {
		m.AddBatch(values, of, within)
	}
}

// forget lets the oldest batches go for as long as they are due.
func (p *process) forget(n *tally, due func(*tested) bool) {
	t := p.tests
	for len(t.Batches) > 0 && due(t.Batches[0]) {
		b := t.Batches[0]
		t.Batches, t.units = t.Batches[1:], t.units-len(b.Serial)
		for i, serial := range b.Serial {
			if t.known[serial] == (place{b, i}) {
				delete(t.known, serial)
			}
		}
		if p.Retests.Count == LastTest && b.Event >= p.Began {
			b.addTo(t.base)
			n.settled = true
		}
		n.changed = append(n.changed, b.Event)
	}
}

// notLater are times that are no later than the arrival: a rig's clock that runs ahead must not push
// what is older out of a window of time.
func notLater(times []int64, arrival time.Time) []int64 {
	now := arrival.UnixNano()
	within := make([]int64, len(times))
	for i, t := range times {
		within[i] = min(t, now)
	}
	return within
}

// remarks say what did not count as it was measured.
func (n *tally) remarks(p *process, e *Event, series *Series) (list []string) {
	say := func(count int, what string) {
		if count > 0 {
			list = append(list, fmt.Sprintf("%s: %d of %d measurements of file %s of %s %s",
				series.Process, count, len(series.Value), e.Batch.File, e.Batch.Source, what))
		}
	}
	if n.stuck != "" {
		list = append(list, n.stuck)
	}
	say(n.before, fmt.Sprintf("were made before its segment began (%s) and do not count in it", p.SegmentFrom.Format(time.RFC3339)))
	says := " (" + p.Retests.Says() + ")"
	if p.Retests.Count == EveryTest {
		say(n.repeated, "are of serials that were counted before, and count again"+says)
	} else {
		say(n.repeated, "are of serials that were counted before, and do not count"+says)
	}
	say(n.replaced, "take the place of an earlier test of their serial"+says)
	say(n.outside, "are retests of units from before its segment began, and do not count in it")
	return list
}

// read makes tests of what was kept of them.
func (t *tests) read(p *process) (*tests, error) {
	made := newTests(p)
	for _, b := range t.Batches {
		own := *b // what t holds stays as it is
		own.Out = slices.Clone(b.Out)
		made.add(&own)
	}
	if t.Base == nil {
		return made, nil
	}
	return made, made.base.UnmarshalBinary(t.Base)
}

// Names of the pieces that the tests of a process are kept in: one for each batch.
const (
	testsPiece = "tests/"
	basePiece  = "base/"
)

func testsName(process string, event uint64) string {
	return testsPiece + process + "/" + strconv.FormatUint(event, 10)
}

// testsChanged notes the pieces that have changed.
func (s *State) testsChanged(process string, events []uint64, base bool) {
	for _, event := range events {
		s.touched[testsName(process, event)] = true
	}
	if base {
		s.touched[basePiece+process] = true
	}
}

// allTests are the batches of tests that a process has.
func (p *process) allTests() (events []uint64) {
	if p != nil && p.tests != nil {
		for _, b := range p.tests.Batches {
			events = append(events, b.Event)
		}
	}
	return events
}

// testsOf finds what a piece of tests is of.
func (s *State) testsOf(piece string) (text []byte, err error) {
	if name, ok := strings.CutPrefix(piece, basePiece); ok {
		if p := s.processes[name]; p.tests != nil && p.Retests.Count == LastTest {
			return p.tests.base.AppendBinary(nil)
		}
		return nil, nil
	}
	name, event, err := splitTests(piece)
	if err != nil || s.processes[name].tests == nil {
		return nil, err
	}
	batches := s.processes[name].tests.Batches
	i, ok := slices.BinarySearchFunc(batches, event, func(b *tested, event uint64) int { return cmp.Compare(b.Event, event) })
	if !ok {
		return nil, nil
	}
	return json.Marshal(batches[i])
}

func splitTests(piece string) (process string, event uint64, err error) {
	name := strings.TrimPrefix(piece, testsPiece)
	at := strings.LastIndexByte(name, '/')
	if at < 0 {
		return "", 0, fmt.Errorf("the name %q is not one of tests", piece)
	}
	event, err = strconv.ParseUint(name[at+1:], 10, 64)
	return name[:at], event, err
}

// restoreTests gives the processes the tests that were kept of them.
func (s *State) restoreTests(pieces map[string][]byte) error {
	kept := map[string]*tests{}
	of := func(process string) *tests {
		if kept[process] == nil {
			kept[process] = &tests{}
		}
		return kept[process]
	}
	for piece, text := range pieces {
		if name, ok := strings.CutPrefix(piece, basePiece); ok {
			of(name).Base = text
			continue
		}
		if !strings.HasPrefix(piece, testsPiece) {
			continue
		}
		name, _, err := splitTests(piece)
		b := &tested{}
		if err = errors.Join(err, json.Unmarshal(text, b)); err != nil {
			return fmt.Errorf("saved state %q: %w", piece, err)
		}
		of(name).Batches = append(of(name).Batches, b)
	}
	for name, p := range s.processes {
		if p.Retests == (Retests{}) {
			continue
		}
		t := of(name)
		slices.SortFunc(t.Batches, func(a, b *tested) int { return cmp.Compare(a.Event, b.Event) })
		made, err := t.read(p)
		if err != nil {
			return fmt.Errorf("saved state %q: %w", basePiece+name, err)
		}
		p.tests = made
	}
	return nil
}
