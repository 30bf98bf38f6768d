package intake

import (
	"bytes"
	"compress/gzip"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"reflect"
	"strings"
	"testing"

	"steelyard/monitor/config"
)

func jsonLines(s *config.Source) { s.Form.Rows = "json lines" }

// JSON lines say the same as CSV: random rows in both forms come to the same batch, bit for bit.
func TestJSONLinesSayTheSameAsCSV(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 4))
	var csv, lines strings.Builder
	csv.WriteString(someHeader)
	lines.WriteString("\n") // where CSV has its header, so that line numbers agree
	for i := range 300 {
		number := fmt.Sprint(30 + 10*r.Float64())
		switch r.IntN(4) {
		case 0:
			number = fmt.Sprintf("%.4e", 30+10*r.Float64())
		case 1:
			number = fmt.Sprintf("%d", 30+r.IntN(10))
		}
		at, serial := fmt.Sprintf("2026-03-02T08:%02d:%02dZ", i/60, i%60), fmt.Sprintf("S \"%d\" é", i)
		fmt.Fprintf(&csv, "%s,L1,\"%s\",%s,\n", at, strings.ReplaceAll(serial, `"`, `""`), number)
		text, _ := json.Marshal(serial)
		fmt.Fprintf(&lines, `{"Serial":%s,"other":[1,{"a":2}],"Head kPa":%s,"Tested at":"%s","Line":"L1"}`+"\n", text, number, at)
	}
	a, b := read(t, nil, csv.String()), read(t, jsonLines, lines.String())
	if a.Batch == nil || b.Batch == nil {
		t.Fatal(account(a), account(b))
	}
	if !reflect.DeepEqual(a.Batch.Rows, b.Batch.Rows) || !reflect.DeepEqual(a.Batch.Series, b.Batch.Series) || len(b.Batch.Held) > 0 {
		t.Errorf("from CSV %.300s\nfrom JSON lines %.300s", account(a), account(b))
	}
	if !reflect.DeepEqual(b.Ignored, []string{"other"}) {
		t.Errorf("ignored %v", b.Ignored)
	}
}

func TestJSONLinesHeldRows(t *testing.T) {
	good := `{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S1","Head kPa":33.5}` + "\n"
	for line, says := range map[string]string{
		`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S2","Head kPa":33.5,"Line":"L2"}`: `member "Line" twice`,
		`{"Tested at":"2026-03-02T08:00:00Z","Serial":"S2","Head kPa":33.5}`:                         `no member "Line"`,
		`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S2","Head kPa":[33.5]}`:           `is an object or a list`,
		`[1,2]`: `expected one JSON object`,
		`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1"`:                                              `breaks off`,
		`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S2","Head kPa":33.5} {}`:            `more behind the object`,
		`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S2","Head kPa":33.5e}`:              `column`,
		`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S2","Head kPa":true}`:               `"true"`,
		`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S2","Head kPa":3350}`:               `plausible`,
		`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S2","Head kPa":"33.5 kPa"}`:         `33.5 kPa`,
		`{"Tested at":"` + strings.Repeat("x", 2<<20) + `","Line":"L1","Serial":"S2","Head kPa":33.5}`: `bytes`,
	} {
		g := read(t, jsonLines, good+line+"\n"+good)
		if g.Batch == nil || len(g.Batch.Rows.Line) != 2 || len(g.Batch.Held) != 1 || g.Batch.Held[0].Line != 2 || !strings.Contains(g.Batch.Held[0].Reason, says) {
			t.Errorf("%.100s: %.400s; want it held with %q", line, account(g), says)
		}
	}
	g := read(t, jsonLines, good+`{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S2","Head kPa":null}`+"\n")
	if g.Batch == nil || len(g.NoValue) != 1 {
		t.Errorf("a row of null: %s", account(g))
	}
}

func zipped(t testing.TB, text string) string {
	t.Helper()
	var b bytes.Buffer
	w := gzip.NewWriter(&b)
	if _, err := w.Write([]byte(text)); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	return b.String()
}

func TestGzip(t *testing.T) {
	declared := func(s *config.Source) { s.Form.Compressed, s.Largest = "gzip", 1e6 }
	row := "2026-03-02T08:00:00Z,L1,S1,33.5,\n"
	text := someHeader + row + strings.Replace(row, "S1", "S2", 1)
	plain, g := read(t, nil, text), read(t, declared, zipped(t, text))
	if g.Batch == nil || !reflect.DeepEqual(g.Batch.Series, plain.Batch.Series) || g.SHA256 == plain.SHA256 {
		t.Fatal(account(g))
	}
	whole := zipped(t, text)
	for content, says := range map[string]string{
		whole[:len(whole)-6]:                     "breaks off",
		text:                                     "does not begin as gzip does",
		whole[:12] + "\xff\xff\xff" + whole[15:]: "damaged",
		zipped(t, someHeader+strings.Repeat(row, 100000)): "larger than",
		zipped(t, someHeader+strings.Repeat("\x00", 9e5)): "larger than",
		"": "empty",
	} {
		if g := read(t, declared, content); g.Held == nil || !strings.Contains(g.Held.Reason, says) {
			t.Errorf("%.40q: %.300s; want %q", content, account(g), says)
		}
	}
	if g := read(t, nil, whole); g.Held == nil {
		t.Error("gzip that is not declared was read")
	}
}

// Whatever the bytes, a reading is a batch or held, and each row of a batch has its line, time, serial and a value.
func FuzzForms(f *testing.F) {
	row := `{"Tested at":"2026-03-02T08:00:00Z","Line":"L1","Serial":"S1","Head kPa":33.5}`
	f.Add([]byte(row+"\n"+row), false)
	f.Add([]byte(zipped(f, row)), true)
	f.Add([]byte(`{"Line":"L1","Line":{"a":[]},"Head kPa":1e999}`+"\n[]\n\n{"), false)
	f.Add([]byte("\xff\xfe{\x00}\x00"), false)
	f.Fuzz(func(t *testing.T, content []byte, compressed bool) {
		g := read(t, func(s *config.Source) {
			jsonLines(s)
			s.Largest = 1e6
			if compressed {
				s.Form.Compressed = "gzip"
			}
		}, string(content))
		if b := g.Batch; b != nil && (len(b.Rows.Time) != len(b.Rows.Line) || len(b.Rows.Serial) != len(b.Rows.Line) || len(b.Series) == 0) {
			t.Errorf("%+v", b)
		}
	})
}
