package monitor

import (
	"slices"
	"testing"
	"unicode/utf8"

	"steelyard/monitor/config"
)

// Whatever a line of a file of marks says, it is a segment of configured processes with a note and
// a person, or refused in words.
func FuzzMark(f *testing.F) {
	for _, line := range []string{
		`{"line":"L4","note":"new impeller","by":"the setter"}`, `{"source":"rig","at":"2026-03-02T14:00:00Z","note":"n","by":"b"}`,
		`{"process":"head.L1","note":" ","by":"b"}`, `{"characteristic":"head"}`, `{"line":"L4"} x`, `[]`, `null`, "", "{\"line\":\"\xff\"}",
	} {
		f.Add(line)
	}
	cfg, err := config.Parse("config.toml", []byte(twoLines), "/plant")
	if err != nil {
		f.Fatal(err)
	}
	d := &Desk{cfg: cfg}
	known := cfg.Plan.Processes()
	f.Fuzz(func(t *testing.T, line string) {
		s, err := d.readMark(line, "m.jsonl")
		if err != nil {
			if err.Error() == "" {
				t.Error("refused without a word")
			}
			return
		}
		if s.Note == "" || s.By == "" || s.How == "" || len(s.Processes) == 0 || !utf8.ValidString(s.Note+s.By) {
			t.Errorf("%q became %+v", line, s)
		}
		for _, p := range s.Processes {
			if !slices.Contains(known, p) {
				t.Errorf("%q marks %q", line, p)
			}
		}
	})
}

// Whatever file was kept, taking rows of it brings these rows alone, and as many values as the
// whole file brings for them; the rest refuses in words.
func FuzzTakeRows(f *testing.F) {
	for _, content := range []string{
		rows("L1", 0, 3, 33) + "L4,odd,133\nL1,words,abc\n", "Line,Serial,Head kPa\nL1,g1,120\n", "Line,Serial,Head kPa\n\"L1\n\",x,1\n", "", "\xff\xfe",
		"Head kPa,Line,Serial\n133,L4,\"a\nb\"\n1,L1,c\n",
	} {
		f.Add([]byte(content), 2, 5)
	}
	cfg, err := config.Parse("config.toml", []byte(twoLines), "/plant")
	if err != nil {
		f.Fatal(err)
	}
	src := &cfg.Sources[0]
	f.Fuzz(func(t *testing.T, content []byte, a, b int) {
		lines := slices.Compact([]int{min(a, b), max(a, b)})
		taken, err := takeRows(src, &cfg.Plan, "k.csv", content, lines)
		if err != nil {
			return
		}
		if !slices.Equal(taken.Rows.Line, lines) || len(taken.Rows.Serial) != len(lines) || len(taken.Held) > 0 {
			t.Fatalf("took %+v, want the lines %v", taken.Rows, lines)
		}
		values := 0
		for _, s := range taken.Series {
			if values += len(s.Value); len(s.Row) != len(s.Value) || slices.Max(s.Row) >= len(lines) || slices.Min(s.Row) < 0 {
				t.Fatalf("series %+v of %d rows", s, len(lines))
			}
		}
		if values != len(lines) { // one characteristic is measured
			t.Errorf("%d values of %d rows", values, len(lines))
		}
	})
}
