package rules

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"

	"steelyard/rules/claim"
	"steelyard/rules/evidence"
	"steelyard/rules/posterior"
)

// Question is a claim to be weighed once, on figures that are given with it.
type Question struct {
	ID        string                     `json:"id"`
	Claim     string                     `json:"claim"`
	Processes map[string]QuestionProcess `json:"processes"`
}

// QuestionProcess is what is given of one process: values, or a summary of them.
type QuestionProcess struct {
	Family  posterior.Family `json:"family"` // normal where empty
	Values  []float64        `json:"values,omitempty"`
	Summary *Summary         `json:"summary,omitempty"`
	Prior   json.RawMessage  `json:"prior,omitempty"` // "reference", or the fields of posterior.Prior
	Limits  struct {
		Lower *float64 `json:"lower"`
		Upper *float64 `json:"upper"`
	} `json:"limits"`
}

// Summary are the figures of measurements: n with mean and sd (divisor n-1), or with log_mean and
// log_sd of natural logarithms; counted and of; count and exposure.
type Summary struct {
	N        *float64 `json:"n,omitempty"`
	Mean     *float64 `json:"mean,omitempty"`
	SD       *float64 `json:"sd,omitempty"`
	LogMean  *float64 `json:"log_mean,omitempty"`
	LogSD    *float64 `json:"log_sd,omitempty"`
	Counted  *float64 `json:"counted,omitempty"`
	Of       *float64 `json:"of,omitempty"`
	Count    *float64 `json:"count,omitempty"`
	Exposure *float64 `json:"exposure,omitempty"`
}

// Weighed is the answer to a Question.
type Weighed struct {
	Claim    *claim.Claim // as it was bound
	Odds     evidence.Odds
	Quantity evidence.Interval
}

// Weigh answers the question. The error is a sentence for whoever asked.
func (q *Question) Weigh() (*Weighed, error) {
	parsed, err := claim.Parse(q.Claim)
	if err != nil {
		return nil, fmt.Errorf("claim %q: %w", q.Claim, err)
	}
	var names []string
	for name := range q.Processes {
		names = append(names, name)
	}
	slices.Sort(names)
	bound, err := parsed.Bind(func(name string) (claim.Known, bool) {
		p, ok := q.Processes[name]
		lower, upper := p.limits()
		return claim.Known{Family: p.family(), Lower: lower, Upper: upper}, ok
	}, names)
	if err != nil {
		return nil, fmt.Errorf("claim %q: %w", q.Claim, err)
	}
	var believed []evidence.Process
	for _, name := range bound.Processes {
		p := q.Processes[name]
		b, err := p.believed()
		if err != nil {
			return nil, fmt.Errorf("process %s: %w", name, err)
		}
		believed = append(believed, b)
	}
	w := &Weighed{Claim: bound}
	if w.Odds, err = evidence.Weigh(bound, believed); err != nil {
		return nil, err
	}
	w.Quantity, err = evidence.Estimate(bound, believed)
	return w, err
}

func (p *QuestionProcess) family() posterior.Family {
	if p.Family == "" {
		return posterior.NormalFamily
	}
	return p.Family
}

func (p *QuestionProcess) limits() (lower, upper float64) {
	c := Characteristic{Lower: p.Limits.Lower, Upper: p.Limits.Upper}
	return c.Limits()
}

// believed is the posterior that the figures give.
func (p *QuestionProcess) believed() (evidence.Process, error) {
	prior, err := p.prior()
	if err != nil {
		return evidence.Process{}, err
	}
	sums, err := p.sums()
	if err != nil {
		return evidence.Process{}, err
	}
	lower, upper := p.limits()
	if lower >= upper {
		return evidence.Process{}, fmt.Errorf("limits from %v to %v: lower below upper is expected", lower, upper)
	}
	return evidence.Process{Posterior: prior.Posterior(p.family(), sums), Lower: lower, Upper: upper}, nil
}

func (p *QuestionProcess) prior() (posterior.Prior, error) {
	prior := posterior.Prior{Reference: true}
	switch text := strings.TrimSpace(string(p.Prior)); {
	case text == "", text == "null", text == `"reference"`:
	default:
		prior = posterior.Prior{}
		decoder := json.NewDecoder(strings.NewReader(text))
		decoder.DisallowUnknownFields()
		if err := decoder.Decode(&prior); err != nil {
			return prior, fmt.Errorf(`prior %s: "reference" or an object of its numbers is expected`, text)
		}
	}
	return prior, prior.Check(p.family())
}

// sums are the statistics of the values or the summary.
func (p *QuestionProcess) sums() (s posterior.Sums, err error) {
	f := p.family()
	switch {
	case p.Values != nil && p.Summary != nil:
		return s, fmt.Errorf("values and a summary are given; one of them is expected")
	case p.Summary != nil:
		return p.Summary.sums(f)
	case p.Values == nil:
		return s, nil // the prior alone
	}
	for i, v := range p.Values {
		if err := f.Accepts(v, 1); err != nil {
			return s, fmt.Errorf("value %d: %w", i+1, err)
		}
		s = s.Add(f, v, 1)
	}
	return s, nil
}

func (y *Summary) sums(f posterior.Family) (s posterior.Sums, err error) {
	n, mean, sd, names := y.N, y.Mean, y.SD, "n, mean and sd"
	switch f {
	case posterior.BinomialFamily:
		if y.Counted == nil || y.Of == nil {
			return s, fmt.Errorf("a summary of counted and of is expected")
		}
		if *y.Counted == 0 && *y.Of == 0 {
			return s, nil
		}
		return s.Add(f, *y.Counted, *y.Of), f.Accepts(*y.Counted, *y.Of)
	case posterior.PoissonFamily:
		if y.Count == nil || y.Exposure == nil {
			return s, fmt.Errorf("a summary of count and exposure is expected")
		}
		return s.Add(f, *y.Count, *y.Exposure), f.Accepts(*y.Count, *y.Exposure)
	case posterior.LognormalFamily:
		n, mean, sd, names = y.N, y.LogMean, y.LogSD, "n, log_mean and log_sd"
	}
	if n == nil || mean == nil || sd == nil {
		return s, fmt.Errorf("a summary of %s is expected", names)
	}
	if !(*n >= 1) || *n != math.Trunc(*n) || !finite(*n, *mean, *sd) || *sd < 0 {
		return s, fmt.Errorf("n %v, mean %v and sd %v: a whole number from 1 on, and finite numbers, sd from 0 on, are expected", *n, *mean, *sd)
	}
	return posterior.FromSummary(*n, *mean, *sd), nil
}
