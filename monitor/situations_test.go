package monitor

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
	"steelyard/monitor/daylog"
	"steelyard/rules"
)

// The situations that plants bring about, each with real files through the real daemon; DEVELOPERS.md lists
// them, with those that are tested elsewhere (2, 11, 16) and those that are not handled (7, 22).

// shop is a configuration of one line and one source, to which a situation adds what it declares.
type shop struct{ characteristic, source, columns, rest string }

func (s shop) text() string {
	columns := s.columns
	if columns == "" {
		columns = `head = "Head kPa"`
	}
	return `
[site]
name = "Tessmoor Pumpworks"
time_zone = "Europe/Lisbon"
[characteristic.head]
title = "delivery head"
unit = "kPa"
lines = ["L1", "L4"]
` + s.characteristic + `
[source.rig]
folder = "drop"
settle = "0s"
scan = "100ms"
` + s.source + `
[source.rig.columns]
line = "Line"
serial = "Serial"
` + columns + "\n" + s.rest
}

// opened is a daemon of a shop, and the folder into which its rig drops.
func (s shop) opened(t *testing.T) (*daemon, string) {
	t.Helper()
	cfg := plant(t, s.text())
	return start(t, cfg), cfg.Sources[0].Folder
}

func (d *daemon) counted(n int) *Status {
	d.t.Helper()
	return d.until(fmt.Sprintf("%d files are counted", n), func(s *Status) bool { return s.Sources[0].Counted == n })
}

func (d *daemon) held(n int) *Status {
	d.t.Helper()
	return d.until(fmt.Sprintf("%d files are held", n), func(s *Status) bool { return s.Sources[0].Held == n })
}

func (d *daemon) log() (*daylog.Log, string) {
	d.t.Helper()
	log, err := d.DayLog("")
	if err != nil {
		d.t.Fatal(err)
	}
	return log, string(log.Markdown(d.cfg.Site.Zone))
}

// says checks that a text has every one of some sentences.
func says(t *testing.T, text string, wanted ...string) {
	t.Helper()
	for _, want := range wanted {
		if !strings.Contains(text, want) {
			t.Errorf("it does not say %q:\n%s", want, text)
		}
	}
}

// follows ends the daemon and drives a fresh engine over its record: every outcome must follow again.
func (d *daemon) follows() {
	d.t.Helper()
	state := d.cfg.Site.State
	d.stop()
	if _, err := Verify(Verification{Folder: state}); err != nil {
		d.t.Errorf("the record does not follow from itself: %v", err)
	}
}

func unitsOf(st *Status, process string) float64 { return standingOf(st.Processes, process).Units }

func TestSituation01FileAppendedAllDay(t *testing.T) {
	d, folder := shop{source: `arrives = "growing"`}.opened(t)
	path := filepath.Join(folder, "day.csv")
	file, err := os.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	add := func(text string) {
		if _, err := file.WriteString(text); err != nil {
			t.Fatal(err)
		}
	}
	add("Line,Serial,Head kPa\nL1,a,33.1\nL1,b,33.2\nL1,c,3")
	d.until("the whole rows are counted", func(s *Status) bool { return unitsOf(s, "head.L1") == 2 })
	add("3.3\nL1,d,33.4\n")
	st := d.until("the half row is whole", func(s *Status) bool { return unitsOf(s, "head.L1") == 4 })
	if got := standingOf(st.Processes, "head.L1").Estimate.Median; got < 33.2 || got > 33.3 {
		t.Errorf("mean %v", got)
	}
	d.follows()
}

func TestSituation03SameFileTwice(t *testing.T) {
	d, folder := shop{}.opened(t)
	drop(t, folder, "a.csv", rows("L1", 0, 5, 33))
	d.counted(1)
	drop(t, folder, "b.csv", rows("L1", 0, 5, 33))
	st := d.until("it came again", func(s *Status) bool { return s.Sources[0].Again == 1 })
	if unitsOf(st, "head.L1") != 5 {
		t.Errorf("%v units", unitsOf(st, "head.L1"))
	}
	d.follows()
}

func TestSituation04ToolChange(t *testing.T) {
	d, folder := shop{}.opened(t)
	drop(t, folder, "a.csv", rows("L1", 0, 5, 33))
	d.counted(1)
	if _, err := d.Mark(Mark{Line: "L1", Note: "new impeller", By: "the setter", How: "test"}); err != nil {
		t.Fatal(err)
	}
	drop(t, folder, "b.csv", rows("L1", 5, 3, 34))
	st := d.counted(2)
	if p := standingOf(st.Processes, "head.L1"); p.Units != 3 || p.Taken != 8 || p.SegmentNote != "new impeller" {
		t.Errorf("%+v", p)
	}
	_, text := d.log()
	says(t, text, "A new segment began for head.L1 (new impeller), by the setter")
	d.follows()
}

