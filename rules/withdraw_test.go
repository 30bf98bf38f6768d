package rules

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"steelyard/rules/posterior"
)

// journal is a History in memory.
type journal []Event

func (j *journal) Events(from, to uint64, visit func(*Event) error) error {
	for i := from; i < min(to, uint64(len(*j))); i++ {
		if err := visit(&(*j)[i]); err != nil {
			return err
		}
	}
	return nil
}

// keeping is a driver that keeps what it applies, as a journal does.
func keeping(t *testing.T) (*driver, *journal) {
	d, j := newDriver(t), &journal{}
	*j = append(*j, Event{Adopted: &Adopted{Plan: testPlan()}})
	d.s.Consult(j)
	return d, j
}

func (d *driver) keep(j *journal, e Event) Outcomes {
	d.t.Helper()
	out := d.apply(e)
	e.Index, e.At = d.next-1, at(d.next-1)
	*j = append(*j, e)
	return out
}

func at(index uint64) time.Time { return time.Date(2026, 3, 2, 10, 0, int(index), 0, time.UTC) }

func TestWithdrawnAlarmsFollow(t *testing.T) {
	d, j := keeping(t)
	d.keep(j, batch("head.L1", spread(33, 12)...))
	d.keep(j, batch("head.L4", spread(33, 12)...))
	if got := states(d.keep(j, batch("head.L4", spread(35, 12)...))); got != "raised:unacknowledged " {
		t.Fatal(got)
	}
	w := func(batches ...uint64) Event {
		return Event{Withdrawn: &Withdrawn{Batches: batches, Reason: "rig1 out of calibration", By: "the engineer", How: "test"}}
	}
	out := d.keep(j, w(3))
	if got := states(out); got != "withdrawn:returned " {
		t.Errorf("without the batch that raised it: %q", got)
	}
	plan := testPlan()
	told := strings.Join(plan.Tell(&out.Changes[0], time.UTC), " ")
	for _, want := range []string{"No longer evident", "does not stand without what was withdrawn", "by the engineer (rig1 out of calibration)", ReleaseNote} {
		if !strings.Contains(told, want) {
			t.Errorf("told %q, want it to say %q", told, want)
		}
	}
	// A batch that hid a difference: without it the alarm is raised.
	d.keep(j, batch("head.L4", spread(35, 12)...)) // 5
	if got := states(d.keep(j, batch("head.L4", spread(33, 12)...))); got != "cleared:returned " {
		t.Fatal(got)
	}
	out = d.keep(j, w(6))
	if got := states(out); got != "replaced:normal raised:unacknowledged " {
		t.Errorf("without the batch that hid it: %q", got)
	}
	if told := strings.Join(plan.Tell(&out.Changes[1], time.UTC), " "); !strings.Contains(told, "once batches were withdrawn by the engineer") {
		t.Errorf("told %q", told)
	}
	// Without any evidence of L4 the condition can't stand either.
	if got := states(d.keep(j, w(2, 5))); got != "withdrawn:returned " {
		t.Errorf("without any batch of L4: %q", got)
	}
	if p := d.s.processes["head.L4"]; p.Taken != 0 || p.Batches != 0 || !p.LastMeasured.IsZero() {
		t.Errorf("a process without batches: %+v", p)
	}
}

func TestBatchReplacesAnother(t *testing.T) {
	d, j := keeping(t)
	d.keep(j, batch("head.L1", spread(33, 12)...))
	d.keep(j, batch("head.L4", spread(35, 12)...)) // 2, raised
	again := batch("head.L4", spread(35.01, 12)...)
	again.Batch.Replaces = []uint64{2}
	if got := states(d.keep(j, again)); got != "" {
		t.Errorf("the alarm stood before and stands with the batch that replaces: %q", got)
	}
	other := batch("head.L4", spread(33, 12)...)
	other.Batch.Replaces = []uint64{3}
	out := d.keep(j, other)
	if got := states(out); got != "withdrawn:returned " || d.s.processes["head.L4"].Taken != 12 {
		t.Errorf("%q, %+v", got, d.s.processes["head.L4"])
	}
	plan := testPlan()
	if told := strings.Join(plan.Tell(&out.Changes[0], time.UTC), " "); !strings.Contains(told, "takes the place of what was counted before") {
		t.Errorf("told %q", told)
	}
}

