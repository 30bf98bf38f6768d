package rules

import (
	"encoding/json"
	"math"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"steelyard/rules/posterior"
)

func testPlan() Plan {
	reference := posterior.Prior{Reference: true}
	return Plan{
		Site: "Tessmoor Pumpworks",
		Characteristics: []Characteristic{{
			Name: "head", Title: "delivery head", Unit: "kPa", Family: posterior.NormalFamily, Lines: []string{"L1", "L4"},
			Prior: reference, Remember: posterior.Remember{Units: 12},
		}},
		Rules: []Rule{{
			Name: "over", Claim: "mean(head.L4) - mean(head.L1) > 0.4", Raise: 0.99, Clear: 0.8, LeastUnits: 4, Priority: "high",
			FirstCheck: "the rig", Tell: []string{"leads"},
		}},
	}
}

// driver feeds an engine with events, as the monitor does.
type driver struct {
	t interface {
		Helper()
		Fatal(...any)
	}
	s    *State
	next uint64
}

func newDriver(t *testing.T) *driver {
	d := &driver{t: t, s: NewState()}
	d.apply(Event{Adopted: &Adopted{Plan: testPlan()}})
	return d
}

func (d *driver) apply(e Event) Outcomes {
	d.t.Helper()
	e.Index, e.At = d.next, time.Date(2026, 3, 2, 10, 0, int(d.next), 0, time.UTC)
	d.next++
	out, err := d.s.Apply(&e)
	if err != nil {
		d.t.Fatal(err)
	}
	return out
}

func batch(process string, values ...float64) Event {
	b := &Batch{Source: "rig", File: "f.csv", Series: []Series{{Process: process, Value: values}}}
	for i := range values {
		b.Rows.Line = append(b.Rows.Line, i+2)
		b.Series[0].Row = append(b.Series[0].Row, i)
	}
	return Event{Batch: b}
}

// spread are n values around a mean with a standard deviation near 0.3.
func spread(mean float64, n int) (values []float64) {
	for i := range n {
		values = append(values, mean+0.3*math.Sin(float64(i)*1.7))
	}
	return values
}

func states(out Outcomes) (text string) {
	for _, c := range out.Changes {
		text += string(c.Cause) + ":" + string(c.To) + " "
	}
	return text
}

func TestAlarmStates(t *testing.T) {
	d := newDriver(t)
	out := d.apply(batch("head.L1", spread(33, 12)...))
	if len(out.Looks) != 1 || !strings.Contains(out.Looks[0].Withheld, "head.L4 has 0 of the 4 units") {
		t.Errorf("a look with too little evidence: %+v", out)
	}
	for _, step := range []struct {
		event Event
		want  string
	}{
		{batch("head.L4", spread(35, 12)...), "raised:unacknowledged "},
		{batch("head.L4", spread(35, 2)...), ""}, // still true: no repeat
		{Event{Acknowledged: &Acknowledged{Alarm: 1, By: "lead"}}, "answered:acknowledged "},
		{batch("head.L4", spread(33, 12)...), "cleared:normal "},
		{batch("head.L4", spread(35, 12)...), "raised:unacknowledged "},
		{batch("head.L4", spread(33, 12)...), "cleared:returned "},
		{batch("head.L4", spread(35, 12)...), "replaced:normal raised:unacknowledged "},
		{Event{Segment: &Segment{Processes: []string{"head.L4"}, Note: "new impeller"}}, "evidence restart:returned "},
		{Event{Acknowledged: &Acknowledged{Alarm: 3, By: "lead"}}, "answered:normal "},
	} {
		if got := states(d.apply(step.event)); got != step.want {
			t.Errorf("%+v: %q, want %q", step.event, got, step.want)
		}
	}
	if _, err := d.s.Apply(&Event{Acknowledged: &Acknowledged{Alarm: 1}}); err == nil || !strings.Contains(err.Error(), "A1 is over") {
		t.Errorf("answering an alarm that is over: %v", err)
	}
	if _, err := d.s.Apply(&Event{Acknowledged: &Acknowledged{Alarm: 9}}); err == nil || !strings.Contains(err.Error(), "no alarm A9") {
		t.Errorf("answering an alarm that never was: %v", err)
	}
}

func TestAdoptingAChangedRule(t *testing.T) {
	d := newDriver(t)
	d.apply(batch("head.L1", spread(33, 12)...))
	d.apply(batch("head.L4", spread(35, 12)...))
	plan := testPlan()
	plan.Rules[0].Tell = nil
	if got := states(d.apply(Event{Adopted: &Adopted{Plan: plan}})); got != "" {
		t.Errorf("who is told does not make a new rule: %q", got)
	}
	plan.Rules[0].Raise = 0.995
	if got := states(d.apply(Event{Adopted: &Adopted{Plan: plan}})); got != "plan changed:normal raised:unacknowledged " {
		t.Errorf("a new threshold: %q", got)
	}
	plan.Rules = nil
	if got := states(d.apply(Event{Adopted: &Adopted{Plan: plan}})); got != "plan changed:normal " {
		t.Errorf("a rule taken out: %q", got)
	}
}

func TestRefusedEventChangesNothing(t *testing.T) {
	d := newDriver(t)
	before, _ := d.s.Sums("head.L1")
	bad := batch("head.L1", 1, 2)
	bad.Batch.Series = append(bad.Batch.Series, Series{Process: "head.L9", Row: []int{0}, Value: []float64{1}})
	if _, err := d.s.Apply(&bad); err == nil || !strings.Contains(err.Error(), `"head.L9"`) {
		t.Errorf("a process that is not there: %v", err)
	}
	nan := batch("head.L1", math.NaN())
	if _, err := d.s.Apply(&nan); err == nil {
		t.Error("NaN was counted")
	}
	if after, _ := d.s.Sums("head.L1"); after != before {
		t.Errorf("refused events changed the state: %+v", after)
	}
}