// shifted is a clock that a test sets forward.
type shifted struct{ by atomic.Int64 }

func (c *shifted) now() time.Time { return time.Now().Add(time.Duration(c.by.Load())) }

// startBy is start with a clock of the test's own.
func startBy(t *testing.T, cfg *config.Config, now func() time.Time) *daemon {
	t.Helper()
	desk, err := Open(cfg, Options{Log: zerolog.Nop(), Now: now})
	if err != nil {
		t.Fatal(err)
	}
	ctx, end := context.WithCancel(context.Background())
	d := &daemon{Desk: desk, t: t, end: end, done: make(chan error, 1)}
	go func() { d.done <- desk.Run(ctx, nil) }()
	t.Cleanup(func() { d.stop() })
	return d
}

// An idle line is told from one that is fine: a rule waits for something to be counted, within the hours in
// which the line runs; the clock that was put forward to see it is noted too.
func TestSituation05LineIdle(t *testing.T) {
	clock := &shifted{}
	tomorrow := weekdayOf(t, 1)
	cfg := plant(t, shop{rest: `
[line.L4]
runs = ["` + tomorrow + ` 00:00-24:00"]
[[rule]]
name = "L1 idle"
quiet = "20h"
line = "L1"
first_check = "whether L1 runs"
tell = ["leads"]
[[rule]]
name = "L4 idle"
quiet = "30h"
line = "L4"
tell = ["leads"]
[feed.leads]
kind = "file"
path = "leads.jsonl"
`}.text())
	d := startBy(t, cfg, clock.now)
	drop(t, cfg.Sources[0].Folder, "a.csv", rows("L1", 0, 5, 33))
	d.counted(1)
	clock.by.Store(int64(20*time.Hour + time.Minute))
	st := d.until("the alarm stands", func(s *Status) bool { return len(s.Alarms) == 1 })
	if st.Alarms[0].Rule != "L1 idle" || unitsOf(st, "head.L1") != 5 || st.Stepped == nil {
		t.Errorf("%+v, %+v", st.Alarms, st.Stepped)
	}
	clock.by.Store(int64(6 * 24 * time.Hour)) // L4 runs one day a week: 24 hours are less than 30
	d.until("the clock is seen to step again", func(s *Status) bool { return s.Stepped.Is.Sub(s.Stepped.Was) > 24*time.Hour })
	drop(t, cfg.Sources[0].Folder, "b.csv", rows("L1", 5, 1, 33))
	d.until("it has returned", func(s *Status) bool { return len(s.Alarms) == 1 && s.Alarms[0].State == rules.Returned })
	d.until("the feed is told", func(s *Status) bool { return s.Feeds[0].Waiting == 0 })
	told := messages(t, cfg.Feeds[0].Path)
	if len(told) != 2 {
		t.Fatalf("told %d times: %+v", len(told), told)
	}
	says(t, told[0].Data.Text, "line L1: nothing has been counted for 20h", "Look first at: whether L1 runs", rules.ReleaseNote)
	says(t, told[1].Data.Text, "line L1: something has been counted again")
	if x, err := d.Explain(1); err != nil || x.Rule.Quiet == nil || len(x.Steps) != 2 {
		t.Errorf("%+v, %v", x, err)
	}
	if _, err := d.Exhibit(1); err == nil || !strings.Contains(err.Error(), "raised by the clock") {
		t.Errorf("an exhibit of an alarm without measurements: %v", err)
	}
	_, text := d.log()
	says(t, text, "something has been counted again", "does not replace the site's release procedures")
	d.follows()
}

// weekdayOf is the day of the week so many days from now, as rhythms write it.
func weekdayOf(t *testing.T, days int) string {
	t.Helper()
	zone, err := time.LoadLocation("Europe/Lisbon")
	if err != nil {
		t.Fatal(err)
	}
	return time.Now().In(zone).AddDate(0, 0, days).Weekday().String()[:3]
}

