package config

import (
	"errors"
	"flag"
	"math"
	"os"
	"strings"
	"testing"
	"time"

	"steelyard/rules"
)

var update = flag.Bool("update", false, "write the expected texts anew")

// Every fault is reported at once, each at its place.
func TestFaults(t *testing.T) {
	const path = "../../testdata/config/faults"
	text, err := os.ReadFile(path + ".toml")
	if err != nil {
		t.Fatal(err)
	}
	_, err = Parse("faults.toml", text, "/plant")
	var faults Faults
	if !errors.As(err, &faults) {
		t.Fatalf("%v", err)
	}
	got := err.Error() + "\n"
	if *update {
		if err := os.WriteFile(path+".txt", []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(path + ".txt")
	if err != nil {
		t.Fatal(err)
	}
	if got != string(want) {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
}

const least = `
[site]
name = "Tessmoor Pumpworks"
[characteristic.head]
lines = ["L1", "L2", "L3"]
%CHARACTERISTIC%
[source.rig]
folder = "drop"
columns = { line = "Line", head = "Head" }
%SOURCE%
%RULES%
`

func parse(t *testing.T, characteristic, source, rule string) (*Config, error) {
	t.Helper()
	text := strings.NewReplacer("%CHARACTERISTIC%", characteristic, "%SOURCE%", source, "%RULES%", rule).Replace(least)
	return Parse("config.toml", []byte(text), "/plant")
}

func TestDefaults(t *testing.T) {
	cfg, err := parse(t, "", "", "")
	if err != nil {
		t.Fatal(err)
	}
	s := cfg.Sources[0]
	if s.Folder != "/plant/drop" || s.Files != "*.csv" || s.Settle != 2*time.Second || s.Scan != 30*time.Second || s.Largest != 64e6 ||
		s.Form.Delimiter != ',' || s.Form.Decimal != '.' || s.Form.Zone != time.UTC || !math.IsInf(s.Columns.Measured[0].Lower, -1) {
		t.Errorf("%+v", s)
	}
	c := cfg.Plan.Characteristics[0]
	if c.Family != "normal" || !c.Prior.Reference || !c.Remember.Segment || cfg.Site.State != "/plant/state" || len(cfg.Digest) != 64 {
		t.Errorf("%+v", cfg)
	}
}

func TestSpreadRule(t *testing.T) {
	cfg, err := parse(t, "", "", "[[rule]]\nname = \"drift\"\nspread = \"head\"\nclaim = \"mean(this) > 34\"\nleast_units = 20\ntell = []\n")
	if err != nil {
		t.Fatal(err)
	}
	if r := cfg.Plan.Rules; len(r) != 3 || r[1].Name != "drift (L2)" || r[1].Claim != "mean(head.L2) > 34" || r[1].LeastUnits != 20 || r[1].SpreadOf != "drift" {
		t.Errorf("%+v", cfg.Plan.Rules)
	}
}

func TestSaysWhatIsWrong(t *testing.T) {
	for _, c := range []struct{ characteristic, source, rules, says string }{
		{"family = \"norml\"", "", "", `did you mean "normal"`},
		{"remember = { units = 1 }", "", "", "2 to 20000"},
		{"remember = { hours = 1, units = 5 }", "", "", "2 are set"},
		{"remember = 3", "", "", `"segment", { units = 400 }`},
		{"prior = { mean = 3 }", "", "", "does not say mean_worth"},
		{"limits = { lower = 3, upper = 2 }", "", "", "lower below upper"},
		{"unit = 3", "", "", "a text in quotes is expected"},
		{"", "[feed.x]\nkind = \"fax\"\npath = \"p\"", "", `no kind of feed "fax"`},
		{"", "", "[[rule]]\nname = \"r\"\ntell = []\nclaim = \"mean(head.L9) > 1\"", `did you mean "head.L1"`},
		{"", "", "[[rule]]\nname = \"r\"\nclaim = \"mean(head.L1) > 1\"", "who is told"},
		{"", "", "[[rule]]\nname = \"r\"\ntell = []\nclaim = \"mean(head.L1) > 1\"\nclear = 0.995", "below raise"},
		{"", "", "[[rule]]\nname = \"r\"\ntell = []\nclaim = \"mean(head.L1) > 1\"\nleast_units = 1", "from 2 on"},
		{"", "[source.two]\nfolder = \"state/drop\"\ncolumns = { line = \"l\", head = \"h\" }", "", "outside the state folder"},
		{"", "[source.two]\nfolder = \"d2\"\ntime_format = \"YYYY hh\"\ncolumns = { line = \"l\", head = \"h\" }", "", "has no MM"},
		{"", "[source.two]\nfolder = \"d2\"\nlargest = \"3 XB\"\ncolumns = { line = \"l\", head = \"h\" }", "", `such as "64MB"`},
		{"", "[source.two]\nfolder = \"d2\"\ndecimal = \",\"\ngrouping = \",\"\ncolumns = { line = \"l\", head = \"h\" }", "", "neither the decimal sign"},
		{"", "[source.two]\nfolder = \"d2\"\nencoding = \"utf8\"\ncolumns = { line = \"l\", head = \"h\" }", "", `did you mean "utf-8"`},
		{"retests = \"frist\"", "", "", `did you mean "first"`},
		{"retests = \"first\"", "", "", "no source brings serials"},
		{"serials = { units = 5, days = 3 }", "", "", "either units or days"},
		{"serials = { units = 0.5 }", "", "", "a whole number of units"},
		{"serials = { unts = 5 }", "", "", `did you mean "units"`},
		{"serials = 5", "", "", "{ units = 10000 }"},
		{"", "resent = \"replaced\"", "", `did you mean "replace"`},
		{"", "[marks]\nfolder = \"drop\"", "", `the source "rig" watches the same folder`},
		{"", "[marks]\nfolder = \"state/m\"", "", "outside the state folder"},
		{"", "[marks]\nfiles = \"*\"", "", "the marks have no folder"},
		{"", "[marks]\nfolder = \"m\"\nfiels = \"*\"", "", `did you mean "files"`},
		{"", "[marks]\nfolder = \"m\"\n[source.marks]\nfolder = \"d2\"\ncolumns = { line = \"l\", head = \"h\" }", "", "taken by the folder of marks"},
		{"", "[site]", "", "site"},
	} {
		_, err := parse(t, c.characteristic, c.source, c.rules)
		var faults Faults
		if !errors.As(err, &faults) || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%+v: %v", c, err)
		}
	}
}

func TestRetests(t *testing.T) {
	for text, want := range map[string]rules.Retests{
		"": {}, "retests = \"all\"": {}, "retests = \"first\"": {Count: "first", Units: 10000},
		"retests = \"last\"\nserials = { days = 30 }": {Count: "last", Days: 30}, "serials = { units = 50 }": {Count: "all", Units: 50},
	} {
		serial := "[source.two]\nfolder = \"d2\"\ncolumns = { line = \"l\", serial = \"s\", head = \"h\" }"
		cfg, err := parse(t, text, serial, "")
		if err != nil {
			t.Errorf("%q: %v", text, err)
		} else if got := cfg.Plan.Characteristics[0].Retests; got != want {
			t.Errorf("%q: %+v, want %+v", text, got, want)
		}
	}
}

func FuzzParse(f *testing.F) {
	f.Add(least)
	text, err := os.ReadFile("../../config.example.toml")
	if err != nil {
		f.Fatal(err)
	}
	f.Add(string(text))
	f.Fuzz(func(t *testing.T, text string) {
		cfg, err := Parse("config.toml", []byte(text), "/plant")
		if err == nil && (cfg.Site.Zone == nil || len(cfg.Sources) == 0 || len(cfg.Plan.Characteristics) == 0) {
			t.Fatalf("accepted, but not complete: %+v", cfg)
		}
	})
}
