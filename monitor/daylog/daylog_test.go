package daylog

import (
	"strings"
	"testing"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// Lisbon's clock goes forward on 29 March 2026 and back on 25 October (IANA time zone database).
func TestProductionDays(t *testing.T) {
	zone, err := time.LoadLocation("Europe/Lisbon")
	if err != nil {
		t.Fatal(err)
	}
	for label, hours := range map[string]float64{"2026-03-02": 24, "2026-03-28": 23, "2026-10-24": 25, "2028-02-29": 24, "2026-12-31": 24} {
		day, err := ParseDay(label, zone, config.Clock{Hour: 6})
		if err != nil {
			t.Fatal(err)
		}
		if got := day.To.Sub(day.From).Hours(); got != hours || day.From.In(zone).Hour() != 6 || day.To.In(zone).Hour() != 6 {
			t.Errorf("%s: %v hours from %v to %v", label, got, day.From, day.To)
		}
		for _, at := range []time.Time{day.From, day.To.Add(-time.Second)} {
			if got := DayOf(at, zone, config.Clock{Hour: 6}); got != day {
				t.Errorf("%v falls in %v, want %v", at, got, day)
			}
		}
	}
	if _, err := ParseDay("2. March", zone, config.Clock{}); err == nil {
		t.Error("a date in another form was taken")
	}
}

func TestLog(t *testing.T) {
	day, err := ParseDay("2026-03-02", time.UTC, config.Clock{})
	if err != nil {
		t.Fatal(err)
	}
	c := NewCollector(day, rules.Plan{Site: "Tessmoor Pumpworks"}, time.UTC)
	at := func(h int) time.Time { return day.From.Add(time.Duration(h) * time.Hour) }
	for i, e := range []rules.Event{
		{At: at(1), Started: &rules.Started{LastAlive: at(-2), Host: "h", Program: "p"}},
		{At: at(2), Held: &rules.Held{Source: "rig1", File: "x|y.csv", Reason: "x|y.csv: <b>bad</b>\x1b[31m"}},
		{At: at(3), Watching: &rules.Watching{Source: "rig2", Why: "it is gone"}},
		{At: at(5), Watching: &rules.Watching{Source: "rig2", Able: true}},
		{At: at(6), Again: &rules.Again{Source: "rig1"}},
		{At: at(7), Watching: &rules.Watching{Source: "rig3", Why: "no folder"}},
	} {
		e.Index = uint64(40 + i)
		c.Add(&e, &rules.Outcomes{})
	}
	log := c.Finish(rules.NewState(), at(30))
	if !log.Whole || log.Records != [2]uint64{40, 46} || len(log.Gaps) != 3 || log.Gaps[0].From != day.From || !log.Gaps[2].To.IsZero() ||
		log.Gaps[1].To.Sub(log.Gaps[1].From) != 2*time.Hour {
		t.Errorf("%+v", log)
	}
	text := string(log.Markdown(time.UTC))
	for _, want := range []string{rules.ReleaseNote, `\<b\>bad\</b\>\x1b\[31m`, "source rig2, from 03:00:00 to 05:00:00, 2h0m0s: it is gone", "killed, or the power failed"} {
		if !strings.Contains(text, want) {
			t.Errorf("the log does not say %q:\n%s", want, text)
		}
	}
}