// A clock that was put forward is in the day log, as a stretch in which nothing may have been watching.
func TestClockStepped(t *testing.T) {
	clock := &shifted{}
	cfg := plant(t, shop{}.text())
	d := startBy(t, cfg, clock.now)
	d.until("it watches", func(s *Status) bool { return s.Records >= 2 })
	clock.by.Store(int64(90 * time.Second))
	d.until("the step is seen", func(s *Status) bool { return s.Stepped != nil })
	clock.by.Store(0)
	d.until("and the way back", func(s *Status) bool { return s.Stepped.Is.Before(s.Stepped.Was) })
	log, text := d.log()
	says(t, text, "The clock on the wall went forward by 1m", "The clock on the wall was set back by 1m")
	if len(log.Gaps) != 1 || log.Gaps[0].To.Sub(log.Gaps[0].From).Round(time.Second) != 90*time.Second {
		t.Errorf("gaps %+v", log.Gaps)
	}
	d.follows()
}

const ring7 = `
[reference.ring7]
characteristic = "head"
serials = ["REF-7"]
certified = 33.5
uncertainty = 0.02
`

// A rig that is recalibrated starts anew, on all its lines and in its offset.
func TestSituation06RigRecalibrated(t *testing.T) {
	d, folder := shop{rest: ring7}.opened(t)
	drop(t, folder, "a.csv", rows("L1", 0, 4, 33.55)+"L4,x,34\nL1,REF-7,34.05\nL1,REF-7,34.06\nL1,REF-7,34.04\n")
	st := d.counted(1)
	if p := standingOf(st.Processes, "rig"); p.Units != 3 || p.Estimate.Median < 0.549 || p.Estimate.Median > 0.551 {
		t.Errorf("before: %+v", p)
	}
	if _, err := d.Mark(Mark{Source: "rig", Note: "recalibrated", By: "the metrologist", How: "test"}); err != nil {
		t.Fatal(err)
	}
	drop(t, folder, "b.csv", rows("L1", 4, 4, 33)+"L1,REF-7,33.49\nL1,REF-7,33.51\n")
	st = d.counted(2)
	for process, want := range map[string]float64{"head.L1": 4, "head.L4": 0, "rig": 2} {
		if got := unitsOf(st, process); got != want {
			t.Errorf("%s: %v units, want %v", process, got, want)
		}
	}
	if p := standingOf(st.Processes, "rig"); p.Estimate.Median < -0.001 || p.Estimate.Median > 0.001 || p.SegmentNote != "recalibrated" {
		t.Errorf("after: %+v", p)
	}
	d.follows()
}

// A file in another unit: beyond what is plausible its rows are held, and where nothing was declared of that, a
// batch far outside everything seen is held whole. A person who takes it after all is heeded.
func TestSituation08UnitMixUp(t *testing.T) {
	d, folder := shop{characteristic: "plausible = { lower = 0, upper = 100 }"}.opened(t)
	drop(t, folder, "psi.csv", rows("L1", 0, 5, 33*145))
	st := d.held(1)
	says(t, st.Sources[0].Remark, "expected a plausible value, 0 to 100")

	d, folder = shop{characteristic: "far = 8"}.opened(t)
	drop(t, folder, "a.csv", rows("L1", 0, 20, 33))
	d.counted(1)
	drop(t, folder, "psi.csv", rows("L1", 20, 5, 33*0.145))
	st = d.held(1)
	says(t, st.Sources[0].Remark, "psi.csv", "the median of its 5 values of head.L1 is 4.78", "from the mean of the 20 units remembered; at most 8 are expected")
	if unitsOf(st, "head.L1") != 20 {
		t.Errorf("%v units", unitsOf(st, "head.L1"))
	}
	if list, err := d.Held(); err != nil || len(list) != 1 {
		t.Errorf("%+v, %v", list, err)
	}
	d.follows()
}

// Two characteristics in one file: a cell that can't be read holds its row and no other. No half of a row counts.
func TestSituation09TwoCharacteristics(t *testing.T) {
	d, folder := shop{columns: "head = \"Head kPa\"\nbore = \"Bore mm\"", rest: "[characteristic.bore]\nlines = [\"L1\"]\n"}.opened(t)
	drop(t, folder, "a.csv", "Serial,Bore mm,Line,Head kPa\na,8.01,L1,33.1\nb,oops,L1,33.2\nc,,L1,33.3\nd,8.02,L1,33.4\n")
	st := d.counted(1)
	if unitsOf(st, "head.L1") != 3 || unitsOf(st, "bore.L1") != 2 {
		t.Errorf("%v and %v units", unitsOf(st, "head.L1"), unitsOf(st, "bore.L1"))
	}
	says(t, st.Sources[0].Remark, `a.csv, line 3: column 2 ("Bore mm"): read "oops"`)
	d.follows()
}

