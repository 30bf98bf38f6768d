package intake

import (
	"fmt"
	"strings"
	"testing"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// rowwise is a source that declares everything about whole rows.
func rowwise(t testing.TB) (*Reader, *config.Config) {
	t.Helper()
	cfg, err := config.Parse("config.toml", []byte(`
[site]
name = "Tessmoor Pumpworks"
[characteristic.head]
lines = ["L1", "L2"]
plausible = { lower = 0, upper = 200 }
censored_at_most = 0.02
[characteristic.head_k8]
lines = ["L1"]
[characteristic.leak]
family = "lognormal"
lines = ["L1", "L2"]
[source.rig1]
folder = "drop"
delimiter = ";"
decimal = ","
ahead = "1h"
behind = "720h"
faults = { column = "Code", codes = ["E17", "E18"] }
[source.rig1.columns]
time = "At"
line = "Line"
serial = "Serial"
head = { column = "Head", beyond = true }
leak = { column = "Leak", beyond = true, scale = 0.001 }
[source.rig1.variants]
column = "Type"
count = ["K7"]
pass_over = ["K9"]
own = { K8 = { head = "head_k8" } }
[reference.ring7]
characteristic = "head"
serials = ["REF-7"]
certified = 33.5
[reference.gas]
characteristic = "head"
variants = ["REF"]
certified = 40
`), t.TempDir())
	if err != nil {
		t.Fatal(err)
	}
	return NewReader(&cfg.Sources[0], &cfg.Plan), cfg
}

// accountOf puts a reading of the source into lines.
func accountOf(g *Reading, plan *rules.Plan) string {
	var b strings.Builder
	if g.Held != nil {
		fmt.Fprintf(&b, "HELD %s\n", g.Held.Reason)
	}
	for row := range g.Rows(plan) {
		fmt.Fprintf(&b, "%d", row.Line)
		if row.Held != "" {
			fmt.Fprintf(&b, " held: %s", strings.TrimPrefix(row.Held, fmt.Sprintf("r.csv, line %d: ", row.Line)))
		}
		if row.Aside != "" {
			fmt.Fprintf(&b, " left out: %s", row.Aside)
		}
		for _, v := range row.Values {
			fmt.Fprintf(&b, " %s %s%v", v.Process, map[int]string{1: "above ", -1: "below "}[v.Side], v.Value)
		}
		b.WriteByte('\n')
	}
	return b.String()
}

const rowwiseHeader = "At;Line;Serial;Head;Leak;Code;Type\n"

func TestRowsAboutSomethingElse(t *testing.T) {
	r, cfg := rowwise(t)
	g := r.Read("r.csv", written, []byte(rowwiseHeader+
		"2026-03-02T10:00:00Z;L1;a;33,4;0,5;;K7\n"+ // 2
		"2026-03-02T10:00:01Z;L1;b;>200;<0,5;;K7\n"+
		"2026-03-02T10:00:02Z;L2;c;<= 0;;;K7\n"+
		"2026-03-02T10:00:03Z;L1;d;>x;;;K7\n"+ // 5
		"2026-03-02T10:00:04Z;L1;e;>300;;;K7\n"+
		"2026-03-02T10:00:05Z;L1;f;x;y;E17;K7\n"+
		"2026-03-02T10:00:06Z;L1;g;33;;E18;K9\n"+
		"2026-03-02T10:00:07Z;L1;h;33;;E19;K9\n"+
		"2026-03-02T10:00:08Z;L1;i;250;;;K8\n"+ // 10
		"2026-03-02T10:00:09Z;L2;j;250;;;K8\n"+
		"2026-03-02T10:00:10Z;L1;k;33;;;k7\n"+
		"2026-03-02T10:00:11Z;;REF-7;33,75;x;;\n"+
		"2026-03-02T10:00:12Z;L9;REF-8;40,5;;;REF\n"+
		"2026-03-02T10:00:13Z;L1;REF-7;>200;;;K7\n"+ // 15
		"2026-03-02T10:00:14Z;L1;REF-7;;0,5;;K7\n"+
		";;;;;;\n"+
		"2026-03-02T10:00:15Z;L1;l;33;;;\n"))
	expect(t, accountOf(g, &cfg.Plan), `2 head.L1 33.4 leak.L1 0.0005
3 head.L1 above 200 leak.L1 below 0.0005
4 head.L2 below 0
5 held: column 4 ("Head"): read "x"; expected a number such as 33,4
6 held: column 4 ("Head"): read ">300", which is 300 ; expected a plausible value, 0 to 200
7 left out: fault code E17
8 left out: fault code E18
9 left out: variant K9
10 head_k8.L1 250
11 held: column 4 ("Head"): read "250" for the line "L2"; expected no value, or a line on which head_k8 is measured: "L1"
12 held: column 7 ("Type"): read the variant "k7"; expected one of "K7", "K8", "K9" (did you mean "K7"?)
13 rig1 0.25
14 rig1 0.5
15 held: column 4 ("Head"): read ">200" of a reference part; expected a value within the gauge's limits
16
18 held: column 7 ("Type"): read the variant ""; expected one of "K7", "K8", "K9"`)
	if got := fmt.Sprintf("%+v", g.Batch.Aside); got != "[{Kind:fault code Text:E17 Rows:1 First:7 Last:7} {Kind:fault code Text:E18 Rows:1 First:8 Last:8} {Kind:variant Text:K9 Rows:1 First:9 Last:9}]" {
		t.Error(got)
	}
	// The engine takes what the reader makes.
	s := rules.NewState()
	for i, e := range []rules.Event{{Adopted: &rules.Adopted{Plan: cfg.Plan}}, {Batch: g.Batch}} {
		if e.Index = uint64(i); true {
			if _, err := s.Apply(&e); err != nil {
				t.Fatal(err)
			}
		}
	}
	for _, st := range s.Standings() {
		want := map[string][3]float64{"head.L1": {1, 1, 2}, "head.L2": {0, 1, 1}, "leak.L1": {1, 1, 2}, "head_k8.L1": {1, 0, 1}, "rig1": {2, 0, 0}}[st.Process]
		got := [3]float64{st.Units}
		if st.Beyond != nil {
			got[1], got[2] = st.Beyond.N, st.Beyond.Of
		}
		if got != want {
			t.Errorf("%s: units, beyond, of %v, want %v", st.Process, got, want)
		}
	}
}

// A file whose rows are all left out is no fault: it is taken, and says how many they were.
func TestFileOfRowsLeftOut(t *testing.T) {
	r, _ := rowwise(t)
	g := r.Read("r.csv", written, []byte(rowwiseHeader+strings.Repeat("2026-03-02T10:00:05Z;L1;f;x;y;E17;K7\n", 3)))
	if g.Batch == nil || len(g.Batch.Rows.Line) != 0 || g.Batch.Aside[0] != (rules.Aside{Kind: rules.Fault, Text: "E17", Rows: 3, First: 2, Last: 4}) {
		t.Errorf("%+v, %+v", g.Batch, g.Held)
	}
}

// However many variants there are, the account of them stays short.
func TestManyVariantsPassedOver(t *testing.T) {
	r, _ := rowwise(t)
	r.src.Variants.Others = "pass over"
	text, n := rowwiseHeader, 3*mostAside
	for i := range n {
		text += fmt.Sprintf("2026-03-02T10:00:05Z;L1;f;33;;;V%d%s\n", i, strings.Repeat("ä", 100))
	}
	g := r.Read("r.csv", written, []byte(text))
	rows := 0
	for _, a := range g.Batch.Aside {
		rows += a.Rows
	}
	if last := g.Batch.Aside[len(g.Batch.Aside)-1]; rows != n || len(g.Batch.Aside) != mostAside+1 || last.Text != "…" || last.Last != n+1 {
		t.Errorf("%d rows for %d reasons, the last %+v", rows, len(g.Batch.Aside), last)
	}
}

func TestTimeOfArrival(t *testing.T) {
	r, cfg := rowwise(t)
	arrived := time.Date(2026, 3, 2, 10, 0, 0, 0, time.UTC)
	r.Arriving(func() time.Time { return arrived })
	text := rowwiseHeader
	for _, at := range []time.Duration{time.Hour, time.Hour + time.Second, -720 * time.Hour, -720*time.Hour - time.Second, -56 * 365 * 24 * time.Hour} {
		text += arrived.Add(at).Format(time.RFC3339) + ";L1;a;33;;;K7\n"
	}
	expect(t, accountOf(r.Read("r.csv", written, []byte(text)), &cfg.Plan), `2 head.L1 33
3 held: column 1 ("At"): read "2026-03-02T11:00:01Z", which is 1h0m1s after it arrived; expected a time at most 1h0m ahead ("ahead" of the source): look at the rig's clock and its zone
4 head.L1 33
5 held: column 1 ("At"): read "2026-01-31T09:59:59Z", which is 30 days before it arrived; expected a time at most 30 days back ("behind" of the source)
6 held: column 1 ("At"): read "1970-03-16T10:00:00Z", which is 20440 days before it arrived; expected a time at most 30 days back ("behind" of the source)`)
}

func FuzzRowwise(f *testing.F) {
	f.Add([]byte("2026-03-02T10:00:00Z;L1;a;>33,4;<0,5;E1;K7\n2026-03-02T10:00:00Z;L1;REF-7;33,4;;;K8\n"))
	f.Add([]byte("2026-03-02T10:00:00Z;L1;a;33,4;0,5;;K8\n;;;;;;\n2026-03-02T10:00:00Z;L1;a;33,4;0,5;E17;\n"))
	r, cfg := rowwise(f)
	f.Fuzz(func(t *testing.T, rows []byte) {
		g := r.Read("r.csv", written, append([]byte(rowwiseHeader), rows...))
		s := rules.NewState()
		if _, err := s.Apply(&rules.Event{Adopted: &rules.Adopted{Plan: cfg.Plan}}); err != nil {
			t.Fatal(err)
		}
		if g.Batch == nil {
			return
		}
		if _, err := s.Apply(&rules.Event{Index: 1, Batch: g.Batch}); err != nil {
			t.Fatalf("the engine refuses what the reader counted: %v", err)
		}
		last := 0
		for row := range g.Rows(&cfg.Plan) {
			if row.Line < last {
				t.Fatalf("line %d behind line %d", row.Line, last)
			}
			last = row.Line
			said := 0
			for _, is := range []bool{row.Held != "", row.Aside != "", row.Values != nil} {
				if is {
					said++
				}
			}
			if said > 1 {
				t.Fatalf("line %d has more than one account: %+v", row.Line, row)
			}
		}
	})
}

// The same in JSON lines: a member for each column, and none for a fault where there was none.
func TestRowsAboutSomethingElseInJSON(t *testing.T) {
	r, cfg := rowwise(t)
	r.src.Form.Rows, r.src.Form.Decimal = "json lines", '.'
	g := r.Read("r.csv", written, []byte(`{"At":"2026-03-02T10:00:00Z","Line":"L1","Serial":"a","Head":33.4,"Type":"K7"}
{"At":"2026-03-02T10:00:00Z","Line":"L1","Serial":"b","Head":">200","Type":"K7","Code":null}
{"At":"2026-03-02T10:00:00Z","Line":"L1","Serial":"c","Head":0,"Type":"K7","Code":"E17"}
{"At":"2026-03-02T10:00:00Z","Line":"L1","Serial":"d","Head":33,"Type":"K9"}
{"At":"2026-03-02T10:00:00Z","Line":"L1","Serial":"REF-7","Head":33.75,"Type":"K7"}
{"At":"2026-03-02T10:00:00Z","Line":"L1","Serial":"e","Head":33}
`))
	expect(t, accountOf(g, &cfg.Plan), `1 head.L1 33.4
2 head.L1 above 200
3 left out: fault code E17
4 left out: variant K9
5 rig1 0.25
6 held: the object has no member "Type"; expected one`)
}
