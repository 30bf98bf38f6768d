package config

import (
	"slices"
	"strings"
	"time"
)

// Rhythm is when a line runs: stretches of the week by the clock on the wall. None stands for
// always.
type Rhythm []Stretch

// Stretch is a part of each week.
type Stretch struct {
	Day      time.Weekday
	From, To Clock // To may be 24:00; at or before From it is on the next day
}

var weekdays = []string{"Sun", "Mon", "Tue", "Wed", "Thu", "Fri", "Sat"}

// parseRuns reads "Mon-Fri 06:00-22:00", "Sat,Sun 06:00-14:00", or hours alone for every day.
func parseRuns(text string) (all []Stretch, ok bool) {
	fields := strings.Fields(text)
	days := []int{1, 2, 3, 4, 5, 6, 0}
	switch {
	case len(fields) == 2:
		if days, ok = parseDays(fields[0]); !ok {
			return nil, false
		}
	case len(fields) != 1:
		return nil, false
	}
	first, last, ok := strings.Cut(fields[len(fields)-1], "-")
	from, fromOK := parseClock(first)
	to, toOK := parseClock(last)
	if !ok || !fromOK || !toOK || from.Hour == 24 || from == to {
		return nil, false
	}
	for _, day := range days {
		all = append(all, Stretch{time.Weekday(day), from, to})
	}
	return all, true
}

func parseDays(text string) (days []int, ok bool) {
	for _, part := range strings.Split(text, ",") {
		first, last, span := strings.Cut(part, "-")
		if !span {
			last = first
		}
		from, to := slices.Index(weekdays, first), slices.Index(weekdays, last)
		if from < 0 || to < 0 {
			return nil, false
		}
		for day := from; ; day = (day + 1) % 7 {
			days = append(days, day)
			if day == to {
				break
			}
		}
	}
	return days, true
}

func parseClock(text string) (Clock, bool) {
	if text == "24:00" {
		return Clock{24, 0}, true
	}
	t, err := time.Parse("15:04", text)
	return Clock{t.Hour(), t.Minute()}, err == nil
}

// Running is how long a line that keeps this rhythm ran between two moments, by the clock of a zone.
func (r Rhythm) Running(from, to time.Time, zone *time.Location) time.Duration {
	if !from.Before(to) {
		return 0
	}
	if len(r) == 0 {
		return to.Sub(from)
	}
	type span struct{ from, to time.Time }
	var spans []span
	y, m, d := from.In(zone).AddDate(0, 0, -1).Date() // a stretch may reach into the next day
	for day := 0; ; day++ {
		noon := time.Date(y, m, d+day, 12, 0, 0, 0, zone)
		if noon.AddDate(0, 0, -1).After(to) {
			break
		}
		for _, s := range r {
			if s.Day != noon.Weekday() {
				continue
			}
			begin, end := on(noon, 0, s.From), on(noon, 0, s.To)
			if !begin.Before(end) {
				end = on(noon, 1, s.To)
			}
			if begin, end = later(begin, from), sooner(end, to); begin.Before(end) {
				spans = append(spans, span{begin, end})
			}
		}
	}
	slices.SortFunc(spans, func(a, b span) int { return a.from.Compare(b.from) })
	var ran time.Duration
	done := from
	for _, s := range spans { // stretches may overlap
		if begin := later(s.from, done); begin.Before(s.to) {
			ran += s.to.Sub(begin)
			done = s.to
		}
	}
	return ran
}

// on is a time of day on the date of a moment, or some days later.
func on(date time.Time, days int, c Clock) time.Time {
	y, m, d := date.Date()
	return time.Date(y, m, d+days, c.Hour, c.Minute, 0, 0, date.Location())
}

func later(a, b time.Time) time.Time {
	if a.After(b) {
		return a
	}
	return b
}

func sooner(a, b time.Time) time.Time {
	if a.Before(b) {
		return a
	}
	return b
}