// Readings at the gauge's limit are counted as such, and a mean is not weighed on what is left.
func TestSituation10BeyondTheGauge(t *testing.T) {
	d, folder := shop{
		characteristic: "censored_at_most = 0.1", columns: `head = { column = "Head kPa", beyond = true }`,
		rest: "[[rule]]\nname = \"over\"\nclaim = \"mean(head.L1) > 32\"\ntell = []\n",
	}.opened(t)
	drop(t, folder, "a.csv", rows("L1", 0, 18, 33)+"L1,x,>200\nL1,y,> 200\n")
	st := d.counted(1)
	if len(st.Alarms) != 1 {
		t.Errorf("2 of 20 are a share that was declared: %+v", st.Rules)
	}
	drop(t, folder, "b.csv", "Line,Serial,Head kPa\nL1,z,>200\n")
	st = d.counted(2)
	says(t, st.Rules[0].Look.Withheld, "head.L1: 3 of the 21 readings remembered lie beyond the gauge's limits (14.3 %), and no more than 10 % may")
	if p := standingOf(st.Processes, "head.L1"); p.Units != 18 || p.Beyond.N != 3 || p.Estimate != nil {
		t.Errorf("%+v", p)
	}
	log, text := d.log()
	if log.Sources[0].Beyond != 3 || log.Sources[0].Measurements != 18 {
		t.Errorf("%+v", log.Sources[0])
	}
	says(t, text, "rig: 3 readings beyond a gauge's limits", "head.L1: 3 of the 21 readings remembered")
	d.follows()
}

// Reference parts among the product never enter a process; they tell the rig's offset.
func TestSituation12ReferenceParts(t *testing.T) {
	d, folder := shop{rest: ring7 + "[[rule]]\nname = \"rig off\"\nclaim = \"|bias(rig)| > 0.2\"\nleast_units = 3\ntell = []\n"}.opened(t)
	drop(t, folder, "a.csv", rows("L1", 0, 3, 33)+"L1,REF-7,34.05\n,REF-7,34.06\nL9,REF-7,34.04\n")
	st := d.counted(1)
	if unitsOf(st, "head.L1") != 3 || unitsOf(st, "rig") != 3 || len(st.Alarms) != 1 {
		t.Errorf("%+v, %+v", st.Processes, st.Alarms)
	}
	log, text := d.log()
	if s := log.Sources[0]; s.Parts != 3 || s.Measurements != 3 {
		t.Errorf("%+v", s)
	}
	says(t, text, "## Where each rig stands, by reference parts", "| rig | delivery head | 3 | 0.55", "ring7, certified 33.5 kPa (standard uncertainty 0.02 kPa)", "is stated and not weighed")
	x, err := d.Explain(1)
	if err != nil || x.Processes[0].After.Units != 3 || !strings.Contains(x.Says, "the rig's offset") {
		t.Errorf("%+v, %v", x, err)
	}
	d.follows()
}

func TestSituation13DecimalComma(t *testing.T) {
	d, folder := shop{source: "delimiter = \";\"\ndecimal = \",\""}.opened(t)
	drop(t, folder, "a.csv", "Line;Serial;Head kPa\nL1;a;33,25\nL1;b;33.25\n")
	st := d.counted(1)
	if unitsOf(st, "head.L1") != 1 {
		t.Errorf("%v units", unitsOf(st, "head.L1"))
	}
	d.stop()
	d, folder = shop{}.opened(t)
	drop(t, folder, "a.csv", "Line,Serial,Head kPa\nL1,a,\"1,234\"\n")
	says(t, d.held(1).Sources[0].Remark, `read "1,234", where ',' may be a decimal sign or stand between groups of digits`)
	d.follows()
}

func TestSituation14Encoding(t *testing.T) {
	d, folder := shop{}.opened(t)
	drop(t, folder, "mark.csv", "\ufeffLine,Serial,Head kPa\nL1,a,33.1\n")
	d.counted(1)
	drop(t, folder, "ansi.csv", "Line,Serial,Head kPa\nL1,\xc4-1,33.1\nL1,b,33.2\n")
	st := d.counted(2)
	log, _ := d.log()
	if unitsOf(st, "head.L1") != 2 || len(log.Held) != 1 || log.Held[0].Text != `L1,\xc4-1,33.1` {
		t.Errorf("%+v", log.Held)
	}
	d.stop()
	d, folder = shop{source: `encoding = "windows-1252"`}.opened(t)
	drop(t, folder, "ansi.csv", "Line,Serial,Head kPa\nL1,\xc4-1,33.1\n")
	d.counted(1)
	d.follows()
}