// What can't be withdrawn is refused with a sentence, and nothing has changed.
func TestWithdrawalRefused(t *testing.T) {
	d, j := keeping(t)
	d.keep(j, batch("head.L1", spread(33, 3)...))
	d.keep(j, Event{Withdrawn: &Withdrawn{Batches: []uint64{1}, Reason: "twice sent"}})
	d.keep(j, batch("head.L1", spread(33, 3)...))
	if _, err := d.s.Pieces(); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		w    Withdrawn
		says string
	}{
		{Withdrawn{Batches: []uint64{1}, Reason: "r"}, "record 1 was withdrawn before"},
		{Withdrawn{Batches: []uint64{0}, Reason: "r"}, "it counted no batch"},
		{Withdrawn{Batches: []uint64{3, 2}, Reason: "r"}, "ascending order"},
		{Withdrawn{Batches: []uint64{3, 3}, Reason: "r"}, "each once"},
		{Withdrawn{Batches: []uint64{3, 2000}, Reason: "r"}, "no such record"},
		{Withdrawn{Batches: []uint64{3}}, "a reason"},
		{Withdrawn{Reason: "r"}, "no batch is named"},
	} {
		e := Event{Index: 4, At: at(4), Withdrawn: &c.w}
		if _, err := d.s.Apply(&e); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%+v: %v, want it to say %q", c.w, err, c.says)
		}
	}
	replaces := batch("head.L1", 33)
	replaces.Index, replaces.Batch.Replaces = 4, []uint64{1}
	if _, err := d.s.Apply(&replaces); err == nil {
		t.Error("a batch took the place of one that was withdrawn before")
	}
	pieces, err := d.s.Pieces()
	if err != nil || len(pieces) > 0 {
		t.Errorf("refused events changed %v, %v", pieces, err)
	}
	d.s.Consult(nil)
	if _, err := d.s.Apply(&Event{Index: 4, Withdrawn: &Withdrawn{Batches: []uint64{3}, Reason: "r"}}); err == nil {
		t.Error("withdrawn without a journal to read")
	}
}

// remembering is a plan with a process for each way of remembering, and a rule over two of them.
func remembering() Plan {
	reference := posterior.Prior{Reference: true}
	plan := Plan{Site: "Tessmoor Pumpworks"}
	ways := []posterior.Remember{{Segment: true}, {Units: 70}, {Hours: 0.02}, {Discount: 0.9}}
	for i, tests := range []Retests{
		{}, {}, {}, {}, {Count: FirstTest, Units: 60}, {Count: LastTest, Units: 60}, {Count: LastTest, Days: 0.001}, {Count: LastTest, Units: 50},
		{Count: LastTest, Units: 1}, {Count: FirstTest, Days: 0.002}, {Count: EveryTest, Units: 90},
	} {
		name, r := fmt.Sprintf("c%d", i), ways[i%len(ways)]
		gauge := Gauge{Censored: i < 6, CensoredAtMost: 0.2, Stuck: 3}
		plan.Characteristics = append(plan.Characteristics, Characteristic{
			Name: name, Family: posterior.NormalFamily, Lines: []string{"A", "B"}, Prior: reference, Remember: r, Retests: tests, Gauge: gauge,
		})
		plan.Rules = append(plan.Rules, Rule{
			Name: name, Claim: fmt.Sprintf("mean(%s.A) - mean(%s.B) > 0.1", name, name), Raise: 0.9, Clear: 0.5, LeastUnits: 3, Priority: "low",
		})
	}
	return plan
}

// plant makes random events.
type plant struct {
	t        *rapid.T
	plan     Plan
	journal  journal
	counting []uint64 // batches that have not been withdrawn
	clock    time.Time
}

func (p *plant) batch() Event {
	b := &Batch{Source: "rig", File: "f.csv"}
	for range rapid.IntRange(1, 3).Draw(p.t, "series") {
		c := rapid.SampledFrom(p.plan.Characteristics).Draw(p.t, "characteristic")
		s := Series{Process: ProcessName(c.Name, rapid.SampledFrom(c.Lines).Draw(p.t, "line"))}
		if slices.ContainsFunc(b.Series, func(other Series) bool { return other.Process == s.Process }) {
			continue
		}
		for range rapid.IntRange(1, 40).Draw(p.t, "units") {
			s.Row = append(s.Row, len(b.Rows.Line))
			s.Value = append(s.Value, rapid.OneOf(rapid.Float64Range(-5, 5), rapid.Just(1.0)).Draw(p.t, "value"))
			b.Rows.Line = append(b.Rows.Line, len(b.Rows.Line)+2)
			b.Rows.Serial = append(b.Rows.Serial, rapid.SampledFrom(someSerials).Draw(p.t, "serial"))
			late := time.Duration(rapid.IntRange(-20, 200).Draw(p.t, "late")) * time.Second
			b.Rows.Time = append(b.Rows.Time, p.clock.Add(-late).UnixNano())
		}
		for range rapid.IntRange(0, 3).Draw(p.t, "beyond") {
			if !c.Gauge.Censored {
				break
			}
			s.Beyond = append(s.Beyond, Bound{Row: len(b.Rows.Line), Limit: 9, Above: true})
			b.Rows.Line = append(b.Rows.Line, len(b.Rows.Line)+2)
			b.Rows.Serial = append(b.Rows.Serial, "")
			b.Rows.Time = append(b.Rows.Time, p.clock.Add(-time.Duration(rapid.IntRange(-20, 200).Draw(p.t, "late"))*time.Second).UnixNano())
		}
		b.Series = append(b.Series, s)
	}
	return Event{Batch: b}
}

