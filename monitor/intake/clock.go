package intake

import (
	"fmt"
	"strings"
	"time"

	"steelyard/monitor/config"
)

// clock reads times as a source writes them, and finds the instants they stand for.
//
// A time with an offset is an instant. A time without one is what a clock on the wall showed
// in the source's zone. When clocks are put forward, some readings never show: such a row is
// held. When they are put back, some show twice: then the instant is taken that does not lie
// before the row above in the file, else the earlier one; the reading remarks on it.
type clock struct {
	zone  *time.Location
	steps []step // nil for "iso"
	form  string // for sentences

	// Readings of the wall clock in [from, to), in seconds since 1970 as if in UTC, have one
	// offset: a memory of the last one looked up.
	from, to, offset int64

	last   int64 // ns: the row above
	lasted bool
	twice  twice
}

// twice counts the readings in a file that stood for two instants.
type twice struct {
	first, final, later int
	rows                int
	text                string
}

// step is one piece of a pattern: a number into a part of the time, or a literal.
type step struct {
	part    int  // index into reading.parts; -1 for a literal, partFraction for a fraction
	digits  int  // most digits; of a fraction, 9
	atLeast int  // least digits
	literal byte // where part is -1
}

const (
	partYear = iota
	partMonth
	partDay
	partHour
	partMinute
	partSecond
	partFraction
	parts
)

// reading is what a text says: the parts of a time, with the offset where it has one.
type reading struct {
	parts  [parts]int // the fraction in ns
	offset int        // seconds east of UTC
	fixed  bool       // there is an offset
}

var tokens = []struct {
	text string
	step step
}{
	{"YYYY", step{part: partYear, digits: 4, atLeast: 4}},
	{"MM", step{part: partMonth, digits: 2, atLeast: 2}},
	{"DD", step{part: partDay, digits: 2, atLeast: 2}},
	{"hh", step{part: partHour, digits: 2, atLeast: 2}},
	{"mm", step{part: partMinute, digits: 2, atLeast: 2}},
	{"ss", step{part: partSecond, digits: 2, atLeast: 2}},
}

// newClock reads a pattern. Its words are YYYY, MM, DD, hh, mm and ss, and a run of f for a
// fraction of a second of one to nine digits. A word of two digits takes one digit too where
// no other number follows at once. Everything else stands for itself.
func newClock(f *config.Form) clock {
	c := clock{zone: f.Zone, form: "a time such as 2026-03-02T10:41:07 or 2026-03-02 10:41:07+01:00"}
	if c.zone == nil {
		c.zone = time.UTC
	}
	if f.TimeFormat == "" || f.TimeFormat == "iso" {
		return c
	}
	c.form = "a time written as " + f.TimeFormat
	for rest := f.TimeFormat; rest != ""; {
		s, n := nextStep(rest)
		c.steps, rest = append(c.steps, s), rest[n:]
	}
	for i := range c.steps {
		if s := &c.steps[i]; s.digits == 2 && (i+1 == len(c.steps) || c.steps[i+1].part < 0) {
			s.atLeast = 1
		}
	}
	return c
}

func nextStep(pattern string) (step, int) {
	for _, t := range tokens {
		if strings.HasPrefix(pattern, t.text) {
			return t.step, len(t.text)
		}
	}
	if n := len(pattern) - len(strings.TrimLeft(pattern, "f")); n > 0 {
		return step{part: partFraction, digits: 9, atLeast: 1}, n
	}
	return step{part: -1, literal: pattern[0]}, 1
}

// begin forgets the file before.
func (c *clock) begin() { c.last, c.lasted, c.twice = 0, false, twice{} }

// read reads a time that stands in a line of a file: ns since 1970, or a sentence on what is
// wrong with it.
func (c *clock) read(text []byte, line int) (ns int64, sentence string) {
	var r reading
	ok := false
	if c.steps == nil {
		ok = r.iso(text)
	} else {
		ok = r.follow(c.steps, text)
	}
	if !ok {
		return 0, fmt.Sprintf("read %s; expected %s", quote(text), c.form)
	}
	wall, sentence := r.wall()
	if sentence != "" {
		return 0, fmt.Sprintf("read %s, where %s; expected %s", quote(text), sentence, c.form)
	}
	nano := int64(r.parts[partFraction])
	if r.fixed {
		ns = (wall-int64(r.offset))*1e9 + nano
	} else if wall >= c.from && wall < c.to {
		ns = (wall-c.offset)*1e9 + nano
	} else if ns, sentence = c.find(wall, nano, text, line); sentence != "" {
		return 0, sentence
	}
	c.last, c.lasted = ns, true
	return ns, ""
}