// A rig's clock: what was measured after it arrived is held; an hour that the clock showed twice is decided,
// and that is said.
func TestSituation15RigClock(t *testing.T) {
	d, folder := shop{source: "behind = \"17520h\"", columns: "time = \"At\"\nhead = \"Head kPa\""}.opened(t)
	ahead := time.Now().Add(2 * time.Hour).UTC().Format(time.RFC3339)
	now := time.Now().UTC().Format(time.RFC3339)
	drop(t, folder, "a.csv", "At,Line,Serial,Head kPa\n"+now+",L1,a,33.1\n"+ahead+",L1,b,33.2\n1970-01-01T00:00:09Z,L1,c,33.3\n")
	st := d.counted(1)
	log, _ := d.log()
	if unitsOf(st, "head.L1") != 1 || len(log.Held) != 2 {
		t.Fatalf("%+v", log.Held)
	}
	says(t, log.Held[0].Reason, "after it arrived; expected a time at most 1h0m ahead")
	says(t, log.Held[1].Reason, "days before it arrived; expected a time at most 730 days back")
	d.stop()
	d, folder = shop{columns: "time = \"At\"\nhead = \"Head kPa\""}.opened(t)
	drop(t, folder, "a.csv", "At,Line,Serial,Head kPa\n2025-10-26 01:30:00,L1,a,33.1\n2025-10-26 01:59:00,L1,b,33.2\n2025-10-26 01:05:00,L1,c,33.3\n")
	d.counted(1)
	_, text := d.log()
	says(t, text, "have a time that the clocks of Europe/Lisbon showed twice")
	d.follows()
}

// A header that changes stops its own source, with a sentence, and no other.
func TestSituation17HeaderChanges(t *testing.T) {
	d, folder := shop{rest: "[source.other]\nfolder = \"other\"\nsettle = \"0s\"\nscan = \"100ms\"\ncolumns = { line = \"Line\", serial = \"Serial\", head = \"Head kPa\" }\n"}.opened(t)
	drop(t, folder, "order.csv", "Head kPa,New,Line,Serial\n33.1,x,L1,a\n")
	d.counted(1)
	drop(t, folder, "renamed.csv", "Line,Serial,Head\nL1,b,33.2\n")
	says(t, d.held(1).Sources[0].Remark, `the header has no column "Head kPa"; it reads "Line", "Serial", "Head"`)
	drop(t, d.cfg.Sources[1].Folder, "a.csv", rows("L4", 0, 3, 33))
	st := d.until("the other source counts", func(s *Status) bool { return s.Sources[1].Counted == 1 })
	if unitsOf(st, "head.L1") != 1 || unitsOf(st, "head.L4") != 3 {
		t.Errorf("%+v", st.Processes)
	}
	_, text := d.log()
	says(t, text, "rig: columns that nothing is mapped to: New")
	d.follows()
}

func TestSituation18NoValue(t *testing.T) {
	d, folder := shop{source: `no_value = ["", "9999", "NaN"]`}.opened(t)
	drop(t, folder, "a.csv", "Line,Serial,Head kPa\nL1,a,33.1\nL1,b,9999\nL1,c,NaN\nL1,d,\nL1,e,33.2\n")
	st := d.counted(1)
	if p := standingOf(st.Processes, "head.L1"); p.Units != 2 || p.Estimate.Median > 33.2 || st.Sources[0].Held != 0 {
		t.Errorf("%+v, %+v", p, st.Sources[0])
	}
	d.follows()
}

// A gauge that is stuck is remarked on, or its batch held, as declared.
func TestSituation19StuckGauge(t *testing.T) {
	stuck := "Line,Serial,Head kPa\n"
	for i := range 40 {
		stuck += fmt.Sprintf("L1,s%d,33.30\n", i)
	}
	d, folder := shop{characteristic: "stuck = 40"}.opened(t)
	drop(t, folder, "a.csv", rows("L1", 0, 5, 33))
	d.counted(1)
	drop(t, folder, "b.csv", stuck)
	st := d.counted(2)
	if p := standingOf(st.Processes, "head.L1"); p.Units != 45 || p.Same != 40 {
		t.Errorf("%+v", p)
	}
	_, text := d.log()
	says(t, text, "file b.csv: one value has come 40 times running (33.3); the gauge may be stuck", "head.L1: the last 40 values are one and the same")
	d.follows()

	d, folder = shop{characteristic: `stuck = { values = 40, then = "hold" }`}.opened(t)
	drop(t, folder, "a.csv", rows("L1", 0, 5, 33))
	d.counted(1)
	drop(t, folder, "b.csv", stuck)
	st = d.held(1)
	says(t, st.Sources[0].Remark, "head.L1 reads one value 40 times running (33.3); fewer than 40 are expected")
	kept, err := os.ReadDir(filepath.Join(d.cfg.Site.State, "held"))
	if err != nil || len(kept) != 1 || unitsOf(st, "head.L1") != 5 {
		t.Errorf("%v kept, %v", kept, err)
	}
	if _, err := d.Decide(Decision{HeldRef: HeldRef{Record: st.Records - 1}, Take: true, Reason: "the gauge was right: one blank was measured 40 times", By: "the engineer", How: "test"}); err != nil {
		t.Fatal(err)
	}
	if st = d.counted(2); unitsOf(st, "head.L1") != 45 {
		t.Errorf("taken after all: %v units", unitsOf(st, "head.L1"))
	}
	d.follows()
}

