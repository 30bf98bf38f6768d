package posterior

import (
	"fmt"
	"math"
	"slices"
	"time"
)

// Remember says which measurements of a process count. Exactly one of the fields is set.
type Remember struct {
	Segment  bool    `json:"segment,omitempty"`  // everything since the segment began
	Units    int     `json:"units,omitempty"`    // the last so many observations, 2 to 20000
	Hours    float64 `json:"hours,omitempty"`    // those measured within so many hours, above 0 to 8784
	Discount float64 `json:"discount,omitempty"` // all, older batches weighing less by this factor a batch
}

// mostUnits is the longest window of units; its values are part of the saved state.
const mostUnits = 20000

// mostHours is the longest window of time: a leap year.
const mostHours = 8784

// Check says in a sentence what is wrong; nil where nothing is.
func (r Remember) Check() error {
	ways := 0
	for _, set := range []bool{r.Segment, r.Units != 0, r.Hours != 0, r.Discount != 0} {
		if set {
			ways++
		}
	}
	switch {
	case ways != 1:
		return fmt.Errorf("remember: exactly one of segment, units, hours and discount is expected, %d are set", ways)
	case r.Units != 0 && (r.Units < 2 || r.Units > mostUnits):
		return fmt.Errorf("remember: %d units: 2 to %d are expected", r.Units, mostUnits)
	case r.Hours != 0 && !(r.Hours > 0 && r.Hours <= mostHours):
		return fmt.Errorf("remember: %v hours: more than 0 and at most %d are expected", r.Hours, mostHours)
	case r.Discount != 0 && !(r.Discount > 0 && r.Discount < 1):
		return fmt.Errorf("remember: discount %v: a number between 0 and 1 is expected", r.Discount)
	}
	return nil
}

// Memory holds the measurements of one process that count, as its Remember has it. What it
// says depends on the measurements and their places in the sequence only, never on when it
// was saved and loaded, nor (but for a discount) on how they were cut into batches: a replay in
// one go gives the same bits. It is not safe for concurrent use.
//
//   - segment: one running Sums.
//   - units: the last N observations themselves, in chunks of 64 by their place in the sequence;
//     the chunks are merged in order, and nothing is ever subtracted. An observation is one row,
//     also where it is a count of many.
//   - hours: Sums of steps of time, each 1/240 of the window, merged in order; measurements
//     leave by whole steps, so that what counts is the last 239/240 of the window for certain and
//     the last window at most. "Now" is the latest time that a measurement or Pass has named; one
//     that is older than the window on arrival never counts.
//   - discount: before each batch, an empty one too, what was there is scaled by the factor (power
//     discount; Kulhavý & Zarrop, International Journal of Control 58, 1993), which with a prior pulls
//     the belief towards it. With n units a batch it comes to rest at n/(1-discount) units. At one
//     effective unit or fewer a posterior under the reference prior is not Proper.
type Memory struct {
	family   Family
	remember Remember

	sums Sums // segment, discount

	values []float64 // units: the last observations, from place first on
	of     []float64
	logs   []pair // lognormal: logarithms of values
	first  int64
	full   []Sums // sums of the whole chunks among values; the first belongs to chunk from
	from   int64

	steps []step // hours, ascending
	now   int64  // the latest step that was reached

	known   Sums // what Sums says, while isKnown
	isKnown bool
}

// step is what was measured in one step of a window of time.
type step struct {
	at   int64 // the step's number: time divided by its width
	sums Sums
}

const chunk = 64        // observations merged as one in a window of units
const windowSteps = 240 // of a window of time

// NewMemory is an empty memory. Remember must have passed its Check.
func NewMemory(f Family, r Remember) *Memory {
	return &Memory{family: f, remember: r, now: beforeTime}
}

// Clone is a memory that goes on by itself from here.
func (m *Memory) Clone() *Memory {
	c := *m
	c.values, c.of, c.logs = slices.Clone(m.values), slices.Clone(m.of), slices.Clone(m.logs)
	c.full, c.steps = slices.Clone(m.full), slices.Clone(m.steps)
	return &c
}

// Remembers says which measurements count.
func (m *Memory) Remembers() Remember { return m.remember }

// beforeTime is before every step of a window of time.
const beforeTime = math.MinInt64 / 2

// StartSegment forgets what was measured before.
func (m *Memory) StartSegment() {
	*m = Memory{family: m.family, remember: m.remember, now: m.now}
}

