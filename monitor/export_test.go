package monitor

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"strconv"
	"strings"
	"testing"
	"time"

	"steelyard/monitor/daylog"
)

// What is exported is what was counted, digit for digit, from a running daemon and from its store; and no cell is a formula.
func TestExport(t *testing.T) {
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	text := rows("L1", 0, 12, 33) + "L1,=cmd|' /C calc'!A0,33.1\nL1,-5+2,33.2\n"
	drop(t, cfg.Sources[0].Folder, "a.csv", text)
	drop(t, cfg.Sources[0].Folder, "b.csv", rows("L4", 50, 20, 34.5))
	d.until("two files are counted", func(s *Status) bool { return s.Sources[0].Counted == 2 })
	d.until("an alarm stands", func(s *Status) bool { return len(s.Alarms) > 0 })
	remote := dial(cfg.Site.State)
	for _, from := range []Counter{d.Desk, remote} {
		var out bytes.Buffer
		if err := from.Export(Export{What: "measurements", Form: "csv"}, &out); err != nil {
			t.Fatal(err)
		}
		all, err := csv.NewReader(&out).ReadAll()
		if err != nil || len(all) != 1+14+20 {
			t.Fatalf("%d rows, %v", len(all), err)
		}
		sum := 0.0
		for _, row := range all[1:] {
			v, err := strconv.ParseFloat(row[8], 64)
			if err != nil {
				t.Fatal(err)
			}
			sum += v
			for _, cell := range row {
				if cell != "" && strings.ContainsAny(cell[:1], "=+-@\t\r") {
					t.Errorf("a cell begins as a formula does: %q", cell)
				}
			}
		}
		if !strings.HasPrefix(all[13][6], "'=cmd") || !strings.HasPrefix(all[14][6], "'-5") {
			t.Errorf("%q, %q", all[13], all[14])
		}
		if sum < 33*14+34.5*20-5 || sum > 33*14+34.5*20+5 {
			t.Errorf("the values add up to %v", sum)
		}
		for _, what := range []string{"looks", "crossings", "measurements"} {
			out.Reset()
			if err := from.Export(Export{What: what, Form: "jsonl"}, &out); err != nil {
				t.Fatal(err)
			}
			n := 0
			for line := range strings.Lines(out.String()) {
				var object map[string]any
				if err := json.Unmarshal([]byte(line), &object); err != nil || object["type"] != strings.TrimSuffix(what, "s") {
					t.Errorf("%s: %v", line, err)
				}
				n++
			}
			if n == 0 {
				t.Errorf("no %s", what)
			}
		}
		out.Reset()
		if err := from.Export(Export{What: "looks", Form: "csv", From: time.Now().Add(time.Hour)}, &out); err != nil || strings.Count(out.String(), "\n") != 1 {
			t.Errorf("from the future: %q, %v", out.String(), err)
		}
		if err := from.Export(Export{What: "everything", Form: "csv"}, &out); err == nil {
			t.Error("a kind that there is not")
		}
	}
}

// A clock that is set back loses nothing: each record goes by its own time, in the export and in the day log.
func TestExportWhereTheClockWasSetBack(t *testing.T) {
	cfg := plant(t, twoLines)
	clock := &shifted{}
	d := startBy(t, cfg, clock.now)
	clock.by.Store(int64(2 * time.Hour))
	drop(t, cfg.Sources[0].Folder, "a.csv", rows("L1", 0, 5, 33))
	d.until("the first is counted", func(s *Status) bool { return s.Sources[0].Counted == 1 })
	clock.by.Store(0)
	drop(t, cfg.Sources[0].Folder, "b.csv", rows("L4", 50, 7, 33))
	d.until("the second is counted", func(s *Status) bool { return s.Sources[0].Counted == 2 })
	var out bytes.Buffer
	if err := d.Export(Export{What: "measurements", Form: "csv", To: time.Now().Add(time.Hour)}, &out); err != nil || strings.Count(out.String(), "\n") != 8 {
		t.Errorf("%v: %s", err, out.String())
	}
	day := daylog.DayOf(time.Now(), cfg.Site.Zone, cfg.Site.DayStarts)
	rowsIn := func(label string) (n int) {
		log, err := d.DayLog(label)
		if err != nil {
			return 0 // tomorrow, which has not begun
		}
		for _, s := range log.Sources {
			n += s.Rows
		}
		return n
	}
	next := daylog.DayOf(day.To.Add(time.Hour), cfg.Site.Zone, cfg.Site.DayStarts)
	if clock.by.Store(int64(24 * time.Hour)); rowsIn(day.Label)+rowsIn(next.Label) != 12 {
		t.Errorf("the day logs have %d and %d of 12 rows", rowsIn(day.Label), rowsIn(next.Label))
	}
}
