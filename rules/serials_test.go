package rules

import (
	"bytes"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"
)

// keptRows says by hand which rows of a journal count in a process: by event, the rows left.
func keptRows(j journal, process string, retests Retests) map[uint64]map[int]bool {
	count := retests.Count
	type test struct {
		event   uint64
		row     int
		segment int
	}
	kept, known, segment := map[uint64]map[int]bool{}, map[string]test{}, 0
	var held [][2]uint64 // events, and how many of their units are known
	units := 0
	for _, e := range j {
		if e.Segment != nil && e.Segment.Processes[0] == process {
			segment++
		}
		if e.Batch == nil {
			continue
		}
		for _, s := range e.Batch.Series {
			if s.Process != process {
				continue
			}
			kept[e.Index] = map[int]bool{}
			before := units
			for _, row := range s.Row {
				serial := e.Batch.Rows.Serial[row]
				old, ok := known[serial]
				switch {
				case serial == "" || !ok:
				case count == FirstTest, old.segment != segment:
					continue
				case count == LastTest:
					delete(kept[old.event], old.row)
				}
				known[serial] = test{e.Index, row, segment}
				kept[e.Index][row] = true
				if serial != "" || count == LastTest {
					units++
				}
			}
			if units > before {
				held = append(held, [2]uint64{e.Index, uint64(units - before)})
			}
			for ; len(held) > 0 && units-int(held[0][1]) >= retests.Units; held = held[1:] {
				units -= int(held[0][1])
				for serial, t := range known {
					if t.event == held[0][0] {
						delete(known, serial)
					}
				}
			}
		}
	}
	return kept
}

// without leaves out the rows of a batch that do not count.
func without(e Event, kept func(process string) map[uint64]map[int]bool) Event {
	b := *e.Batch
	b.Series = nil
	for _, s := range e.Batch.Series {
		left := Series{Process: s.Process}
		for i, row := range s.Row {
			if kept(s.Process)[e.Index][row] {
				left.Row, left.Value = append(left.Row, row), append(left.Value, s.Value[i])
			}
		}
		if len(left.Row) > 0 {
			b.Series = append(b.Series, left)
		}
	}
	e.Batch = &b
	return e
}

// A process is, bit for bit, what it is when only the first, or the last, test of each serial that
// it knows ever comes.
func TestOneTestOfEachSerial(t *testing.T) {
	rapid.Check(t, func(rt *rapid.T) {
		p := &plant{t: rt, plan: remembering(), clock: at(0)}
		for i := range p.plan.Characteristics {
			p.plan.Characteristics[i].Retests = Retests{
				Count: rapid.SampledFrom([]string{FirstTest, LastTest}).Draw(rt, "count"), Units: rapid.SampledFrom([]int{1, 30, 60, mostSerials}).Draw(rt, "known"),
			}
		}
		live, plain := NewState(), NewState()
		saved := map[string][]byte{}
		for i := range rapid.IntRange(2, 20).Draw(rt, "events") {
			e := Event{Adopted: &Adopted{Plan: p.plan}}
			switch {
			case i > 0 && rapid.IntRange(0, 7).Draw(rt, "segment") == 0:
				e = Event{Segment: &Segment{Processes: []string{rapid.SampledFrom(p.plan.Processes()).Draw(rt, "process")}}}
			case i > 0:
				e = p.batch()
			}
			p.clock = p.clock.Add(20 * time.Second)
			e.Index, e.At = uint64(i), p.clock
			if _, err := live.Apply(&e); err != nil {
				rt.Fatal(err)
			}
			p.journal = append(p.journal, e)
			if rapid.IntRange(0, 5).Draw(rt, "restart") == 0 {
				live = restarted(rt, live, saved, &p.journal)
			}
		}
		kept := map[string]map[uint64]map[int]bool{}
		for i := range p.plan.Characteristics {
			for _, line := range p.plan.Characteristics[i].Lines {
				name := ProcessName(p.plan.Characteristics[i].Name, line)
				kept[name] = keptRows(p.journal, name, p.plan.Characteristics[i].Retests)
			}
		}
		for _, e := range p.journal {
			switch {
			case e.Adopted != nil:
				every := *e.Adopted
				every.Plan.Characteristics = append([]Characteristic(nil), every.Plan.Characteristics...)
				for i := range every.Plan.Characteristics {
					every.Plan.Characteristics[i].Retests = Retests{}
				}
				e.Adopted = &every
			case e.Batch != nil:
				e = without(e, func(process string) map[uint64]map[int]bool { return kept[process] })
			}
			if _, err := plain.Apply(&e); err != nil {
				rt.Fatal(err)
			}
		}
		for name, want := range plain.processes {
			got := live.processes[name]
			got.memory.Pass(p.clock.UnixNano())
			want.memory.Pass(p.clock.UnixNano())
			g, _ := got.memory.AppendBinary(nil)
			w, _ := want.memory.AppendBinary(nil)
			if !bytes.Equal(g, w) || got.memory.Sums() != want.memory.Sums() {
				rt.Errorf("%s: %+v, want %+v", name, got.memory.Sums(), want.memory.Sums())
			}
		}
	})
}

