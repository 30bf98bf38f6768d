package config

import (
	"errors"
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"steelyard/rules"
)

const rowwise = `
[site]
name = "Tessmoor Pumpworks"
time_zone = "Europe/Lisbon"
[characteristic.head]
title = "delivery head"
unit = "kPa"
lines = ["L1", "L2"]
plausible = { lower = 0, upper = 200 }
censored_at_most = 0.02
stuck = { values = 40, then = "hold" }
far = 8
[characteristic.head_k8]
lines = ["L1", "L2"]
plausible = { lower = 0, upper = 300 }
stuck = 30
[characteristic.bore]
lines = ["L1"]
[characteristic.fails]
family = "binomial"
lines = ["L1"]
[source.rig1]
folder = "drop/rig1"
ahead = "10m"
behind = "720h"
present = ".here"
faults = { column = "Code", codes = ["E17", "E18"] }
[source.rig1.columns]
line = "Line"
serial = "Serial"
head = { column = "Head", beyond = true }
bore = "Bore"
[source.rig1.variants]
column = "Type"
count = ["K7"]
pass_over = ["K9"]
own = { K8 = { head = "head_k8" } }
[source.rig2]
folder = "drop/rig2"
[source.rig2.columns]
line = "Line"
serial = "Serial"
head = "Head"
[reference.ring7]
characteristic = "head"
serials = ["REF-7"]
certified = 33.50
uncertainty = 0.02
remember = { units = 20 }
[reference.pin2]
characteristic = "bore"
variants = ["PIN"]
certified = 8.0112
[line.L2]
runs = ["Mon-Fri 06:00-22:00", "Sat 06:00-14:00"]
[[rule]]
name = "L2 quiet"
quiet = "4h"
line = "L2"
tell = []
[[rule]]
name = "rig2 off"
claim = "|bias(rig2)| > 0.1"
tell = []
`

func TestRowwise(t *testing.T) {
	cfg, err := Parse("config.toml", []byte(rowwise), "/plant")
	if err != nil {
		t.Fatal(err)
	}
	s := cfg.Sources[0]
	if s.Ahead != 10*time.Minute || s.Behind != 720*time.Hour || s.Present != ".here" || s.Faults.Column != "Code" || len(s.Faults.Codes) != 2 {
		t.Errorf("%+v", s)
	}
	if o := cfg.Sources[1]; o.Ahead != time.Hour || o.Behind != 0 || o.Faults.Column != "" || o.Variants.Column != "" {
		t.Errorf("defaults: %+v", o)
	}
	if v := s.Variants; v.Column != "Type" || v.Others != "hold" || !slices.Equal(v.Own, []string{"K8"}) {
		t.Errorf("%+v", v)
	}
	m := s.Columns.Measured
	if len(m) != 3 || !m[0].Beyond || m[2].Characteristic != "head_k8" || m[2].Variant != "K8" || m[2].Column != "Head" || m[2].Upper != 300 || !m[2].Beyond {
		t.Errorf("%+v", m)
	}
	head, _ := cfg.Plan.Characteristic("head")
	if head.Gauge != (rules.Gauge{Censored: true, CensoredAtMost: 0.02, Stuck: 40, StuckHeld: true, Far: 8}) {
		t.Errorf("%+v", head.Gauge)
	}
	if own, _ := cfg.Plan.Characteristic("head_k8"); own.Gauge != (rules.Gauge{Censored: true, Stuck: 30}) {
		t.Errorf("%+v", own.Gauge)
	}
	var offsets []string
	for _, o := range cfg.Plan.Offsets {
		offsets = append(offsets, o.Name)
	}
	if !slices.Equal(offsets, []string{"head.rig1", "bore.rig1", "rig2"}) || cfg.Plan.Offsets[2].Parts[0].Uncertainty != 0.02 || cfg.Plan.Offsets[0].Remember.Units != 20 {
		t.Errorf("%+v", cfg.Plan.Offsets)
	}
	if p := s.Parts; len(p) != 2 || p[1].Offset != "bore.rig1" || p[1].Certified != 8.0112 || len(cfg.Sources[1].Parts) != 1 {
		t.Errorf("%+v", p)
	}
	if q := cfg.Plan.Rules[0].Quiet; q == nil || q.For != 4*time.Hour || q.Line != "L2" || len(cfg.Runs["L2"]) != 6 {
		t.Errorf("%+v, %+v", q, cfg.Runs)
	}
	if _, err := rules.NewState().Apply(&rules.Event{Adopted: &rules.Adopted{Plan: cfg.Plan}}); err != nil {
		t.Errorf("the engine refuses the plan: %v", err)
	}
}

