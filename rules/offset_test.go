package rules

import (
	"strings"
	"testing"
	"time"

	"steelyard/rules/posterior"
)

func offsetPlan() Plan {
	plan := testPlan()
	for _, rig := range []string{"rig1", "rig2"} {
		plan.Offsets = append(plan.Offsets, Offset{
			Name: rig, Source: rig, Characteristic: "head", Title: "delivery head", Unit: "kPa", Remember: posterior.Remember{Segment: true},
			Parts: []Reference{{Name: "ring7", Certified: 33.5, Uncertainty: 0.02}},
		})
	}
	plan.Rules = []Rule{
		{Name: "rig1 high", Claim: "bias(rig1) > 0.2", Raise: 0.99, Clear: 0.8, LeastUnits: 3, Priority: "high", FirstCheck: "the zero of rig1"},
		{Name: "rigs apart", Claim: "bias(rig1) - bias(rig2) > 0.2", Raise: 0.99, Clear: 0.8, LeastUnits: 3, Priority: "high"},
	}
	return plan
}

// A rig's offset is weighed like a mean, and speaks of nothing but the rig.
func TestOffsetOfARig(t *testing.T) {
	d := &driver{t: t, s: NewState()}
	plan := offsetPlan()
	d.apply(Event{Adopted: &Adopted{Plan: plan}})
	d.apply(batch("rig2", 0.01, -0.02, 0.01, 0.02))
	out := d.apply(batch("rig1", 0.54, 0.55, 0.56, 0.57))
	if states(out) != "raised:unacknowledged raised:unacknowledged " {
		t.Fatalf("%+v", out)
	}
	for i, want := range []string{"delivery head: the rig's offset of rig1 is above 0.2 kPa", "delivery head: the rig's offset on rig1 is above that on rig2 by more than 0.2 kPa"} {
		if told := strings.Join(plan.Tell(&out.Changes[i], time.UTC), " "); !strings.Contains(told, want) || !strings.Contains(told, "units of rig1") {
			t.Errorf("told %q, want %q", told, want)
		}
	}
	for claim, want := range map[string]string{
		"|bias(rig1)| > 0.2":              "delivery head: the rig's offset of rig1 is more than 0.2 kPa away from 0",
		"|bias(rig1)| < 0.2":              "delivery head: the rig's offset of rig1 is within 0.2 kPa of 0",
		"|bias(rig1) - bias(rig2)| < 0.2": "delivery head: the rig's offsets of rig1 and rig2 agree within 0.2 kPa",
	} {
		if plan.Rules[0].Claim = claim; plan.Says("rig1 high") != want {
			t.Errorf("%s: %q, want %q", claim, plan.Says("rig1 high"), want)
		}
	}
	st := standingOf(d.s, "rig1")
	if st.Quantity != "bias" || st.Units != 4 || st.Unit != "kPa" || st.Line != "rig1" || st.Estimate == nil || st.Estimate.Median < 0.554 || st.Estimate.Median > 0.556 {
		t.Errorf("%+v", st)
	}
	if p := standingOf(d.s, "head.L1"); p.Units != 0 {
		t.Errorf("a reference part entered a process: %+v", p)
	}
	d.apply(Event{Segment: &Segment{Processes: []string{"rig1"}, Note: "recalibrated"}})
	if st := standingOf(d.s, "rig1"); st.Units != 0 || st.Segment != 1 {
		t.Errorf("after a recalibration: %+v", st)
	}
}

func TestOffsetIsNoProcess(t *testing.T) {
	for claim, says := range map[string]string{
		"mean(rig1) > 0.2":    "bias: a rig has an offset and nothing else",
		"bias(head.L1) > 0.2": "the name of a rig that measures reference parts",
		"bias(rig9) > 0.2":    `"rig9"`,
	} {
		plan := offsetPlan()
		plan.Rules = plan.Rules[:1]
		plan.Rules[0].Claim = claim
		if _, err := NewState().Apply(&Event{Adopted: &Adopted{Plan: plan}}); err == nil || !strings.Contains(err.Error(), says) {
			t.Errorf("%s: %v, want it to say %q", claim, err, says)
		}
	}
	plan := offsetPlan()
	plan.Offsets[1].Name = "head.L1"
	if _, err := NewState().Apply(&Event{Adopted: &Adopted{Plan: plan}}); err == nil || !strings.Contains(err.Error(), "the name of another process") {
		t.Errorf("%v", err)
	}
}
