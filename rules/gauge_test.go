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

// gauged is a driver of a plan that asks something of the gauge.
func gauged(t *testing.T, g Gauge, r posterior.Remember) *driver {
	plan := testPlan()
	plan.Characteristics[0].Gauge, plan.Characteristics[0].Remember = g, r
	d := &driver{t: t, s: NewState()}
	d.apply(Event{Adopted: &Adopted{Plan: plan}})
	return d
}

// beyond adds readings above a limit to a batch of one series, behind its values.
func beyond(e Event, n int) Event {
	b := e.Batch
	for range n {
		b.Series[0].Beyond = append(b.Series[0].Beyond, Bound{Row: len(b.Rows.Line), Limit: 40, Above: true})
		b.Rows.Line = append(b.Rows.Line, len(b.Rows.Line)+2)
	}
	return e
}

func standingOf(s *State, process string) Standing {
	for _, st := range s.Standings() {
		if st.Process == process {
			return st
		}
	}
	return Standing{}
}

// Readings beyond the gauge's limits are counted beside the values; a claim about the values is
// withheld while their share is above the bound, and is weighed again when they have left what is
// remembered.
func TestCensoredWithholdsTheMean(t *testing.T) {
	d := gauged(t, Gauge{Censored: true, CensoredAtMost: 0.1}, posterior.Remember{Units: 20})
	d.apply(batch("head.L1", spread(33, 20)...))
	out := d.apply(beyond(batch("head.L4", spread(35, 18)...), 2))
	if l := out.Looks[0]; l.Withheld != "" || states(out) != "raised:unacknowledged " {
		t.Fatalf("2 of 20 are a share of 0.1, which is allowed: %+v", out)
	}
	out = d.apply(beyond(batch("head.L4"), 1))
	want := `head.L4: 3 of the 20 readings remembered lie beyond the gauge's limits (15 %), and no more than 10 % may`
	if l := out.Looks[0]; !strings.Contains(l.Withheld, want) || len(out.Changes) != 0 {
		t.Errorf("withheld %q, want %q", l.Withheld, want)
	}
	st := standingOf(d.s, "head.L4")
	if st.Estimate != nil || !strings.Contains(st.Why, "beyond the gauge") || !strings.Contains(st.Notes()[0], "3 of the 20") || st.Beyond.N != 3 || st.Beyond.Of != 20 || st.Units != 18 {
		t.Errorf("standing %+v", st)
	}
	out = d.apply(batch("head.L4", spread(33, 20)...))
	if states(out) != "cleared:returned " {
		t.Errorf("twenty values later: %+v", out)
	}
	if st := standingOf(d.s, "head.L4"); st.Beyond.Share() != 0 || st.Estimate == nil {
		t.Errorf("twenty values later: %+v", st)
	}
	d.apply(beyond(batch("head.L4"), 3))
	d.apply(Event{Segment: &Segment{Processes: []string{"head.L4"}}})
	if st := standingOf(d.s, "head.L4"); st.Beyond.Of != 0 {
		t.Errorf("a new segment remembers readings of the old one: %+v", st.Beyond)
	}
}

// In a window of time readings beyond the limits leave as values do, also of an idle line.
func TestCensoredLeavesAWindowOfTime(t *testing.T) {
	d := gauged(t, Gauge{Censored: true, CensoredAtMost: 0.5}, posterior.Remember{Hours: 1})
	e := beyond(batch("head.L1", spread(33, 2)...), 4)
	e.At = time.Date(2026, 3, 2, 10, 0, 0, 0, time.UTC)
	if _, err := d.s.Apply(&e); err != nil {
		t.Fatal(err)
	}
	later := batch("head.L4", 33)
	later.At = e.At.Add(2 * time.Hour)
	if _, err := d.s.Apply(&later); err != nil {
		t.Fatal(err)
	}
	if st := standingOf(d.s, "head.L1"); st.Beyond.Of != 0 {
		t.Errorf("two hours later %v readings count in a window of one", st.Beyond.Of)
	}
}

func TestBeyondMustBeDeclared(t *testing.T) {
	d := newDriver(t)
	e := beyond(batch("head.L1", 33), 1)
	if _, err := d.s.Apply(&e); err == nil || !strings.Contains(err.Error(), "does not provide for") {
		t.Errorf("%v", err)
	}
}

// A gauge that is stuck is remarked on once for each run, across batches; where declared, the batch
// is refused and the state stays.
func TestStuck(t *testing.T) {
	d := gauged(t, Gauge{Stuck: 5}, posterior.Remember{Units: 100})
	var remarks []string
	for _, values := range [][]float64{{33, 33.1, 33.1}, {33.1, 33.1}, {33.1}, {33.1, 33}, {33.2, 33.2, 33.2, 33.2, 33.2, 33.3}} {
		remarks = append(remarks, strings.Join(d.apply(batch("head.L1", values...)).Remarks, "; "))
		if len(remarks) == 3 {
			if st := standingOf(d.s, "head.L1"); st.Same != 5 {
				t.Errorf("the standing says %d", st.Same)
			}
		}
	}
	for i, want := range []string{"", "", "5 times running (33.1)", "", "5 times running (33.2)"} {
		if want == "" && remarks[i] != "" || !strings.Contains(remarks[i], want) {
			t.Errorf("batch %d: %q, want %q", i, remarks[i], want)
		}
	}
	d = gauged(t, Gauge{Stuck: 5, StuckHeld: true}, posterior.Remember{Units: 100})
	d.apply(batch("head.L1", 33, 33.1, 33.1))
	before := standingOf(d.s, "head.L1")
	for range 2 {
		e := batch("head.L1", 33.1, 33.1, 33.1, 33)
		if _, err := d.s.Apply(&e); err == nil || !strings.Contains(err.Error(), "head.L1 reads one value 5 times running (33.1)") {
			t.Errorf("%v", err)
		}
	}
	if after := standingOf(d.s, "head.L1"); after.Units != before.Units {
		t.Errorf("a refused batch was counted: %+v", after)
	}
	d.apply(batch("head.L1", 33, 33.1, 33.1))
}