// AddBatch takes the observations of one batch in order. Of is nil where it is 1 throughout;
// at is when each was measured, in nanoseconds since 1970 UTC, and is read only by a window of
// time.
func (m *Memory) AddBatch(values, of []float64, at []int64) {
	m.isKnown = false
	if m.remember.Discount != 0 {
		m.sums = m.sums.Scale(m.remember.Discount)
	}
	var batch Sums
	for i, v := range values {
		o := 1.0
		if of != nil {
			o = of[i]
		}
		switch {
		case m.remember.Units != 0:
			m.keep(v, o)
		case m.remember.Hours != 0:
			m.addAt(v, o, at[i])
		case m.remember.Discount != 0:
			batch = batch.Add(m.family, v, o)
		default:
			m.sums = m.sums.Add(m.family, v, o)
		}
	}
	switch {
	case m.remember.Units != 0:
		m.trim()
	case m.remember.Discount != 0:
		m.sums = Merge(m.family, m.sums, batch)
	}
}

// keep takes one observation into a window of units.
func (m *Memory) keep(value, of float64) {
	m.values, m.of = append(m.values, value), append(m.of, of)
	if m.family == LognormalFamily {
		m.logs = append(m.logs, logPair(value))
	}
}

// trim lets the oldest observations go and sums up the chunks that have become whole.
func (m *Memory) trim() {
	if over := len(m.values) - m.remember.Units; over > 0 {
		m.values, m.of = slices.Delete(m.values, 0, over), slices.Delete(m.of, 0, over)
		if m.logs != nil {
			m.logs = slices.Delete(m.logs, 0, over)
		}
		m.first += int64(over)
	}
	firstWhole, end := (m.first+chunk-1)/chunk, (m.first+int64(len(m.values)))/chunk
	if len(m.full) == 0 || m.from+int64(len(m.full)) <= firstWhole {
		m.full, m.from = m.full[:0], firstWhole
	} else if m.from < firstWhole {
		m.full = slices.Delete(m.full, 0, int(firstWhole-m.from))
		m.from = firstWhole
	}
	for c := m.from + int64(len(m.full)); c < end; c++ {
		m.full = append(m.full, m.sumOf(c*chunk-m.first, (c+1)*chunk-m.first))
	}
}

// sumOf adds up the observations from one index up to another.
func (m *Memory) sumOf(from, to int64) (s Sums) {
	if m.family == LognormalFamily {
		for _, x := range m.logs[from:to] {
			s = s.push(x)
		}
		return s
	}
	for i := from; i < to; i++ {
		s = s.Add(m.family, m.values[i], m.of[i])
	}
	return s
}

// width is the length of one step of a window of time, in nanoseconds.
func (m *Memory) width() int64 {
	return max(int64(m.remember.Hours*float64(time.Hour)/windowSteps), 1)
}

func (m *Memory) addAt(v, of float64, at int64) {
	n := floorDiv(at, m.width())
	m.reach(n)
	if n <= m.now-windowSteps {
		return
	}
	i, ok := slices.BinarySearchFunc(m.steps, n, func(s step, n int64) int { return int(max(min(s.at-n, 1), -1)) })
	if !ok {
		m.steps = slices.Insert(m.steps, i, step{at: n})
	}
	m.steps[i].sums = m.steps[i].sums.Add(m.family, v, of)
}

// Pass lets time go on without a measurement: what has left a window of time is forgotten.
// It reports whether anything was.
func (m *Memory) Pass(at int64) bool {
	if m.remember.Hours == 0 {
		return false
	}
	before := len(m.steps)
	m.reach(floorDiv(at, m.width()))
	if len(m.steps) == before {
		return false
	}
	m.isKnown = false
	return true
}

func (m *Memory) reach(n int64) {
	if n > m.now {
		m.now = n
	}
	gone := 0
	for gone < len(m.steps) && m.steps[gone].at <= m.now-windowSteps {
		gone++
	}
	m.steps = slices.Delete(m.steps, 0, gone)
}

func floorDiv(a, b int64) int64 {
	q := a / b
	if a%b < 0 {
		q--
	}
	return q
}

// Sums are the statistics of what is remembered.
func (m *Memory) Sums() Sums {
	if !m.isKnown {
		m.known, m.isKnown = m.mergeAll(), true
	}
	return m.known
}

func (m *Memory) mergeAll() Sums {
	switch {
	case m.remember.Units != 0:
		return m.mergeChunks()
	case m.remember.Hours != 0:
		var s Sums
		for _, t := range m.steps {
			s = Merge(m.family, s, t.sums)
		}
		return s
	}
	return m.sums
}

// mergeChunks merges what is left of the oldest chunk, the whole ones, and the newest.
func (m *Memory) mergeChunks() Sums {
	end := m.first + int64(len(m.values))
	if len(m.full) == 0 {
		// No whole chunk: at most one boundary lies within.
		edge := min((m.first+chunk-1)/chunk*chunk, end)
		return Merge(m.family, m.sumOf(0, edge-m.first), m.sumOf(edge-m.first, end-m.first))
	}
	s := m.sumOf(0, m.from*chunk-m.first)
	for _, c := range m.full {
		s = Merge(m.family, s, c)
	}
	return Merge(m.family, s, m.sumOf((m.from+int64(len(m.full)))*chunk-m.first, end-m.first))
}
