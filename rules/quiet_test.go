package rules

import (
	"strings"
	"testing"
	"time"

	"steelyard/rules/posterior"
)

func quietDriver(t *testing.T) (*driver, Plan) {
	plan := testPlan()
	plan.Offsets = []Offset{{Name: "rig", Source: "rig", Characteristic: "head", Remember: posterior.Remember{Segment: true}}}
	plan.Rules = []Rule{
		{Name: "L4 quiet", Quiet: &Quiet{For: 4 * time.Hour, Line: "L4"}, Priority: "low", FirstCheck: "whether L4 runs"},
		{Name: "rig quiet", Quiet: &Quiet{For: 90 * time.Minute, Source: "rig"}, Priority: "low"},
		{Name: "L1 quiet", Quiet: &Quiet{For: time.Second, Process: "head.L1"}, Priority: "low"},
	}
	d := &driver{t: t, s: NewState()}
	d.apply(Event{Adopted: &Adopted{Plan: plan}})
	return d, plan
}

func (d *driver) counted(rule string) time.Time {
	for _, r := range d.s.RuleStandings() {
		if r.Rule == rule {
			return r.Counted
		}
	}
	return time.Time{}
}

func TestQuietRule(t *testing.T) {
	d, plan := quietDriver(t)
	begun := d.counted("L4 quiet")
	if begun.IsZero() {
		t.Fatal("a new rule does not begin to listen")
	}
	d.apply(batch("head.L1", 33))
	if got := d.counted("L4 quiet"); !got.Equal(begun) {
		t.Errorf("L4 was heard at %v when L1 was", got)
	}
	if d.counted("rig quiet").Equal(begun) || d.counted("L1 quiet").Equal(begun) {
		t.Error("the source and the process were not heard")
	}
	out := d.apply(Event{Moment: &Moment{Rule: "L4 quiet", Since: begun}})
	if states(out) != "raised:unacknowledged " {
		t.Fatalf("%+v", out)
	}
	told := strings.Join(plan.Tell(&out.Changes[0], time.UTC), " ")
	for _, want := range []string{"line L4: nothing has been counted for 4h.", "at 10:00:00 on 2026-03-02", "Look first at: whether L4 runs.", ReleaseNote} {
		if !strings.Contains(told, want) {
			t.Errorf("told %q, want it to say %q", told, want)
		}
	}
	d.apply(batch("rig", 0.1)) // a reference part is no unit of the line
	out = d.apply(batch("head.L4", 33))
	if states(out) != "cleared:returned " {
		t.Errorf("%+v", out)
	}
	if told := plan.Tell(&out.Changes[0], time.UTC)[0]; !strings.Contains(told, "line L4: something has been counted again, at 10:00:04") {
		t.Errorf("told %q", told)
	}
	heard := d.counted("L4 quiet")
	if got := states(d.apply(Event{Moment: &Moment{Rule: "L4 quiet", Since: heard}})); got != "replaced:normal raised:unacknowledged " {
		t.Error(got)
	}
	if got := states(d.apply(Event{Acknowledged: &Acknowledged{Alarm: 2, By: "lead"}})); got != "answered:acknowledged " {
		t.Error(got)
	}
	if got := states(d.apply(batch("head.L4", 33))); got != "cleared:normal " {
		t.Error(got)
	}
}

// A moment that something counted has overtaken, or of a rule that is no quiet one, is refused.
func TestMomentRefused(t *testing.T) {
	d, _ := quietDriver(t)
	begun := d.counted("L4 quiet")
	d.apply(batch("head.L4", 33))
	for _, c := range []struct {
		rule, says string
	}{{"L4 quiet", "counted since"}, {"L9 quiet", "no quiet rule"}} {
		if _, err := d.s.Apply(&Event{Moment: &Moment{Rule: c.rule, Since: begun}}); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%s: %v", c.rule, err)
		}
	}
	d.apply(Event{Moment: &Moment{Rule: "rig quiet", Since: d.counted("rig quiet")}})
	if _, err := d.s.Apply(&Event{Moment: &Moment{Rule: "rig quiet", Since: d.counted("rig quiet")}}); err == nil || !strings.Contains(err.Error(), "stands already") {
		t.Errorf("%v", err)
	}
}

func TestQuietOfAnotherLengthIsAnotherRule(t *testing.T) {
	d, plan := quietDriver(t)
	d.apply(Event{Moment: &Moment{Rule: "L4 quiet", Since: d.counted("L4 quiet")}})
	longer := *plan.Rules[0].Quiet
	longer.For *= 2
	plan.Rules[0].Quiet = &longer
	if got := states(d.apply(Event{Adopted: &Adopted{Plan: plan}})); got != "plan changed:normal " {
		t.Error(got)
	}
	plan.Rules[0].Quiet = &Quiet{For: time.Hour}
	if _, err := d.s.Apply(&Event{Adopted: &Adopted{Plan: plan}}); err == nil || !strings.Contains(err.Error(), "one line, source or process") {
		t.Errorf("%v", err)
	}
}
