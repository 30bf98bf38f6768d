package rules

import (
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"slices"
	"time"
)

// Quiet is what a rule waits for in place of a claim: that nothing is counted of a line, a source or
// a process for so long. Exactly one of the three is named. How long is measured within the hours
// in which a line is declared to run, which is for the monitor to know: the engine has no clock and
// no calendar.
type Quiet struct {
	For     time.Duration `json:"for"` // ns, above 0
	Line    string        `json:"line,omitempty"`
	Source  string        `json:"source,omitempty"`
	Process string        `json:"process,omitempty"`
}

// Moment is a moment of the clock that matters: a quiet rule's time was reached. Since is when
// something was last counted of what the rule is about.
type Moment struct {
	Rule  string    `json:"rule"`
	Since time.Time `json:"since"`
}

// Stepped says that the clock on the wall did not go on as time did: it was set, or the machine
// slept. Was is what it would have shown, Is what it showed.
type Stepped struct {
	Was time.Time `json:"was"`
	Is  time.Time `json:"is"`
}

// errHeard is why a moment of the clock is refused.
var errHeard = errors.New("something has been counted since")

func (q *Quiet) check(p *Plan) error {
	named := 0
	for _, name := range []string{q.Line, q.Source, q.Process} {
		if name != "" {
			named++
		}
	}
	if named != 1 || q.For <= 0 {
		return errors.New("a quiet rule is about one line, source or process, and a time above 0")
	}
	if q.Process == "" {
		return nil
	}
	if _, _, ok := p.split(q.Process); !ok {
		return errUnknown(q.Process)
	}
	return nil
}

func (q *Quiet) version() string {
	sum := sha256.Sum256(fmt.Appendf(nil, "quiet %d %q %q %q", int64(q.For), q.Line, q.Source, q.Process))
	return hex.EncodeToString(sum[:6])
}

// about says what the rule listens to: "line L2".
func (q *Quiet) about() string {
	switch {
	case q.Line != "":
		return "line " + q.Line
	case q.Source != "":
		return "source " + q.Source
	}
	return q.Process
}

func (q *Quiet) says() string {
	return fmt.Sprintf("%s: nothing has been counted for %s", q.about(), hours(q.For))
}

// hours writes a duration without the units that are 0: 4h, 1h30m.
func hours(d time.Duration) string {
	d = d.Round(time.Second)
	text := ""
	if h := d / time.Hour; h > 0 {
		text += fmt.Sprintf("%dh", h)
	}
	if m := d % time.Hour / time.Minute; m > 0 {
		text += fmt.Sprintf("%dm", m)
	}
	if s := d % time.Minute / time.Second; s > 0 || text == "" {
		text += fmt.Sprintf("%ds", s)
	}
	return text
}

// tellQuiet is what people are told of a quiet rule that raised or cleared.
func (r *Rule) tellQuiet(c *Change, zone *time.Location) []string {
	at := c.At.In(zone).Format("15:04:05 on 2006-01-02")
	if c.Cause == Cleared {
		return []string{fmt.Sprintf("%s: something has been counted again, at %s%s; %s.", r.Quiet.about(), at, withFile(c), stands(c.To))}
	}
	told := []string{
		r.Quiet.says() + ".",
		fmt.Sprintf("The last that was counted, or the start of this rule, was at %s; now it is %s.",
			c.Since.In(zone).Format("15:04:05 on 2006-01-02"), at),
		"So whatever else stands for it stands on what was counted before.",
	}
	if r.FirstCheck != "" {
		told = append(told, "Look first at: "+r.FirstCheck+".")
	}
	return told
}

// hears says whether a batch has something of what the rule is about.
func (q *Quiet) hears(s *State, b *Batch) bool {
	if q.Source != "" {
		return b.Source == q.Source && len(b.Series) > 0
	}
	return slices.ContainsFunc(b.Series, func(series Series) bool {
		if q.Process != "" {
			return series.Process == q.Process
		}
		_, line, ok := s.plan.split(series.Process)
		return ok && line == q.Line && !s.plan.isOffset(series.Process)
	})
}

// listen begins to wait, with a rule that is new.
func (s *State) listen(e *Event, i int) {
	a := s.alarms[s.ready[i].Name]
	if a.Counted.IsZero() {
		a.Counted = e.At
		s.touched[rulePiece+s.ready[i].Name] = true
	}
}

// heard notes for every quiet rule what a batch brings of what it is about, and clears it.
func (s *State) heard(e *Event, out *Outcomes) {
	for i := range s.ready {
		r := &s.ready[i]
		if r.Quiet == nil || !r.Quiet.hears(s, e.Batch) {
			continue
		}
		a := s.alarms[r.Name]
		a.Counted = e.At
		s.touched[rulePiece+r.Name] = true
		if a.active() {
			to := Normal
			if a.State == Unacknowledged {
				to = Returned
			}
			s.step(e, r.Name, to, Change{Cause: Cleared}, out)
		}
	}
}

// applyMoment raises a quiet rule, if nothing was counted since the moment was reckoned.
func (s *State) applyMoment(e *Event) (Outcomes, error) {
	m := e.Moment
	i := slices.IndexFunc(s.ready, func(r weighed) bool { return r.Name == m.Rule && r.Quiet != nil })
	if i < 0 {
		return Outcomes{}, fmt.Errorf("there is no quiet rule %q in the plan", m.Rule)
	}
	a := s.alarms[m.Rule]
	if a.active() {
		return Outcomes{}, fmt.Errorf("the alarm of rule %q stands already", m.Rule)
	}
	if a.Counted.After(m.Since) {
		return Outcomes{}, fmt.Errorf("rule %q: %w", m.Rule, errHeard)
	}
	var out Outcomes
	if a.State == Returned {
		s.step(e, m.Rule, Normal, Change{Cause: Replaced}, &out)
	}
	s.counters.Alarms++
	s.touched[countersPiece] = true
	a.Number, a.Step, a.Raised = s.counters.Alarms, 0, e.At
	s.step(e, m.Rule, Unacknowledged, Change{Cause: Raised, Since: m.Since}, &out)
	return out, nil
}
