package intake

import (
	"fmt"
	"strconv"
	"strings"
	"time"

	"steelyard/monitor/config"
)

// number reads a decimal number with the decimal sign that the source declares. Hexadecimal,
// underscores, infinities, NaN, groups of digits and numbers beyond float64 are refused: a
// sentence says what was read and what was expected.
func (f *fileReader) number(text string) (float64, string) {
	expected := fmt.Sprintf("read %.60q; a decimal number with %q as its decimal sign was expected", text, f.src.Form.Decimal)
	plain := text
	if f.src.Form.Decimal == ',' {
		if strings.Contains(text, ".") {
			return 0, expected
		}
		plain = strings.Replace(text, ",", ".", 1)
	}
	if !isDecimal(plain) {
		return 0, expected
	}
	x, err := strconv.ParseFloat(plain, 64)
	if err != nil {
		return 0, fmt.Sprintf("read %.60q; a number that a computer's float64 can hold was expected", text)
	}
	return x, ""
}

// isDecimal says whether the text is digits with at most a sign, a point and an exponent.
func isDecimal(s string) bool {
	i, digits := 0, 0
	sign := func() {
		if i < len(s) && (s[i] == '+' || s[i] == '-') {
			i++
		}
	}
	run := func() {
		for ; i < len(s) && '0' <= s[i] && s[i] <= '9'; i++ {
			digits++
		}
	}
	sign()
	run()
	if i < len(s) && s[i] == '.' {
		i++
		run()
	}
	if digits == 0 {
		return false
	}
	if i < len(s) && (s[i] == 'e' || s[i] == 'E') {
		i, digits = i+1, 0
		sign()
		if run(); digits == 0 {
			return false
		}
	}
	return i == len(s)
}

// timeReader reads times as a source declares them.
type timeReader struct {
	zone    *time.Location
	layouts []string
	pattern string // for people
}

func newTimeReader(f *config.Form) timeReader {
	if f.TimeFormat == "iso" {
		return timeReader{f.Zone, []string{
			time.RFC3339, "2006-01-02 15:04:05Z07:00", "2006-01-02T15:04:05", time.DateTime, "2006-01-02T15:04", "2006-01-02 15:04",
		}, "a time such as 2026-03-02T10:41:07"}
	}
	layout := strings.NewReplacer("YYYY", "2006", "MM", "01", "DD", "02", "hh", "15", "mm", "04", "ss", "05").Replace(f.TimeFormat)
	return timeReader{f.Zone, []string{layout}, "a time written as " + f.TimeFormat}
}

// read reads a time. A time without an offset is by the clock of the source's zone: in the hour
// that the clock leaves out there is no such time, and the sentence says so; of the two in the
// hour that it repeats, it is the one that does not go back behind the row before, else the
// earlier.
func (r *timeReader) read(text string, before time.Time) (time.Time, string) {
	for _, layout := range r.layouts {
		t, err := time.ParseInLocation(layout, text, r.zone)
		if err != nil {
			continue
		}
		if strings.Contains(layout, "Z07:00") {
			return t, ""
		}
		if t.Format(layout) != mustWall(layout, text) {
			return time.Time{}, fmt.Sprintf("read %.60q; the clock of %s left that time out when it was put forward", text, r.zone)
		}
		return r.choose(t, before), ""
	}
	return time.Time{}, fmt.Sprintf("read %.60q; %s was expected", text, r.pattern)
}

// mustWall is the reading of the clock in the text, whatever the zone.
func mustWall(layout, text string) string {
	t, err := time.ParseInLocation(layout, text, time.UTC)
	if err != nil {
		return text
	}
	return t.Format(layout)
}

// choose decides between the two instants that one reading of the clock may stand for.
func (r *timeReader) choose(t, before time.Time) time.Time {
	wall := t.Format("2006-01-02 15:04:05.999999999")
	early, late := t, t
	for _, shift := range []time.Duration{30 * time.Minute, time.Hour, 2 * time.Hour} {
		if a := t.Add(-shift); a.Format("2006-01-02 15:04:05.999999999") == wall {
			early = a
		}
		if a := t.Add(shift); a.Format("2006-01-02 15:04:05.999999999") == wall {
			late = a
		}
	}
	if !before.IsZero() && early.Before(before) && !late.Before(before) {
		return late
	}
	return early
}