// Rows of another variant go to their own characteristic, or are left out; one that nobody declared is held.
func TestSituation20VariantSwapped(t *testing.T) {
	d, folder := shop{
		source: `variants = { column = "Type", count = ["K7"], pass_over = ["K9"], own = { K8 = { head = "head_k8" } } }`,
		rest:   "[characteristic.head_k8]\nlines = [\"L1\"]\n",
	}.opened(t)
	drop(t, folder, "a.csv", "Line,Serial,Head kPa,Type\nL1,a,33.1,K7\nL1,b,53.1,K8\nL1,c,73.1,K9\nL1,d,33.2,K7\nL1,e,33.2,K6\n")
	st := d.counted(1)
	if unitsOf(st, "head.L1") != 2 || unitsOf(st, "head_k8.L1") != 1 {
		t.Errorf("%+v", st.Processes)
	}
	says(t, st.Sources[0].Remark, `read the variant "K6"; expected one of "K7", "K8", "K9"`)
	log, text := d.log()
	if len(log.LeftOut) != 1 || log.LeftOut[0] != (daylog.LeftOut{Source: "rig", Kind: "variant", Text: "K9", Rows: 1}) {
		t.Errorf("%+v", log.LeftOut)
	}
	says(t, text, "rig: 1 rows with the variant “K9”")
	d.follows()
}

// Units that were tested because others had failed are marked as such by the rig, and are left out of what is weighed.
// A sampling plan itself is not recorded.
func TestSituation21SamplesAfterFailures(t *testing.T) {
	d, folder := shop{source: `faults = { column = "Why tested", codes = ["after failure"] }`}.opened(t)
	drop(t, folder, "a.csv", "Line,Serial,Head kPa,Why tested\nL1,a,33.1,routine\nL1,b,21,after failure\nL1,c,33.2,routine\n")
	if st := d.counted(1); unitsOf(st, "head.L1") != 2 {
		t.Errorf("%+v", st.Processes)
	}
	d.follows()
}

// A late file from yesterday counts where yesterday is remembered, and not in a window that has passed it.
func TestSituation23LateFile(t *testing.T) {
	d, folder := shop{
		columns: "time = \"At\"\nhead = \"Head kPa\"\nbore = \"Bore mm\"",
		rest:    "[characteristic.bore]\nlines = [\"L1\"]\nremember = { hours = 24 }\n",
	}.opened(t)
	file := func(name string, ago time.Duration) {
		at := time.Now().Add(-ago).UTC()
		text := "At,Line,Serial,Head kPa,Bore mm\n"
		for i := range 4 {
			text += fmt.Sprintf("%s,L1,%s%d,33.%d,8.0%d\n", at.Add(time.Duration(i)*time.Second).Format(time.RFC3339), name, i, i, i)
		}
		drop(t, folder, name+".csv", text)
	}
	file("today", time.Hour)
	before := d.counted(1)
	file("yesterday", 30*time.Hour)
	st := d.counted(2)
	if unitsOf(st, "head.L1") != 8 || unitsOf(st, "bore.L1") != 4 {
		t.Errorf("%v and %v units", unitsOf(st, "head.L1"), unitsOf(st, "bore.L1"))
	}
	if was, is := standingOf(before.Processes, "head.L1"), standingOf(st.Processes, "head.L1"); !was.LastMeasured.Equal(is.LastMeasured) {
		t.Errorf("last measured %v, and then %v", was.LastMeasured, is.LastMeasured)
	}
	d.follows()
}