// someSerials come again and again; one unit has none.
var someSerials = func() (list []string) {
	for i := range 100 {
		list = append(list, fmt.Sprint("s", i))
	}
	return append(list, "")
}()

// some draws batches that count now, in ascending order, and lets them count no more.
func (p *plant) some() (taken []uint64) {
	n := rapid.IntRange(1, min(3, len(p.counting))).Draw(p.t, "withdrawn")
	for range n {
		i := rapid.IntRange(0, len(p.counting)-1).Draw(p.t, "which")
		taken = append(taken, p.counting[i])
		p.counting = append(p.counting[:i:i], p.counting[i+1:]...)
	}
	for i := range taken {
		for k := range i {
			if taken[k] > taken[i] {
				taken[k], taken[i] = taken[i], taken[k]
			}
		}
	}
	return taken
}

// segment starts one for one process, sometimes in the past.
func (p *plant) segment(live *State) Event {
	name := rapid.SampledFrom(p.plan.Processes()).Draw(p.t, "process")
	seg := &Segment{Processes: []string{name}, Note: "new insert"}
	if live.processes[name].tests == nil && rapid.Bool().Draw(p.t, "past") {
		seg.Since = p.clock.Add(-time.Duration(rapid.IntRange(0, 300).Draw(p.t, "ago")) * time.Second)
		if began := live.processes[name].SegmentSince; seg.Since.Before(began) {
			seg.Since = began
		}
	}
	return Event{Segment: seg}
}

func (p *plant) event(live *State) Event {
	kinds := []string{"batch", "batch", "batch", "batch", "segment", "adopted"}
	if len(p.counting) > 0 {
		kinds = append(kinds, "withdrawn", "replaced")
	}
	switch rapid.SampledFrom(kinds).Draw(p.t, "event") {
	case "segment":
		return p.segment(live)
	case "adopted":
		plan := p.plan
		plan.Characteristics = append([]Characteristic(nil), plan.Characteristics...)
		plan.Characteristics[0].Remember = posterior.Remember{Units: rapid.IntRange(2, 3).Draw(p.t, "remember")}
		return Event{Adopted: &Adopted{Plan: plan}}
	case "withdrawn":
		return Event{Withdrawn: &Withdrawn{Batches: p.some(), Reason: "out of calibration"}}
	case "replaced":
		e := p.batch()
		e.Batch.Replaces = p.some()
		return e
	}
	return p.batch()
}

// After any sequence of batches, segments, plans and withdrawals, every process is, bit for bit,
// what it is when the withdrawn batches never come. A window of time is compared at one moment.
func TestAsIfNeverCounted(t *testing.T) {
	rapid.Check(t, func(rt *rapid.T) {
		p := &plant{t: rt, plan: remembering(), clock: at(0)}
		live := NewState()
		live.every = int64(rapid.IntRange(2, 4).Draw(rt, "every"))
		live.Consult(&p.journal)
		saved := map[string][]byte{}
		for i := range rapid.IntRange(2, 40).Draw(rt, "events") {
			e := Event{Adopted: &Adopted{Plan: p.plan}}
			if i > 0 {
				e = p.event(live)
			}
			p.clock = p.clock.Add(time.Duration(rapid.IntRange(0, 40).Draw(rt, "pause")) * time.Second)
			e.Index, e.At = uint64(i), p.clock
			if _, err := live.Apply(&e); err != nil {
				rt.Fatal(err)
			}
			p.journal = append(p.journal, e)
			if e.Batch != nil {
				p.counting = append(p.counting, e.Index)
			}
			if rapid.IntRange(0, 5).Draw(rt, "restart") == 0 {
				live = restarted(rt, live, saved, &p.journal)
			}
		}
		never, before := NewState(), &journal{}
		never.Consult(before)
		for _, e := range p.journal {
			*before = append(*before, Event{Index: e.Index})
			if e.Withdrawn != nil || live.IsWithdrawn(e.Index) {
				continue
			}
			(*before)[e.Index] = e
			if e.Batch != nil {
				b := *e.Batch
				b.Replaces = nil
				e.Batch = &b
			}
			if _, err := never.Apply(&e); err != nil {
				rt.Fatal(err)
			}
		}
		for name, want := range never.processes {
			same(rt, name, live.processes[name], want, p.clock)
		}
	})
}

