package intake

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"go.uber.org/goleak"

	"steelyard/monitor/config"
	"steelyard/rules"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// lisbon puts its clocks forward at 01:00 on 2026-03-29, and back at 02:00 on 2026-10-25.
var lisbon = zoneNamed("Europe/Lisbon")

func zoneNamed(name string) *time.Location {
	zone, err := time.LoadLocation(name)
	if err != nil {
		panic(err)
	}
	return zone
}

// somePlan is a plan with a characteristic of each family.
func somePlan() *rules.Plan {
	lines := []string{"L1", "L2", "L3", "L4"}
	return &rules.Plan{Characteristics: []rules.Characteristic{
		{Name: "head", Unit: "kPa", Family: "normal", Lines: lines},
		{Name: "bore", Unit: "mm", Family: "normal", Lines: lines[:3]},
		{Name: "leak", Unit: "ml/min", Family: "lognormal", Lines: lines},
		{Name: "insulation", Family: "binomial", Lines: lines},
		{Name: "pores", Family: "poisson", Lines: lines},
	}}
}

func measuring(characteristic, column string) config.Measured {
	return config.Measured{
		Characteristic: characteristic, Column: column, OfIs: 1, Scale: 1,
		Lower: math.Inf(-1), Upper: math.Inf(1),
	}
}

// someSource reads head and bore; change makes it another.
func someSource(change func(*config.Source)) *config.Source {
	head := measuring("head", "Head kPa")
	head.Lower, head.Upper = 0, 100
	s := &config.Source{
		Name: "rig1", Files: "*.csv", Arrives: "whole", Settle: 20 * time.Millisecond, Scan: time.Minute, Largest: 64e6,
		Form: config.Form{Delimiter: ',', Decimal: '.', NoValue: []string{""}, TimeFormat: "iso", Zone: lisbon},
		Columns: config.Columns{
			Time: "Tested at", Line: "Line", Serial: "Serial",
			Measured: []config.Measured{head, measuring("bore", "Bore mm")},
		},
	}
	if change != nil {
		change(s)
	}
	return s
}

const someHeader = "Tested at,Line,Serial,Head kPa,Bore mm\n"

var written = time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)

func read(t testing.TB, change func(*config.Source), content string) *Reading {
	t.Helper()
	g := NewReader(someSource(change), somePlan()).Read("r1.csv", written, []byte(content))
	if (g.Batch == nil) == (g.Held == nil) {
		t.Fatalf("a reading is a batch or held, never both and never neither: %+v", g)
	}
	return g
}

// account puts a reading into lines, one for each row.
func account(g *Reading) string {
	var b strings.Builder
	if g.Held != nil {
		fmt.Fprintf(&b, "HELD %s\n", g.Held.Reason)
	}
	for row := range g.Rows(somePlan()) {
		switch {
		case row.Held != "":
			fmt.Fprintf(&b, "%d held: %s | %q\n", row.Line, row.Held, row.Text)
		case row.Aside != "":
			fmt.Fprintf(&b, "%d left out: %s\n", row.Line, row.Aside)
		case row.Values == nil:
			fmt.Fprintf(&b, "%d no value\n", row.Line)
		default:
			at := "-"
			if !row.Time.IsZero() {
				at = row.Time.Format(time.RFC3339Nano)
			}
			fmt.Fprintf(&b, "%d %s %s %q", row.Line, at, row.On, row.Serial)
			for _, v := range row.Values {
				name, sign := v.Characteristic, map[int]string{1: ">", -1: "<"}[v.Side]
				if v.Part {
					name = "offset of " + v.Process
				}
				fmt.Fprintf(&b, " %s=%s%v", name, sign, v.Value)
				if v.Of != 1 {
					fmt.Fprintf(&b, "/%v", v.Of)
				}
			}
			b.WriteByte('\n')
		}
	}
	for _, r := range g.Remarks {
		fmt.Fprintf(&b, "remark: %s\n", r)
	}
	return b.String()
}

func expect(t *testing.T, got, want string) {
	t.Helper()
	if got = strings.TrimSpace(got); got != strings.TrimSpace(want) {
		t.Errorf("got\n%s\nwant\n%s", got, strings.TrimSpace(want))
	}
}