// A tolerance that is edited makes a new rule; the alarm of the old one ends, and keeps its rule.
func TestSituation24RuleEdited(t *testing.T) {
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	drop(t, cfg.Sources[0].Folder, "a.csv", rows("L1", 0, 12, 33))
	drop(t, cfg.Sources[0].Folder, "b.csv", rows("L4", 0, 12, 34.5))
	st := d.until("the alarm stands", func(s *Status) bool { return len(s.Alarms) == 1 })
	version := st.Alarms[0].Version
	d.stop()
	next, err := config.Parse("config.toml", []byte(strings.Replace(twoLines, "> 0.4", "> 0.6", 1)), filepath.Dir(cfg.Site.State))
	if err != nil {
		t.Fatal(err)
	}
	d = start(t, next)
	st = d.until("the new rule raised", func(s *Status) bool { return len(s.Alarms) == 1 })
	if st.Alarms[0].Alarm != 2 || st.Alarms[0].Version == version {
		t.Errorf("%+v", st.Alarms)
	}
	if x, err := d.Explain(1); err != nil || x.Version != version || !strings.Contains(x.Rule.Claim, "0.4") {
		t.Errorf("%+v, %v", x, err)
	}
	d.follows()
}

// An alarm that was answered and is still true is not told again until it has been away.
func TestSituation25StillTrue(t *testing.T) {
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	drop(t, cfg.Sources[0].Folder, "a.csv", rows("L1", 0, 12, 33))
	drop(t, cfg.Sources[0].Folder, "b.csv", rows("L4", 0, 12, 34.5))
	d.until("the alarm stands", func(s *Status) bool { return len(s.Alarms) == 1 })
	if _, err := d.Acknowledge(1, "the lead", "test", ""); err != nil {
		t.Fatal(err)
	}
	for i := range 3 {
		drop(t, cfg.Sources[0].Folder, fmt.Sprintf("c%d.csv", i), rows("L4", 12+12*i, 12, 34.5))
	}
	d.counted(5)
	st := d.until("the feed is told", func(s *Status) bool { return s.Feeds[0].Waiting == 0 })
	if told := messages(t, cfg.Feeds[0].Path); len(told) != 2 || st.Alarms[0].Alarm != 1 || st.Alarms[0].State != rules.Acked {
		t.Errorf("told %d times, %+v", len(told), st.Alarms)
	}
	d.follows()
}

// What came while nobody watched is counted at the next start, the oldest file first; the stretch is in the log.
func TestSituation26DaemonDown(t *testing.T) {
	d, folder := shop{}.opened(t)
	d.stop()
	for i, name := range []string{"z", "a", "m"} {
		drop(t, folder, name+".csv", rows("L1", 5*i, 5, 33))
		at := time.Now().Add(time.Duration(i-5) * time.Minute)
		if err := os.Chtimes(filepath.Join(folder, name+".csv"), at, at); err != nil {
			t.Fatal(err)
		}
	}
	d = start(t, d.cfg)
	d.counted(3)
	var order []string
	err := d.store.Journal(0, d.store.Next(), func(e rules.Event, _ rules.Outcomes) error {
		if e.Batch != nil {
			order = append(order, e.Batch.File)
		}
		return nil
	})
	if got := strings.Join(order, " "); err != nil || got != "z.csv a.csv m.csv" {
		t.Errorf("%s, %v", got, err)
	}
	log, _ := d.log()
	if len(log.Gaps) != 1 || log.Gaps[0].What != "everything" || log.Gaps[0].Why != "the program had been stopped" {
		t.Errorf("%+v", log.Gaps)
	}
	d.follows()
}

// No defect at all, or no spread at all: the first leaves what the prior says, the second is a fault of the gauge.
func TestSituation27ZeroDefectsZeroSpread(t *testing.T) {
	d, folder := shop{
		columns: "head = \"Head kPa\"\nfails = { column = \"Result\", pass = [\"OK\"], fail = [\"NOK\"] }",
		rest: "[characteristic.fails]\nfamily = \"binomial\"\nlines = [\"L1\"]\n[[rule]]\nname = \"head\"\nclaim = \"mean(head.L1) > 33\"\ntell = []\n" +
			"[[rule]]\nname = \"fails\"\nclaim = \"proportion(fails.L1) > 0.1\"\ntell = []\n",
	}.opened(t)
	text := "Line,Serial,Head kPa,Result\n"
	for i := range 20 {
		text += fmt.Sprintf("L1,s%d,33.30,OK\n", i)
	}
	drop(t, folder, "a.csv", text)
	st := d.counted(1)
	says(t, st.Rules[0].Look.Withheld, "all its values are the same, so its spread is zero; look at the gauge")
	// Jeffreys' prior and 0 of 20: Beta(1/2, 41/2). Its quantiles by mpmath 1.3 (betainc, halving at 40 digits).
	p := standingOf(st.Processes, "fails.L1").Estimate
	if p == nil || st.Rules[1].Look.Withheld != "" {
		t.Fatalf("%+v, %+v", p, st.Rules[1])
	}
	for _, q := range []struct{ got, want float64 }{{p.Lower, 0.000024246478459242744}, {p.Median, 0.011169169123591417}, {p.Upper, 0.11663898290487543}} {
		if math.Abs(q.got-q.want) > 1e-9*q.want {
			t.Errorf("%v, want %v", q.got, q.want)
		}
	}
	d.follows()
}

