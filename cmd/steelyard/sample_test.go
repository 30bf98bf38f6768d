package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

// check shows what every row of a sample would become, and the totals agree with them.
func TestCheckShowsWhatEveryRowBecomes(t *testing.T) {
	folder := t.TempDir()
	now := time.Now().UTC()
	at := func(ago time.Duration) string { return now.Add(-ago).Format(time.RFC3339) }
	for name, text := range map[string]string{
		"config.toml": `
[site]
name = "Tessmoor Pumpworks"
[characteristic.head]
unit = "kPa"
lines = ["L1"]
censored_at_most = 0.5
stuck = { values = 4, then = "hold" }
[source.rig1]
folder = "drop"
faults = { column = "Code", codes = ["E17"] }
variants = { column = "Type", count = ["K7"], pass_over = ["K9"] }
[source.rig1.columns]
time = "At"
line = { fixed = "L1" }
serial = "Serial"
head = { column = "Head", beyond = true }
[reference.ring7]
characteristic = "head"
serials = ["REF-7"]
certified = 33.5
`,
		"a.csv": "At,Serial,Head,Code,Type,Operator\n" +
			at(time.Minute) + ",a,33.4,,K7,x\n" + at(time.Minute) + ",b,>200,,K7,x\n" + at(time.Minute) + ",c,33,E17,K7,x\n" +
			at(time.Minute) + ",d,33,,K9,x\n" + at(time.Minute) + ",REF-7,33.75,,K7,x\n" + at(-2*time.Hour) + ",e,33,,K7,x\n" +
			at(time.Minute) + ",f,,,K7,x\n",
		"stuck.csv": "At,Serial,Head,Code,Type\n" + strings.Repeat(at(time.Minute)+",a,33.4,,K7\n", 4),
	} {
		if err := os.WriteFile(filepath.Join(folder, name), []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	status, out, errOut := verb(t, folder, "check", "--rows", "a.csv")
	if status != exitHeld {
		t.Errorf("status %d: %s", status, errOut)
	}
	for _, want := range []string{
		"a.csv, as source rig1 reads it: 3 rows counted, 1 held, 2 left out, 1 without a value",
		"head.L1: 1 value from 33.4 to 33.4 kPa, and 1 reading beyond the gauge's limits",
		"offset of rig rig1: 1 reading of reference parts, read minus certified from 0.25 to 0.25 kPa",
		`left out: 1 row with the fault code "E17", lines 4 to 4`,
		"columns that nothing is mapped to: Operator",
		"head.L1 = 33.4", "head.L1 above 200, beyond the gauge", "line 4 left out: fault code E17", "line 5 left out: variant K9",
		"REF-7 reference part, offset of rig rig1 0.25", "line 7 HELD: a.csv, line 7: column 1 (\"At\"): read", "expected a time at most 1h0m ahead",
		"line 8 has no value in a column that is measured",
	} {
		if !strings.Contains(out, want) {
			t.Errorf("it does not say %q:\n%s", want, out)
		}
	}
	status, out, _ = verb(t, folder, "check", "stuck.csv")
	if status != exitHeld || !strings.Contains(out, "HELD WHOLE, so none of it counts: source rig1, file stuck.csv: head.L1 reads one value 4 times running (33.4)") {
		t.Errorf("status %d: %s", status, out)
	}
	_, out, _ = verb(t, folder, "--json", "check", "--rows", "a.csv")
	var r sample
	if err := json.Unmarshal([]byte(out), &r); err != nil {
		t.Fatal(err)
	}
	if r.Totals != (totals{Counted: 3, Parts: 1, Beyond: 1, Held: 1, LeftOut: 2, NoValue: 1}) || len(r.Rows) != 7 || r.Type != "reading" || r.Rows[1].Values[0].Beyond != "above" {
		t.Errorf("%s", out)
	}
}