func TestRowwiseFaults(t *testing.T) {
	for _, c := range []struct{ from, to, says string }{
		{"censored_at_most = 0.02", "censored_at_most = 2", "up to but not including 1"},
		{"beyond = true", "beyond = 1", "true or false"},
		{", beyond = true", "", "no source reads values beyond a gauge's limit"},
		{`then = "hold"`, `then = "stop"`, `then = "remark"`},
		{"stuck = 30", "stuck = 1", "from 2 on"},
		{"far = 8", "far = 0", "above 0"},
		{"family = \"binomial\"", "family = \"binomial\"\nfar = 8", "a normal or lognormal characteristic"},
		{`ahead = "10m"`, `ahead = "0s"`, "such as"},
		{`present = ".here"`, `present = "../here"`, "the name of a file in the folder"},
		{`faults = { column = "Code", `, `faults = { `, "a column and its codes"},
		{`pass_over = ["K9"]`, `pass_over = ["K7"]`, `the variant "K7" stands twice`},
		{`pass_over = ["K9"]`, `others = "drop"`, `"hold" or "pass over"`},
		{`head = "head_k8"`, `haed = "head_k8"`, `did you mean "head"`},
		{`head = "head_k8"`, `head = "head_k9"`, `did you mean "head_k8"`},
		{`head = "head_k8"`, `head = "bore"`, "to which no column of the source is mapped"},
		{`head = "head_k8"`, `head = "fails"`, "of the same family"},
		{`characteristic = "head"`, `characteristic = "haed"`, `did you mean "head"`},
		{`characteristic = "head"`, `characteristic = "fails"`, "a normal characteristic"},
		{"certified = 33.50", "", "no certified value"},
		{"uncertainty = 0.02", "uncertainty = -1", "from 0 on"},
		{`serials = ["REF-7"]`, "", "neither serials nor variants"},
		{"[line.L2]", "[reference.pin3]\ncharacteristic = \"bore\"\nvariants = [\"PIN\"]\ncertified = 8\n[line.L2]", `shares some with the reference part "pin2"`},
		{"[line.L2]", "[reference.x]\ncharacteristic = \"bore\"\nserials = [\"Y\"]\ncertified = 1\nremember = { units = 3 }\n[line.L2]", "the same for all reference parts"},
		{"[line.L2]", "[line.L9]", `there is no line "L9"`},
		{"Sat 06:00-14:00", "Sat 6-14", `read "Sat 6-14"`},
		{`line = "L2"` + "\ntell", `line = "L3"` + "\ntell", `there is no line "L3"`},
		{`line = "L2"` + "\ntell", "tell", "the rule names 0 of them"},
		{`quiet = "4h"`, "quiet = \"4h\"\nraise = 0.9", "has no raise"},
		{`quiet = "4h"`, `quiet = "4 hours"`, "such as"},
		{`claim = "|bias(rig2)| > 0.1"`, "claim = \"|bias(rig2)| > 0.1\"\nsource = \"rig2\"", "a rule with a claim has no source"},
		{"bias(rig2)", "bias(rig1)", `"rig1", which is not configured`},
		{`lines = ["L1", "L2"]`, `lines = ["L1", "rig1"]`, "would be called head.rig1, which is a process"},
	} {
		if !strings.Contains(rowwise, c.from) {
			t.Fatalf("the sample has no %q", c.from)
		}
		_, err := Parse("config.toml", []byte(strings.Replace(rowwise, c.from, c.to, 1)), "/plant")
		var faults Faults
		if !errors.As(err, &faults) || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%q for %q: %v, want it to say %q", c.to, c.from, err, c.says)
		}
	}
}