// find looks a reading of the wall clock up in the zone.
func (c *clock) find(wall, nano int64, text []byte, line int) (ns int64, sentence string) {
	first, final, n := c.instants(wall)
	switch n {
	case 0:
		return 0, fmt.Sprintf("read %s, which the clocks of %s passed over when they were put forward; "+
			"expected a time that they showed", quote(text), c.zone)
	case 1:
		return first*1e9 + nano, ""
	}
	if c.twice.rows++; c.twice.rows == 1 {
		c.twice.first, c.twice.text = line, quote(text)
	}
	c.twice.final = line
	ns = first*1e9 + nano
	if c.lasted && ns < c.last && final*1e9+nano >= c.last {
		c.twice.later++
		ns = final*1e9 + nano
	}
	return ns, ""
}

// instants are the instants, in seconds since 1970, at which the clocks of the zone showed a
// reading; first and final are the same where there is one. Every offset of the zone around
// the reading is tried: an offset is the right one where it is in force at the instant that it
// leads to.
func (c *clock) instants(wall int64) (first, final int64, n int) {
	const reach = 16 * 3600 // no zone is or was farther from UTC
	for t := time.Unix(wall-reach, 0).In(c.zone); t.Unix() <= wall+reach; {
		_, off := t.Zone()
		at := wall - int64(off)
		if _, there := time.Unix(at, 0).In(c.zone).Zone(); there == off && (n == 0 || at != final) {
			if n++; n == 1 {
				first = at
			}
			final = at
		}
		start, end := t.ZoneBounds()
		switch {
		case end.IsZero():
			end = t.Add(100 * 365 * 24 * time.Hour) // it stays so for ever
		case !end.After(t):
			// On the last day of a leap year beyond a zone's table, the time package (Go 1.26)
			// puts the end before the instant it was asked about.
			start, end = t, t.Add(time.Hour)
		}
		if start.IsZero() {
			start = t.Add(-100 * 365 * 24 * time.Hour)
		}
		c.remember(wall, start.Unix(), end.Unix(), int64(off), reach)
		t = end
	}
	return first, final, n
}

// remember notes an offset for the readings that have no other, so far from the changes of the
// clocks before and behind it that nothing else is possible.
func (c *clock) remember(wall, start, end, off, reach int64) {
	if from, to := start+off+2*reach, end+off-2*reach; wall >= from && wall < to {
		c.from, c.to, c.offset = from, to, off
	}
}

// remark tells of readings that stood for two instants; "" where there were none.
func (c *clock) remark() string {
	t := &c.twice
	if t.rows == 0 {
		return ""
	}
	return fmt.Sprintf("%d rows from line %d to line %d have a time that the clocks of %s showed twice (the first: %s): "+
		"%d were taken as the earlier, %d as the later, so that times do not go back within the file",
		t.rows, t.first, t.final, c.zone, t.text, t.rows-t.later, t.later)
}

// wall is the reading as seconds since 1970, as if it were in UTC. A sentence says which part
// is out of range.
func (r *reading) wall() (int64, string) {
	y, m, d := r.parts[partYear], r.parts[partMonth], r.parts[partDay]
	switch {
	case y < 1700 || y > 2200:
		return 0, "the year is not one from 1700 to 2200"
	case m < 1 || m > 12:
		return 0, "the month is not one from 1 to 12"
	case d < 1 || d > daysIn(y, m):
		return 0, "the month has no such day"
	case r.parts[partHour] > 23 || r.parts[partMinute] > 59 || r.parts[partSecond] > 59:
		return 0, "the day has no such hour, minute or second"
	}
	second := r.parts[partHour]*3600 + r.parts[partMinute]*60 + r.parts[partSecond]
	return int64(days(y, m, d))*86400 + int64(second), ""
}

func daysIn(y, m int) int {
	switch m {
	case 4, 6, 9, 11:
		return 30
	case 2:
		if y%4 == 0 && (y%100 != 0 || y%400 == 0) {
			return 29
		}
		return 28
	}
	return 31
}

// days are the days from 1970-01-01 to a date of the Gregorian calendar, counted in years that
// begin in March, so that a leap day is the last of its year.
func days(y, m, d int) int {
	if m -= 3; m < 0 {
		m, y = m+12, y-1
	}
	return 365*y + y/4 - y/100 + y/400 + (153*m+2)/5 + d - 1 - 719468
}
