package intake

import (
	"path/filepath"
	"strings"
	"testing"
	"time"

	"steelyard/monitor/config"
)

// sourceFor reads a configuration with one source whose keys are given.
func sourceFor(t testing.TB, keys string) *Reader {
	t.Helper()
	cfg, err := config.Parse("config.toml", []byte(`
[site]
name = "Tessmoor Pumpworks"
time_zone = "Europe/Lisbon"
[characteristic.head]
lines = ["L1", "L2"]
plausible = { lower = 0, upper = 100 }
[characteristic.bore]
lines = ["L1"]
[characteristic.fails]
family = "binomial"
lines = ["L1"]
[characteristic.pores]
family = "poisson"
lines = ["L1"]
[source.rig]
folder = "drop"
`+keys), t.TempDir())
	if err != nil {
		t.Fatal(err)
	}
	return NewReader(&cfg.Sources[0], &cfg.Plan)
}

const plainColumns = "columns = { time = \"At\", line = \"Line\", serial = \"S\", head = \"Head\" }\n"

func TestForms(t *testing.T) {
	for name, c := range map[string]struct{ keys, text string }{
		"comma":           {plainColumns, "At,Line,S,Head\n2026-03-02T10:00:00Z,L1,a,33.25\n"},
		"any order, CRLF": {plainColumns, "Head,x,S,Line,At\r\n33.25,,a,L1,2026-03-02 10:00:00\r\n"},
		"a mark":          {plainColumns, "\xef\xbb\xbfAt,Line,S,Head\n2026-03-02 10:00,L1,a,33.25"},
		"quoted":          {plainColumns, "At,Line,S,\"Head\"\n2026-03-02 10:00,\"L1\",\"a\",\"33.25\"\n"},
		"decimal comma":   {plainColumns + "delimiter = \";\"\ndecimal = \",\"\n", "At;Line;S;Head\n2026-03-02 10:00;L1;a;33,25\n"},
		"tab":             {plainColumns + "delimiter = \"tab\"\n", "At\tLine\tS\tHead\n2026-03-02 10:00\tL1\ta\t3.325e1\n"},
		"preamble, units": {plainColumns + "preamble = 2\nunits_row = true\n", "Rig 1\n\nAt,Line,S,Head\n,,,kPa\n2026-03-02 10:00,L1,a,33.25\n"},
		"day first":       {plainColumns + "time_format = \"DD.MM.YYYY hh:mm\"\n", "At,Line,S,Head\n02.03.2026 10:00,L1,a,33.25\n"},
		"scale":           {"columns = { time = \"At\", line = { fixed = \"L1\" }, serial = \"S\", head = { column = \"Head\", scale = 0.5, offset = 1 } }\n", "At,S,Head\n2026-03-02 10:00,a,64.5\n"},
	} {
		got := sourceFor(t, c.keys).Read("f.csv", time.Time{}, []byte(c.text))
		if got.Batch == nil {
			t.Errorf("%s: held: %s", name, got.Held.Reason)
			continue
		}
		b := got.Batch
		at := time.Date(2026, 3, 2, 10, 0, 0, 0, time.UTC) // Lisbon keeps UTC in winter
		if len(b.Series) != 1 || b.Series[0].Process != "head.L1" || b.Series[0].Value[0] != 33.25 || b.Rows.Serial[0] != "a" || b.Rows.Time[0] != at.UnixNano() {
			t.Errorf("%s: %+v", name, b)
		}
	}
}

func TestCountsAndWords(t *testing.T) {
	r := sourceFor(t, `columns = { line = { fixed = "L1" }, fails = { column = "Result", pass = ["OK"], fail = ["NOK"] }, pores = { column = "Pores", exposure = "Area" }, bore = "Bore" }
no_value = ["", "9999"]
`)
	got := r.Read("f.csv", time.Time{}, []byte("Result,Pores,Area,Bore\nOK,3,2.5,8.01\nNOK,0,2.5,9999\n,2,1,\nMAYBE,1,1,8\nOK,1,0,8\nOK,1.5,1,8\n"))
	if got.Batch == nil || len(got.Batch.Held) != 3 {
		t.Fatalf("%+v", got)
	}
	for i, want := range []string{"MAYBE", "exposure", "1.5"} {
		if !strings.Contains(got.Batch.Held[i].Reason, want) {
			t.Errorf("held row %d: %s, want %q", i, got.Batch.Held[i].Reason, want)
		}
	}
	for _, s := range got.Batch.Series {
		want := map[string][]float64{"fails.L1": {0, 1}, "pores.L1": {3, 0, 2}, "bore.L1": {8.01}}[s.Process]
		if len(s.Value) != len(want) {
			t.Fatalf("%s: %v, want %v", s.Process, s.Value, want)
		}
		for i := range want {
			if s.Value[i] != want[i] {
				t.Errorf("%s: %v, want %v", s.Process, s.Value, want)
			}
		}
		if s.Process == "pores.L1" && (len(s.Of) != 3 || s.Of[0] != 2.5 || s.Of[2] != 1) {
			t.Errorf("exposures: %v", s.Of)
		}
	}
}

func TestKeep(t *testing.T) {
	folder := filepath.Join(t.TempDir(), "held")
	for range 2 {
		name, err := Keep(folder, [32]byte{1, 2}, []byte("text"))
		if err != nil || !strings.HasPrefix(name, "0102") {
			t.Errorf("%s, %v", name, err)
		}
	}
}
