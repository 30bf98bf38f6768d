package intake

import (
	"encoding/csv"
	"math"
	"path/filepath"
	"strconv"
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

// Lisbon's clock leaves out 01:00 to 02:00 on 29 March 2026 and repeats it on 25 October (IANA
// time zone database).
func TestClockChanges(t *testing.T) {
	r := newTimeReader(&config.Form{TimeFormat: "iso", Zone: lisbon(t)})
	if _, sentence := r.read("2026-03-29T01:30:00", time.Time{}); !strings.Contains(sentence, "left that time out") {
		t.Errorf("an hour that is not there: %q", sentence)
	}
	early, sentence := r.read("2026-10-25T01:30:00", time.Time{})
	if sentence != "" || early.UTC().Hour() != 0 {
		t.Errorf("alone, it is the earlier: %v %s", early.UTC(), sentence)
	}
	late, _ := r.read("2026-10-25T01:10:00", early)
	if late.UTC().Hour() != 1 {
		t.Errorf("behind 01:30 it is the later: %v", late.UTC())
	}
	if exact, _ := r.read("2026-10-25T01:30:00+00:00", time.Time{}); exact.UTC().Hour() != 1 {
		t.Errorf("an offset decides: %v", exact.UTC())
	}
}

func lisbon(t *testing.T) *time.Location {
	t.Helper()
	zone, err := time.LoadLocation("Europe/Lisbon")
	if err != nil {
		t.Fatal(err)
	}
	return zone
}

// Numbers are those of strconv, bit for bit, or refused.
func FuzzNumber(f *testing.F) {
	for _, s := range []string{"33.4", "-1e-3", ".5", "5.", "1e400", "0x1p3", "1_000", "NaN", "Inf", "1,234", "+7", "e5", "--1", ""} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, text string) {
		r := &fileReader{Reader: &Reader{src: &config.Source{Form: config.Form{Decimal: '.'}}}}
		x, sentence := r.number(text)
		want, err := strconv.ParseFloat(text, 64)
		plain := err == nil && !strings.ContainsAny(text, "xX_pPnNiI") && !math.IsInf(want, 0)
		if (sentence == "") != plain {
			t.Fatalf("%q: %q, strconv %v %v", text, sentence, want, err)
		}
		if plain && math.Float64bits(x) != math.Float64bits(want) {
			t.Fatalf("%q: %v, strconv %v", text, x, want)
		}
	})
}

// Whatever stands in a file: no panic, and every row is counted, held or without a value.
func FuzzRead(f *testing.F) {
	f.Add([]byte("At,Line,S,Head\n2026-03-02T10:00:00Z,L1,a,33.25\n2026-03-02T10:00:00Z,L1,b,oops\n"))
	f.Add([]byte("\xef\xbb\xbfAt,Line,S,Head\r\n2026-03-02 10:00,\"L1\",\"a\n\",33.25\r\n"))
	f.Add([]byte("At,Line,S,Head\n\"\n"))
	f.Add([]byte{0, 1, 2})
	r := sourceFor(f, plainColumns)
	f.Fuzz(func(t *testing.T, content []byte) {
		got := r.Read("f.csv", time.Time{}, content)
		if (got.Batch == nil) == (got.Held == nil) {
			t.Fatalf("%+v", got)
		}
		if got.Held != nil && got.Held.Reason == "" {
			t.Fatal("held without a reason")
		}
		if got.Batch == nil {
			return
		}
		all, err := csv.NewReader(strings.NewReader(strings.TrimPrefix(string(content), "\xef\xbb\xbf"))).ReadAll()
		if err == nil && len(got.Batch.Rows.Line)+len(got.Batch.Held) > len(all)-1 {
			t.Fatalf("%d rows counted and %d held of %d", len(got.Batch.Rows.Line), len(got.Batch.Held), len(all)-1)
		}
	})
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