func ofSerials(process string, serials string, values ...float64) Event {
	e := batch(process, values...)
	e.Batch.Rows.Serial = strings.Fields(serials)
	return e
}

// Which test counts is said wherever a number stands, and what did not count is remarked.
func TestRetestsAreSaid(t *testing.T) {
	for _, c := range []struct {
		count       string
		mean, units float64
		says        string
	}{
		{FirstTest, 33, 4, "2 of 3 measurements of file f.csv of rig are of serials that were counted before, and do not count (the first test of each serial counts)"},
		{LastTest, 34, 4, "2 of 3 measurements of file f.csv of rig take the place of an earlier test of their serial (the last test of each serial counts)"},
		{EveryTest, 33.8, 6, "2 of 3 measurements of file f.csv of rig are of serials that were counted before, and count again (every test of a serial counts)"},
	} {
		d := newDriver(t)
		plan := testPlan()
		plan.Characteristics[0].Retests = Retests{Count: c.count, Units: 100}
		d.apply(Event{Adopted: &Adopted{Plan: plan}})
		d.apply(ofSerials("head.L1", "a b c", 32, 33, 33))
		out := d.apply(ofSerials("head.L1", "b d a", 35, 34, 35))
		if len(out.Remarks) != 1 || !strings.Contains(out.Remarks[0], c.says) {
			t.Errorf("%s: %q, want %q", c.count, out.Remarks, c.says)
		}
		if sums, _ := d.s.Sums("head.L1"); sums.N != c.units {
			t.Errorf("%s: %+v", c.count, sums)
		}
		if st := d.s.Standings()[0]; st.Tests != plan.Characteristics[0].Retests.Says() || st.Tests == "" {
			t.Errorf("%s: standing %+v", c.count, st)
		}
		change := Change{Rule: "over", Cause: Raised, Look: &Look{}, Units: []Units{{"head.L4", 12}, {"head.L1", 4}}}
		if told := strings.Join(plan.Tell(&change, time.UTC), " "); strings.Count(told, plan.Characteristics[0].Retests.Says()) != 1 {
			t.Errorf("%s: told %q", c.count, told)
		}
	}
}

// A serial is known for as long as was declared, by whole batches, and is new after that. Between
// two tests of a, three seconds and four units of other serials pass.
func TestSerialsAreForgotten(t *testing.T) {
	second := 1.0 / 86400
	for _, c := range []struct {
		retests Retests
		counts  bool // the second test of a
	}{
		{Retests{Count: FirstTest, Units: 3}, true}, {Retests{Count: FirstTest, Units: 4}, true}, {Retests{Count: FirstTest, Units: 5}, false},
		{Retests{Count: FirstTest, Days: 2.5 * second}, true}, {Retests{Count: FirstTest, Days: 3.5 * second}, false},
	} {
		d := newDriver(t)
		plan := testPlan()
		plan.Characteristics[0].Retests = c.retests
		d.apply(Event{Adopted: &Adopted{Plan: plan}})
		d.apply(ofSerials("head.L1", "a", 33))
		d.apply(ofSerials("head.L1", "b c", 33, 33))
		d.apply(ofSerials("head.L1", "d e", 33, 33))
		if out := d.apply(ofSerials("head.L1", "a", 33)); (len(out.Remarks) == 0) != c.counts {
			t.Errorf("%+v: %q", c.retests, out.Remarks)
		}
		if n := len(d.s.processes["head.L1"].tests.known); n > 6 {
			t.Errorf("%+v: %d serials are known", c.retests, n)
		}
	}
}

// A retest of a unit from before the segment does not count in it, whichever test counts.
func TestRetestAcrossSegments(t *testing.T) {
	for _, count := range []string{FirstTest, LastTest} {
		d := newDriver(t)
		plan := testPlan()
		plan.Characteristics[0].Retests = Retests{Count: count, Units: 100}
		d.apply(Event{Adopted: &Adopted{Plan: plan}})
		d.apply(ofSerials("head.L1", "a b", 33, 33))
		d.apply(Event{Segment: &Segment{Processes: []string{"head.L1"}, Note: "new impeller"}})
		out := d.apply(ofSerials("head.L1", "c a", 34, 34.5))
		if sums, _ := d.s.Sums("head.L1"); sums.N != 1 || sums.Mean != 34 || len(out.Remarks) != 1 {
			t.Errorf("%s: %+v, %q", count, sums, out.Remarks)
		}
		e := Event{Index: d.next, At: at(d.next), Segment: &Segment{Processes: []string{"head.L1"}, Since: at(d.next - 1)}}
		d.s.Consult(&journal{})
		if _, err := d.s.Apply(&e); err == nil || !strings.Contains(err.Error(), "leave the time out") {
			t.Errorf("%s: a segment from a moment on: %v", count, err)
		}
	}
}

func TestRetestsChecked(t *testing.T) {
	for _, r := range []Retests{
		{Count: "second", Units: 5}, {Count: FirstTest}, {Count: FirstTest, Units: 5, Days: 3}, {Count: FirstTest, Units: mostSerials + 1},
		{Count: LastTest, Units: -1}, {Count: LastTest, Days: -1}, {Count: LastTest, Days: 367}, {Units: 3},
	} {
		if r.Check() == nil {
			t.Errorf("%+v passes", r)
		}
	}
}