// What README.md shows of it is a whole configuration, and so is the example.
func TestReadmeSample(t *testing.T) {
	text, err := os.ReadFile("../../README.md")
	if err != nil {
		t.Fatal(err)
	}
	_, section, ok := strings.Cut(string(text), "## What rigs really drop\n")
	_, section, ok2 := strings.Cut(section, "the tests read it.\n")
	section, _, ok3 := strings.Cut(section, "\n- ")
	if !ok || !ok2 || !ok3 {
		t.Fatal("README.md has no such sample")
	}
	sample, err := Parse("README.md", []byte(section), "/plant")
	if err != nil {
		t.Fatal(err)
	}
	example, err := Load("../../config.example.toml")
	if err != nil {
		t.Fatal(err)
	}
	for _, cfg := range []*Config{sample, example} {
		if _, err := rules.NewState().Apply(&rules.Event{Adopted: &rules.Adopted{Plan: cfg.Plan}}); err != nil || len(cfg.Plan.Offsets) == 0 || len(cfg.Runs) == 0 {
			t.Errorf("%s: %v, %+v", cfg.File, err, cfg.Plan.Offsets)
		}
	}
}

// Hours by hand. Lisbon's clocks go forward on 2026-03-29 at 01:00 and back on 2026-10-25 at 02:00.
func TestRhythm(t *testing.T) {
	lisbon, err := time.LoadLocation("Europe/Lisbon")
	if err != nil {
		t.Fatal(err)
	}
	at := func(text string) time.Time {
		moment, err := time.ParseInLocation("2006-01-02 15:04", text, lisbon)
		if err != nil {
			t.Fatal(err)
		}
		return moment
	}
	for _, c := range []struct {
		runs     []string
		from, to string
		want     time.Duration
	}{
		{nil, "2026-03-02 10:00", "2026-03-02 14:30", 270 * time.Minute},
		{[]string{"Mon-Fri 06:00-22:00"}, "2026-03-06 20:00", "2026-03-09 07:00", 3 * time.Hour}, // Friday to Monday
		{[]string{"Mon-Fri 06:00-22:00", "Sat 06:00-14:00"}, "2026-03-06 20:00", "2026-03-09 07:00", 11 * time.Hour},
		{[]string{"22:00-06:00"}, "2026-03-02 05:00", "2026-03-02 23:00", 2 * time.Hour},                 // over midnight
		{[]string{"06:00-14:00", "12:00-16:00"}, "2026-03-02 00:00", "2026-03-03 00:00", 10 * time.Hour}, // they overlap
		{[]string{"00:00-24:00"}, "2026-03-29 00:00", "2026-03-30 00:00", 23 * time.Hour},                // a short day
		{[]string{"Sun 00:00-06:00"}, "2026-10-25 00:00", "2026-10-26 00:00", 7 * time.Hour},             // a long night
		{[]string{"Sat,Sun 08:00-09:00"}, "2026-03-01 00:00", "2026-03-15 00:00", 4 * time.Hour},         // Sunday to Sunday
		{[]string{"Fri-Mon 08:00-09:00"}, "2026-03-02 00:00", "2026-03-09 00:00", 4 * time.Hour},         // round the week's end
		{[]string{"Mon-Fri 06:00-22:00"}, "2026-03-02 12:00", "2026-03-02 11:00", 0},                     // nothing has passed
	} {
		var r Rhythm
		for _, text := range c.runs {
			stretches, ok := parseRuns(text)
			if !ok {
				t.Fatalf("%q can't be read", text)
			}
			r = append(r, stretches...)
		}
		if got := r.Running(at(c.from), at(c.to), lisbon); got != c.want {
			t.Errorf("%q from %s to %s: %s, want %s", c.runs, c.from, c.to, got, c.want)
		}
	}
	for _, text := range []string{"", "Mon", "Mon 06:00", "Mon 06:00-06:00", "Mon 24:00-06:00", "Mo 06:00-07:00", "Mon 6-7", "Mon 06:00-07:00 x", "Mon- 06:00-07:00"} {
		if _, ok := parseRuns(text); ok {
			t.Errorf("%q was read", text)
		}
	}
}