func TestZeroSpreadIsWithheld(t *testing.T) {
	d := newDriver(t)
	d.apply(batch("head.L1", 33, 33, 33, 33, 33))
	out := d.apply(batch("head.L4", 34, 34, 34, 34, 34))
	if len(out.Changes) != 0 || !strings.Contains(out.Looks[0].Withheld, "spread is zero") {
		t.Errorf("%+v", out)
	}
}

// A state that is saved and restored at any moments goes on as one that was not.
func TestRestore(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		whole := &driver{t: t, s: NewState()}
		split := &driver{t: t, s: NewState()}
		saved := map[string][]byte{}
		both := func(e Event) {
			a, b := whole.apply(e), split.apply(e)
			ta, _ := json.Marshal(a)
			tb, _ := json.Marshal(b)
			if string(ta) != string(tb) {
				t.Fatalf("%s as it went on, %s after a restart", ta, tb)
			}
			pieces, err := split.s.Pieces()
			if err != nil {
				t.Fatal(err)
			}
			for name, piece := range pieces {
				if saved[name] = piece; piece == nil {
					delete(saved, name)
				}
			}
			if rapid.Bool().Draw(t, "restart") {
				if split.s, err = Restore(saved); err != nil {
					t.Fatal(err)
				}
			}
		}
		both(Event{Adopted: &Adopted{Plan: testPlan()}})
		for range rapid.IntRange(1, 15).Draw(t, "events") {
			switch rapid.IntRange(0, 5).Draw(t, "kind") {
			case 0:
				both(Event{Segment: &Segment{Processes: []string{"head.L4"}}})
			default:
				process := rapid.SampledFrom([]string{"head.L1", "head.L4"}).Draw(t, "process")
				mean := rapid.SampledFrom([]float64{33, 35}).Draw(t, "mean")
				both(batch(process, spread(mean, rapid.IntRange(1, 12).Draw(t, "n"))...))
			}
		}
	})
}

// In a window of time, what is idle ages with the events of others, and a rig's clock that runs
// ahead pushes nothing out.
func TestWindowOfTime(t *testing.T) {
	d := &driver{t: t, s: NewState()}
	plan := testPlan()
	plan.Characteristics[0].Remember = posterior.Remember{Hours: 1}
	at := time.Date(2026, 3, 2, 10, 0, 0, 0, time.UTC)
	apply := func(e Event, in time.Duration) {
		at = at.Add(in)
		e.At = at
		if _, err := d.s.Apply(&e); err != nil {
			t.Fatal(err)
		}
	}
	apply(Event{Adopted: &Adopted{Plan: plan}}, 0)
	apply(batch("head.L1", spread(33, 5)...), 0)
	ahead := batch("head.L1", spread(33, 5)...)
	for range 5 {
		ahead.Batch.Rows.Time = append(ahead.Batch.Rows.Time, at.AddDate(10, 0, 0).UnixNano())
	}
	apply(ahead, time.Minute)
	if s, _ := d.s.Sums("head.L1"); s.N != 10 {
		t.Errorf("a clock that runs ahead: %v units are left of 10", s.N)
	}
	apply(batch("head.L4", spread(33, 5)...), 2*time.Hour)
	if s, _ := d.s.Sums("head.L1"); s.N != 0 {
		t.Errorf("two hours later %v units of an idle line still count in a window of one", s.N)
	}
}

func TestWords(t *testing.T) {
	plan := testPlan()
	for text, want := range map[string]string{
		"mean(head.L4) - mean(head.L1) > 0.4":   "delivery head: L4 is running above L1 by more than 0.4 kPa",
		"mean(head.L4) - mean(head.L1) < -0.4":  "delivery head: L4 is running below L1 by more than 0.4 kPa",
		"|mean(head.L4) - mean(head.L1)| < 0.4": "delivery head: the means of L4 and L1 agree within 0.4 kPa",
		"mean(head.L4) within 31 .. 34":         "delivery head: on L4, the mean is between 31 and 34 kPa",
		"mean(head.L4) > 31":                    "delivery head: on L4, the mean is above 31 kPa",
		"sd(head.L4) / sd(head.L1) > 1.5":       "delivery head: the spread (standard deviation) on L4 is more than 1.5 times that on L1",
	} {
		plan.Rules[0].Claim = text
		if got := plan.Says("over"); got != want {
			t.Errorf("%s: %q, want %q", text, got, want)
		}
	}
	d := newDriver(t)
	d.apply(batch("head.L1", spread(33, 12)...))
	out := d.apply(batch("head.L4", spread(35, 12)...))
	plan = testPlan()
	told := strings.Join(plan.Tell(&out.Changes[0], time.UTC), " ")
	for _, want := range []string{"L4 is running above L1", "to 1)", "12 units of L4 and 12 units of L1", "95 % between", "crossed 0.99 at 10:00:02",
		"file f.csv of rig", "Look first at: the rig.", ReleaseNote} {
		if !strings.Contains(told, want) {
			t.Errorf("told %q, want it to say %q", told, want)
		}
	}
}

func BenchmarkLook(b *testing.B) {
	s := NewState()
	plan := testPlan()
	if _, err := s.Apply(&Event{Adopted: &Adopted{Plan: plan}}); err != nil {
		b.Fatal(err)
	}
	for i, e := range []Event{batch("head.L1", spread(33, 12)...), batch("head.L4", spread(33.5, 12)...)} {
		e.Index = uint64(i + 1)
		if _, err := s.Apply(&e); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportAllocs()
	for b.Loop() {
		if l := s.weigh(0); l.Withheld != "" {
			b.Fatal(l.Withheld)
		}
	}
}