// A batch far outside everything seen is refused; one bad value among good ones is not that, and
// before twelve units are known nothing is far.
func TestFar(t *testing.T) {
	d := gauged(t, Gauge{Far: 8}, posterior.Remember{Units: 100})
	d.apply(batch("head.L1", 1, 1000, 3))
	d.apply(Event{Segment: &Segment{Processes: []string{"head.L1"}}})
	d.apply(batch("head.L1", spread(33, 12)...))
	d.apply(batch("head.L1", 33, 33.1, 500))
	d.apply(Event{Segment: &Segment{Processes: []string{"head.L1"}}})
	d.apply(batch("head.L1", spread(33, 12)...))
	inches := batch("head.L1", 33*25.4, 33.1*25.4)
	_, err := d.s.Apply(&inches)
	if err == nil || !strings.Contains(err.Error(), "the median of its 2 values of head.L1 is 838.2,") ||
		!strings.Contains(err.Error(), "from the mean of the 12 units remembered; at most 8 are expected") {
		t.Errorf("%v", err)
	}
	// 8 deviations by hand, on either side of the bound.
	sums, _ := d.s.Sums("head.L1")
	sd := math.Sqrt(sums.SS / 11)
	d.apply(batch("head.L1", sums.Mean+7.9*sd))
	d.apply(Event{Segment: &Segment{Processes: []string{"head.L1"}}})
	d.apply(batch("head.L1", spread(33, 12)...))
	over := batch("head.L1", sums.Mean-8.1*sd)
	if _, err := d.s.Apply(&over); err == nil {
		t.Error("8.1 standard deviations are not far")
	}
}

func TestGaugeOfThePlan(t *testing.T) {
	for _, c := range []struct {
		g    Gauge
		f    posterior.Family
		says string
	}{
		{Gauge{Stuck: 1}, "normal", "from 2 on"},
		{Gauge{CensoredAtMost: 1, Censored: true}, "normal", "up to 1"},
		{Gauge{Far: -1}, "lognormal", "above 0"},
		{Gauge{Stuck: 40}, "binomial", "normal and lognormal"},
	} {
		plan := testPlan()
		plan.Rules = nil
		plan.Characteristics[0].Gauge, plan.Characteristics[0].Family = c.g, c.f
		if _, err := NewState().Apply(&Event{Adopted: &Adopted{Plan: plan}}); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%+v: %v", c, err)
		}
	}
	one, other := testPlan(), testPlan()
	other.Characteristics[0].Gauge.Censored = true
	if one.RuleVersion("over") == other.RuleVersion("over") {
		t.Error("what is asked of the gauge does not make another rule")
	}
}

// What is kept for the gauge comes back from its pieces bit for bit, at any moment.
func TestRestoreGauge(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		whole, split := &driver{t: t, s: NewState()}, &driver{t: t, s: NewState()}
		plan := testPlan()
		plan.Characteristics[0].Gauge = Gauge{Censored: true, CensoredAtMost: 0.2, Stuck: 4, Far: 6}
		plan.Characteristics[0].Remember = rapid.SampledFrom([]posterior.Remember{
			{Units: 12}, {Hours: 0.001}, {Segment: true}, {Discount: 0.9}}).Draw(t, "remember")
		plan.Rules = append(plan.Rules, Rule{Name: "quiet", Quiet: &Quiet{For: time.Hour, Line: "L4"}})
		plan.Offsets = []Offset{{Name: "rig", Source: "rig", Characteristic: "head", Remember: posterior.Remember{Segment: true}}}
		saved := map[string][]byte{}
		both := func(e Event) {
			e.Index, e.At = whole.next, time.Date(2026, 3, 2, 10, 0, int(whole.next), 0, time.UTC)
			whole.next++
			again := e
			a, errA := whole.s.Apply(&e)
			b, errB := split.s.Apply(&again)
			ta, _ := json.Marshal([]any{a, errA == nil, whole.s.Standings(), whole.s.RuleStandings()})
			tb, _ := json.Marshal([]any{b, errB == nil, split.s.Standings(), split.s.RuleStandings()})
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
		both(Event{Adopted: &Adopted{Plan: plan}})
		for range rapid.IntRange(1, 15).Draw(t, "events") {
			switch rapid.IntRange(0, 6).Draw(t, "kind") {
			case 0:
				both(Event{Segment: &Segment{Processes: []string{"head.L4", "rig"}}})
			case 1:
				both(Event{Moment: &Moment{Rule: "quiet", Since: time.Date(2026, 3, 2, 10, 0, rapid.IntRange(0, 15).Draw(t, "since"), 0, time.UTC)}})
			default:
				process := rapid.SampledFrom([]string{"head.L1", "head.L4", "rig"}).Draw(t, "process")
				values := rapid.SliceOfN(rapid.SampledFrom([]float64{33, 33.1, 33.2, 99}), 0, 6).Draw(t, "values")
				e := batch(process, values...)
				if process != "rig" {
					e = beyond(e, rapid.IntRange(0, 3).Draw(t, "beyond"))
				}
				both(e)
			}
		}
	})
}