func TestRead(t *testing.T) {
	for _, c := range situations {
		t.Run(c.name, func(t *testing.T) { expect(t, account(read(t, c.change, c.content)), c.want) })
	}
}

func TestOrderOfSeriesAndShape(t *testing.T) {
	g := read(t, nil, someHeader+
		"2026-03-02T10:00:00Z,L2,b,33,8.1\n2026-03-02T10:01:00Z,L1,a,34,\n2026-03-02T10:02:00Z,L1,c,,8.2\n")
	var names []string
	for _, s := range g.Batch.Series {
		names = append(names, s.Process)
		if s.Of != nil {
			t.Errorf("%s: of %v, want nil: it is 1 throughout", s.Process, s.Of)
		}
	}
	if want := []string{"head.L1", "head.L2", "bore.L1", "bore.L2"}; !slices.Equal(names, want) {
		t.Errorf("series %v, want %v", names, want)
	}
	if b := g.Batch; b.From != 0 || b.To != int64(len(someHeader)+33+32+31) && b.To == 0 || !b.Written.Equal(written) {
		t.Errorf("batch %+v", b)
	}
	if !slices.Equal(g.Batch.Series[2].Row, []int{2}) {
		t.Errorf("bore.L1 stands in rows %v, want [2]", g.Batch.Series[2].Row)
	}
}

// TestTooMuchHeld: a file of which too much is held is held whole, and the list is short.
func TestTooMuchHeld(t *testing.T) {
	good := "2026-03-02T10:00:00Z,L1,a,33,\n"
	bad := "2026-03-02T10:00:00Z,L9,a,33,\n"
	g := read(t, nil, someHeader+good+strings.Repeat(bad, mostHeldRows))
	if g.Batch == nil || len(g.Batch.Held) != mostHeldRows {
		t.Fatalf("with %d bad rows: held whole or not all listed", mostHeldRows)
	}
	g = read(t, nil, someHeader+good+strings.Repeat(bad, mostHeldRows+1))
	if g.Held == nil || len(g.Held.Rows) != fewHeldRows || !strings.Contains(g.Held.Reason, "10001 rows up to line 10003") {
		t.Fatalf("with one more: %+v", g.Held)
	}
	long := bad[:len(bad)-1] + strings.Repeat("x", longestKept) + "\n"
	g = read(t, nil, someHeader+good+strings.Repeat(long, mostHeldText/longestKept+2))
	if g.Held == nil || len(g.Held.Rows) != fewHeldRows {
		t.Fatalf("with %d bytes of bad rows: not held whole", mostHeldText)
	}
}

func TestTextOfHeldRowIsCut(t *testing.T) {
	g := read(t, nil, someHeader+"2026-03-02T10:00:00Z,L9,"+strings.Repeat("ä", longestKept)+",33,\n2026-03-02T10:00:00Z,L1,a,33,\n")
	text := g.Batch.Held[0].Text
	if !g.Cut || len(text) > longestKept+60 || !strings.HasSuffix(text, "ä… (cut: 8220 bytes in all)") {
		t.Errorf("cut %v, %d bytes: …%s", g.Cut, len(text), text[len(text)-60:])
	}
}

// TestHugeLine: a line of 100 MB costs no memory beside the file's own.
func TestHugeLine(t *testing.T) {
	if testing.Short() {
		t.Skip("reads 100 MB")
	}
	g := read(t, nil, someHeader+strings.Repeat("x", 100_000_000)+"\n2026-03-02T10:00:00Z,L1,a,33,\n")
	if len(g.Batch.Held) != 1 || !strings.Contains(g.Batch.Held[0].Reason, "line 2: read a row of 100000000 bytes") || len(g.Batch.Rows.Line) != 1 {
		t.Errorf("held %.200s", g.Batch.Held[0].Reason)
	}
	if g = read(t, nil, strings.Repeat("x", 100_000_000)); g.Held == nil || len(g.Held.Reason) > 300 {
		t.Error("a header of 100 MB is not held with a short reason")
	}
}
