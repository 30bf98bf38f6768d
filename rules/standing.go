package rules

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"steelyard/rules/claim"
	"steelyard/rules/evidence"
	"steelyard/rules/posterior"
)

// Standing is where one process stands.
type Standing struct {
	Process      string             `json:"process"`
	Label        string             `json:"label"`
	Line         string             `json:"line"`
	Unit         string             `json:"unit,omitempty"`
	Quantity     string             `json:"quantity"` // what Estimate is of: mean, median, proportion, rate
	Units        float64            `json:"units"`    // that the evidence rests on
	Taken        int64              `json:"taken"`    // measurements since the store began
	Estimate     *evidence.Interval `json:"estimate,omitempty"`
	Why          string             `json:"why,omitempty"` // there is no estimate
	Segment      int                `json:"segment"`
	SegmentSince time.Time          `json:"segment_since,omitzero"`
	SegmentNote  string             `json:"segment_note,omitempty"`
	LastMeasured time.Time          `json:"last_measured,omitzero"`
	LastTaken    time.Time          `json:"last_taken,omitzero"`
	Tests        string             `json:"tests,omitempty"`  // which test of a serial counts, where that was declared
	Beyond       *Beyond            `json:"beyond,omitempty"` // readings beyond the gauge's limits, where they are counted
	Same         int                `json:"same,omitempty"`   // the last so many values are one and the same: stuck, as declared
	Parts        []Reference        `json:"parts,omitempty"`  // of a rig's offset, the reference parts that tell it
}

// RuleStanding is where one rule stands.
type RuleStanding struct {
	Rule     string     `json:"rule"`
	Version  string     `json:"version"`
	Claim    string     `json:"claim"`
	Says     string     `json:"says"`
	Priority string     `json:"priority"`
	Raise    float64    `json:"raise"`
	Clear    float64    `json:"clear"`
	State    AlarmState `json:"state"`
	Since    time.Time  `json:"since,omitzero"`
	Alarm    int        `json:"alarm,omitempty"` // the newest of this rule; 0 before the first
	Raised   time.Time  `json:"raised,omitzero"`
	Look     *Look      `json:"look,omitempty"` // the last one
	LookAt   time.Time  `json:"look_at,omitzero"`
	Quiet    *Quiet     `json:"quiet,omitempty"`  // of a rule that waits for something to be counted
	Counted  time.Time  `json:"counted,omitzero"` // when something was, last
}

// Plan is a copy of the plan in force.
func (s *State) Plan() Plan { return s.plan }

// Standings are where the plan's processes stand, in its order, and behind them the rigs' offsets.
func (s *State) Standings() []Standing {
	var all []Standing
	s.plan.each(func(name string, c *Characteristic) { all = append(all, s.standing(name, c)) })
	return all
}

func (s *State) standing(name string, c *Characteristic) Standing {
	p := s.processes[name]
	_, line, _ := s.plan.split(name)
	kind := centre(c.Family)
	offset, isOffset := s.plan.OffsetNamed(name)
	if isOffset {
		kind = claim.Bias
	}
	st := Standing{
		Process: name, Label: c.Label(), Line: line, Unit: c.Unit, Quantity: string(kind),
		Units: units(p), Taken: p.Taken, Segment: p.Segment, SegmentSince: p.SegmentSince,
		SegmentNote: p.SegmentNote, LastMeasured: p.LastMeasured, LastTaken: p.LastTaken, Tests: c.Retests.Says(),
	}
	st.Beyond, st.Same = p.beyond(), p.same()
	if isOffset {
		st.Parts = offset.Parts
	}
	q, err := s.Centre(name)
	switch {
	case st.Beyond != nil && st.Beyond.Share() > st.Beyond.AtMost:
		st.Why = "too many readings lie beyond the gauge's limits" // Notes have the figures
	case err != nil:
		st.Why = strings.TrimPrefix(err.Error(), name+": ")
	case !finite(q.Median, q.Lower, q.Upper):
		st.Why = posterior.ErrImproper.Error()
	default:
		st.Estimate = &q
	}
	return st
}

// IsOffset says that this is a rig's offset, and not a process of a line.
func (s *Standing) IsOffset() bool { return s.Quantity == string(claim.Bias) }