// restarted is a state as it is when the program ends and is started again.
func restarted(t *rapid.T, s *State, saved map[string][]byte, h History) *State {
	pieces, err := s.Pieces()
	if err != nil {
		t.Fatal(err)
	}
	for name, piece := range pieces {
		if saved[name] = piece; piece == nil {
			delete(saved, name)
		}
	}
	next, err := Restore(saved)
	if err != nil {
		t.Fatal(err)
	}
	next.every = s.every
	next.Consult(h)
	return next
}

func same(t *rapid.T, name string, got, want *process, now time.Time) {
	for _, p := range []*process{got, want} {
		p.pass(now)
		if err := p.write(); err != nil {
			t.Fatal(err)
		}
	}
	if !bytes.Equal(got.Memory, want.Memory) || got.memory.Sums() != want.memory.Sums() {
		t.Errorf("%s: believed %+v, want %+v", name, got.memory.Sums(), want.memory.Sums())
	}
	if got.Taken != want.Taken || got.Batches != want.Batches || got.Segment != want.Segment ||
		!got.SegmentSince.Equal(want.SegmentSince) || !got.LastMeasured.Equal(want.LastMeasured) || !got.LastTaken.Equal(want.LastTaken) {
		t.Errorf("%s: %+v, want %+v", name, got, want)
	}
	gauge, err := json.Marshal(got.Gauge)
	wanted, err2 := json.Marshal(want.Gauge)
	if err := errors.Join(err, err2); err != nil || !bytes.Equal(gauge, wanted) {
		t.Errorf("%s: gauge %s, want %s, %v", name, gauge, wanted, err)
	}
	if want.tests == nil {
		return
	}
	for _, p := range []*process{got, want} {
		p.tests.base.Pass(now.UnixNano())
	}
	g, err1 := got.tests.copied()
	w, err2 := want.tests.copied()
	gText, err3 := json.Marshal(g)
	wText, err4 := json.Marshal(w)
	if err := errors.Join(err1, err2, err3, err4); err != nil || !bytes.Equal(gText, wText) || got.tests.units != want.tests.units {
		t.Errorf("%s: tests %s, want %s, %v", name, gText, wText, err)
	}
}

// A tool was changed at a moment, and it is said later: what was measured before no longer counts,
// what was measured since does, and a late file is divided at the same moment.
func TestSegmentFromAMoment(t *testing.T) {
	d, j := keeping(t)
	timed := func(process string, from time.Time, values ...float64) Event {
		e := batch(process, values...)
		for i := range values {
			e.Batch.Rows.Time = append(e.Batch.Rows.Time, from.Add(time.Duration(i)*time.Second).UnixNano())
		}
		return e
	}
	begun := at(0)
	d.keep(j, batch("head.L1", spread(33, 12)...))
	if got := states(d.keep(j, timed("head.L4", begun.Add(-9*time.Second), spread(35, 12)...))); got != "raised:unacknowledged " {
		t.Fatal(got)
	}
	mark := Event{Segment: &Segment{Processes: []string{"head.L4"}, Since: begun, Note: "new impeller", By: "the lead", How: "test"}}
	out := d.keep(j, mark)
	if got := states(out); got != "evidence restart:returned " || len(out.Looks) != 1 || !strings.Contains(out.Looks[0].Withheld, "3 of the 4 units") {
		t.Errorf("%q, %+v", got, out.Looks)
	}
	out = d.keep(j, timed("head.L4", begun.Add(-2*time.Second), 40, 40, 33, 33.1, 33.2))
	if len(out.Remarks) != 1 || !strings.Contains(out.Remarks[0], "2 of 5 measurements of file f.csv of rig were made before its segment began") {
		t.Errorf("%q", out.Remarks)
	}
	if sums, err := d.s.Sums("head.L4"); err != nil || sums.N != 6 || sums.Mean > 35.5 {
		t.Errorf("%+v, %v", sums, err)
	}
	for _, c := range []struct {
		since time.Time
		says  string
	}{{begun.Add(-time.Second), "began later"}, {begun.Add(time.Hour), "still to come"}} {
		e := Event{Index: d.next, At: at(d.next), Segment: &Segment{Processes: []string{"head.L4"}, Since: c.since}}
		if _, err := d.s.Apply(&e); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("since %v: %v", c.since, err)
		}
	}
}
