// Package daylog writes the daily log: what came in, what was held and why, what crossed,
// the stretches in which nothing was watching, and where each process stands.
//
// A production day starts at a time of day by the clock on the wall and ends when the next
// one starts, so it may last 23 or 25 hours. A Log is made from the journal's records of that
// stretch and the engine's state at its end, and from nothing else; it is written once as
// Markdown for people and once as JSON for machines.
package daylog

import (
	"fmt"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// Day is one production day: from From, up to but not including To.
type Day struct {
	Label string // the date on which it started: 2026-03-02
	From  time.Time
	To    time.Time
}

// DayOf is the production day in which t falls.
func DayOf(t time.Time, zone *time.Location, starts config.Clock) Day {
	local := t.In(zone)
	day := startOn(local.Year(), local.Month(), local.Day(), zone, starts)
	if t.Before(day) {
		before := local.AddDate(0, 0, -1)
		return dayFrom(before.Year(), before.Month(), before.Day(), zone, starts)
	}
	return dayFrom(local.Year(), local.Month(), local.Day(), zone, starts)
}

// ParseDay is the production day that started on a date written as 2026-03-02.
func ParseDay(label string, zone *time.Location, starts config.Clock) (Day, error) {
	date, err := time.Parse(time.DateOnly, label)
	if err != nil {
		return Day{}, fmt.Errorf("day %q: a date such as 2026-03-02 is expected", label)
	}
	return dayFrom(date.Year(), date.Month(), date.Day(), zone, starts), nil
}

func dayFrom(y int, m time.Month, d int, zone *time.Location, starts config.Clock) Day {
	from := startOn(y, m, d, zone, starts)
	next := time.Date(y, m, d+1, 12, 0, 0, 0, time.UTC)
	return Day{
		Label: time.Date(y, m, d, 12, 0, 0, 0, time.UTC).Format(time.DateOnly),
		From:  from, To: startOn(next.Year(), next.Month(), next.Day(), zone, starts),
	}
}

// startOn is when the production day of a date starts. In the hour that a clock change
// leaves out, time.Date moves on by the length of the gap.
func startOn(y int, m time.Month, d int, zone *time.Location, starts config.Clock) time.Time {
	return time.Date(y, m, d, starts.Hour, starts.Minute, 0, 0, zone)
}

// Log is one day's log.
type Log struct {
	Type      string           `json:"type"` // "daylog"
	Site      string           `json:"site"`
	Day       string           `json:"day"`
	From      time.Time        `json:"from"`
	To        time.Time        `json:"to"`    // the end of the day, or the moment of writing while it goes on
	Whole     bool             `json:"whole"` // the day was over when this was written
	Written   time.Time        `json:"written"`
	Records   [2]uint64        `json:"records"` // of the journal: from, up to but not including
	Sources   []Source         `json:"sources"`
	Held      []Held           `json:"held"`
	LeftOut   []LeftOut        `json:"left_out,omitempty"` // rows, as declared
	Changes   []Change         `json:"changes"`
	Gaps      []Gap            `json:"not_watching"`
	Remarks   []string         `json:"remarks"`
	Processes []rules.Standing `json:"processes"`
	Alarms    []Alarm          `json:"alarms"` // that stood at the end
	Caution   string           `json:"caution"`

	// A signed checkpoint of the journal and the key to verify it with: a copy of this log that left the machine
	// shows later that the journal up to there was not changed.
	Checkpoint string `json:"checkpoint,omitempty"`
	Verifying  string `json:"verifying,omitempty"`
}

// Source is what came from one source.
type Source struct {
	Name         string `json:"name"`
	Files        int    `json:"files"` // counted
	Rows         int    `json:"rows"`
	Measurements int    `json:"measurements"`
	HeldFiles    int    `json:"held_files"`
	HeldRows     int    `json:"held_rows"`
	Again        int    `json:"again"` // files whose content had been taken before

	Beyond  int      `json:"beyond,omitempty"`  // readings beyond a gauge's limits
	Parts   int      `json:"parts,omitempty"`   // readings of reference parts
	Ignored []string `json:"ignored,omitempty"` // columns that nothing is mapped to
}

// Held is one file, or one row, that was not counted.
type Held struct {
	At     time.Time `json:"at"`
	Record uint64    `json:"record"`
	Source string    `json:"source"`
	File   string    `json:"file"`
	Line   int       `json:"line,omitempty"` // 0: the file whole
	Reason string    `json:"reason"`
	Text   string    `json:"text,omitempty"`
}

// Change is one step of an alarm, in words.
type Change struct {
	At     time.Time        `json:"at"`
	Record uint64           `json:"record"`
	Alarm  string           `json:"alarm"`
	Rule   string           `json:"rule"`
	Cause  rules.Cause      `json:"cause"`
	To     rules.AlarmState `json:"to"`
	Text   string           `json:"text"`
}

// Gap is a stretch in which something was not watched.
type Gap struct {
	From time.Time `json:"from"`
	To   time.Time `json:"to,omitzero"` // zero: it had not ended
	What string    `json:"what"`        // "everything", or "source rig1"
	Why  string    `json:"why"`
}

// Alarm is one that stood when the log was written.
type Alarm struct {
	Alarm string           `json:"alarm"`
	State rules.AlarmState `json:"state"`
	Since time.Time        `json:"since"`
	Says  string           `json:"says"`
}