// Notes are sentences on what to bear in mind with the figures.
func (s *Standing) Notes() (notes []string) {
	if b := s.Beyond; b != nil && b.N > 0 {
		notes = append(notes, fmt.Sprintf("%s: %s of the %s readings remembered lie beyond the gauge's limits (%s %%; claims are weighed up to %s %%).",
			s.Process, number(math.Round(b.N*10)/10), number(math.Round(b.Of*10)/10), percent(b.Share()), percent(b.AtMost)))
	}
	if s.Same > 0 {
		notes = append(notes, fmt.Sprintf("%s: the last %d values are one and the same; the gauge may be stuck.", s.Process, s.Same))
	}
	return notes
}

// PartsText are the reference parts of an offset with what they are certified to be. How well that is
// known adds to the uncertainty of the offset; it is stated here and not weighed.
func (s *Standing) PartsText() string {
	var parts []string
	for _, p := range s.Parts {
		text := fmt.Sprintf("%s, certified %s", p.Name, withUnit(number(p.Certified), s.Unit))
		if p.Uncertainty > 0 {
			text += fmt.Sprintf(" (standard uncertainty %s)", withUnit(number(p.Uncertainty), s.Unit))
		}
		parts = append(parts, text)
	}
	return strings.Join(parts, "; ")
}

// Centre is the estimate of a process's centre: mean, median, proportion or rate.
func (s *State) Centre(process string) (evidence.Interval, error) {
	of, err := s.centreOf(process)
	if err != nil {
		return evidence.Interval{}, err
	}
	return evidence.Estimate(of, []evidence.Process{s.belief(process)})
}

// CentreAbove is the odds of a process's centre lying above x.
func (s *State) CentreAbove(process string, x float64) (evidence.Odds, error) {
	of, err := s.centreOf(process)
	if err != nil {
		return evidence.Odds{}, err
	}
	of.Bound = x
	return evidence.Weigh(of, []evidence.Process{s.belief(process)})
}

// centreOf is the claim about a process's centre.
func (s *State) centreOf(process string) (*claim.Claim, error) {
	c, _, ok := s.plan.split(process)
	if !ok {
		return nil, errUnknown(process)
	}
	if why := s.censored([]string{process}); why != "" {
		return nil, errors.New(why)
	}
	return &claim.Claim{
		Kind: centre(c.Family), Form: claim.Linear, Test: claim.Above,
		Terms: []claim.Term{{Weight: 1}}, Processes: []string{process},
	}, nil
}

// centre is the quantity by which a family's processes are compared first.
func centre(f posterior.Family) claim.Kind {
	switch f {
	case posterior.LognormalFamily:
		return claim.Median
	case posterior.BinomialFamily:
		return claim.Proportion
	case posterior.PoissonFamily:
		return claim.Rate
	}
	return claim.Mean
}

// Sums are the statistics that a process's evidence rests on now.
func (s *State) Sums(process string) (posterior.Sums, error) {
	p, ok := s.processes[process]
	if !ok {
		return posterior.Sums{}, errUnknown(process)
	}
	return p.memory.Sums(), nil
}

type errUnknown string

func (e errUnknown) Error() string { return "there is no process " + string(e) + " in the plan" }

// RuleStandings are where the plan's rules stand, in its order.
func (s *State) RuleStandings() []RuleStanding {
	var all []RuleStanding
	for _, r := range s.ready {
		a := s.alarms[r.Name]
		st := RuleStanding{
			Rule: r.Name, Version: r.version, Claim: r.Claim, Says: s.plan.Says(r.Name), Priority: r.Priority,
			Raise: r.Raise, Clear: r.Clear, State: a.State, Since: a.Since, Alarm: a.Number, Raised: a.Raised,
			LookAt: a.LastAt, Quiet: r.Quiet, Counted: a.Counted,
		}
		if a.Last != nil {
			look := *a.Last
			st.Look = &look
		}
		all = append(all, st)
	}
	return all
}

// Alarms are the rules whose state is not normal, the highest priority first and within one
// priority the newest first.
func (s *State) Alarms() []RuleStanding {
	var standing []RuleStanding
	for _, r := range s.RuleStandings() {
		if r.State != Normal {
			standing = append(standing, r)
		}
	}
	slices.SortStableFunc(standing, func(a, b RuleStanding) int {
		if d := urgency(b.Priority) - urgency(a.Priority); d != 0 {
			return d
		}
		return b.Alarm - a.Alarm
	})
	return standing
}

func urgency(priority string) int {
	return strings.Index("low medium high", priority)
}