// A unit that failed only because the rig was at fault is left out of the yield, and counted separately.
func TestSituation28RigFault(t *testing.T) {
	d, folder := shop{
		source:  `faults = { column = "Code", codes = ["E17", "E18"] }`,
		columns: "head = \"Head kPa\"\nfails = { column = \"Result\", pass = [\"OK\"], fail = [\"NOK\"] }",
		rest:    "[characteristic.fails]\nfamily = \"binomial\"\nlines = [\"L1\"]\n",
	}.opened(t)
	drop(t, folder, "a.csv", "Line,Serial,Head kPa,Result,Code\nL1,a,33.1,OK,\nL1,b,33.2,NOK,E2\nL1,c,--,NOK,E17\nL1,d,,NOK,E18\nL1,e,0,NOK,E17\n")
	st := d.counted(1)
	if unitsOf(st, "head.L1") != 2 || unitsOf(st, "fails.L1") != 2 || st.Sources[0].Held != 0 {
		t.Errorf("%+v, %+v", st.Processes, st.Sources[0])
	}
	drop(t, folder, "b.csv", "Line,Serial,Head kPa,Result,Code\nL1,c,--,NOK,E17\n") // nothing else in it
	d.counted(2)
	log, text := d.log()
	if len(log.LeftOut) != 2 || log.LeftOut[0].Rows != 3 || log.LeftOut[1].Rows != 1 {
		t.Errorf("%+v", log.LeftOut)
	}
	says(t, text, "rig: 3 rows with the fault code “E17”", "rig: 1 rows with the fault code “E18”")
	d.follows()
}

// A share that is not mounted leaves an empty folder, which is told from one in which nothing arrives: a file that is
// always there is not. The other source goes on.
func TestEmptyMountPoint(t *testing.T) {
	cfg := plant(t, shop{source: `present = ".here"`}.text())
	folder := cfg.Sources[0].Folder
	here := filepath.Join(folder, ".here")
	if err := os.WriteFile(here, nil, 0o644); err != nil {
		t.Fatal(err)
	}
	d := start(t, cfg)
	drop(t, folder, "a.csv", rows("L1", 0, 5, 33))
	d.counted(1)
	away := folder + "-away"
	if err := errors.Join(os.Rename(folder, away), os.Mkdir(folder, 0o755)); err != nil {
		t.Fatal(err)
	}
	st := d.until("it is missed", func(s *Status) bool { return !s.Sources[0].Able && strings.Contains(s.Sources[0].Why, ".here") })
	says(t, st.Sources[0].Why, "the file .here, which is always in it, is not there", "a share that is not mounted")
	if err := errors.Join(os.Remove(folder), os.Rename(away, folder)); err != nil {
		t.Fatal(err)
	}
	drop(t, folder, "b.csv", rows("L1", 5, 5, 33))
	d.until("it is back", func(s *Status) bool { return s.Sources[0].Able && s.Sources[0].Counted == 2 })
	log, text := d.log()
	if len(log.Gaps) == 0 {
		t.Errorf("%s", text)
	}
	d.follows()
}

// A stretch of a growing file that the engine refuses is held, and the file goes on behind it; also over a start.
func TestStuckStretchOfAGrowingFile(t *testing.T) {
	d, folder := shop{source: `arrives = "growing"`, characteristic: `stuck = { values = 5, then = "hold" }`}.opened(t)
	path := filepath.Join(folder, "day.csv")
	add := func(text string) {
		t.Helper()
		file, err := os.OpenFile(path, os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o644)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := file.WriteString(text); errors.Join(err, file.Close()) != nil {
			t.Fatal(err)
		}
	}
	add("Line,Serial,Head kPa\nL1,a,33.1\nL1,b,33.2\n")
	d.until("the first rows are counted", func(s *Status) bool { return unitsOf(s, "head.L1") == 2 })
	add(strings.Repeat("L1,c,33.3\n", 5))
	st := d.held(1)
	says(t, st.Sources[0].Remark, "head.L1 reads one value 5 times running (33.3)")
	cfg := d.cfg
	d.stop()
	d = start(t, cfg)
	add("L1,d,33.4\n")
	d.until("what follows is counted", func(s *Status) bool { return unitsOf(s, "head.L1") == 3 })
	d.follows()
}
