package rules

import (
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"

	"steelyard/rules/claim"
	"steelyard/rules/posterior"
)

// ProcessName is the name of one characteristic on one line: head.L4.
func ProcessName(characteristic, line string) string { return characteristic + "." + line }

// Characteristic is the characteristic of that name.
func (p *Plan) Characteristic(name string) (*Characteristic, bool) {
	for i := range p.Characteristics {
		if p.Characteristics[i].Name == name {
			return &p.Characteristics[i], true
		}
	}
	return nil, false
}

// Rule is the rule of that name.
func (p *Plan) Rule(name string) (*Rule, bool) {
	for i := range p.Rules {
		if p.Rules[i].Name == name {
			return &p.Rules[i], true
		}
	}
	return nil, false
}

// Processes are the names of every process of the plan, in its order.
func (p *Plan) Processes() []string {
	var names []string
	for _, c := range p.Characteristics {
		for _, line := range c.Lines {
			names = append(names, ProcessName(c.Name, line))
		}
	}
	for i := range p.Offsets {
		names = append(names, p.Offsets[i].Name)
	}
	return names
}

// split finds the characteristic and the line of a process.
func (p *Plan) split(process string) (c *Characteristic, line string, ok bool) {
	for i := range p.Characteristics {
		c = &p.Characteristics[i]
		line, ok = strings.CutPrefix(process, c.Name+".")
		if ok && slices.Contains(c.Lines, line) {
			return c, line, true
		}
	}
	return p.splitOffset(process)
}

// Label is what people call the characteristic.
func (c *Characteristic) Label() string {
	if c.Title != "" {
		return c.Title
	}
	return c.Name
}

// Limits are the characteristic's limits, infinite where it has none.
func (c *Characteristic) Limits() (lower, upper float64) {
	lower, upper = math.Inf(-1), math.Inf(1)
	if c.Lower != nil {
		lower = *c.Lower
	}
	if c.Upper != nil {
		upper = *c.Upper
	}
	return lower, upper
}

// Known tells the claim language what a process name stands for in this plan.
func (p *Plan) Known(process string) (claim.Known, bool) {
	c, _, ok := p.split(process)
	if !ok {
		return claim.Known{}, false
	}
	lower, upper := c.Limits()
	return claim.Known{Family: c.Family, Lower: lower, Upper: upper, Offset: p.isOffset(process)}, true
}

// needs is how many units of a process the rule wants before it looks.
func (r *Rule) needs(process string) float64 {
	if n, ok := r.LeastOf[process]; ok {
		return float64(n)
	}
	return float64(r.LeastUnits)
}

// weighed is a rule made ready to be looked at.
type weighed struct {
	Rule
	version string
	claim   *claim.Claim
}

// compile checks a plan and makes its rules ready. The error is a sentence naming the first
// thing that is wrong; a plan that configuration has checked compiles.
func (p *Plan) compile() ([]weighed, error) {
	for _, c := range p.Characteristics {
		if err := c.Prior.Check(c.Family); err != nil {
			return nil, fmt.Errorf("characteristic %q: %w", c.Name, err)
		}
		if err := c.Remember.Check(); err != nil {
			return nil, fmt.Errorf("characteristic %q: %w", c.Name, err)
		}
		if err := c.Retests.Check(); err != nil {
			return nil, fmt.Errorf("characteristic %q: %w", c.Name, err)
		}
		if err := c.Gauge.check(c.Family); err != nil {
			return nil, fmt.Errorf("characteristic %q: %w", c.Name, err)
		}
	}
	if err := p.checkOffsets(); err != nil {
		return nil, err
	}
	var ready []weighed
	seen := map[string]bool{}
	for _, r := range p.Rules {
		if seen[r.Name] {
			return nil, fmt.Errorf("rule %q stands twice in the plan", r.Name)
		}
		seen[r.Name] = true
		if r.Quiet != nil {
			if err := r.Quiet.check(p); err != nil {
				return nil, fmt.Errorf("rule %q: %w", r.Name, err)
			}
			ready = append(ready, weighed{Rule: r, claim: &claim.Claim{}, version: r.Quiet.version()})
			continue
		}
		parsed, err := claim.Parse(r.Claim)
		if err == nil {
			parsed, err = parsed.Bind(p.Known, p.Processes())
		}
		if err != nil {
			return nil, fmt.Errorf("rule %q, claim %q: %w", r.Name, r.Claim, err)
		}
		if !(0.5 < r.Raise && r.Raise < 1 && 0 < r.Clear && r.Clear < r.Raise) {
			return nil, fmt.Errorf("rule %q: raise %v and clear %v: 0.5 < raise < 1 and 0 < clear < raise are expected",
				r.Name, r.Raise, r.Clear)
		}
		ready = append(ready, weighed{Rule: r, claim: parsed, version: p.version(&r, parsed)})
	}
	return ready, nil
}

// version is a short fingerprint of everything that decides when a rule raises and clears:
// its claim, thresholds and least evidence, and of each characteristic it speaks of the
// family, limits, prior, what is remembered, which test of a serial counts and what is asked of the
// gauge. Priority and who is told are not in it.
func (p *Plan) version(r *Rule, c *claim.Claim) string {
	type part struct {
		Family       posterior.Family
		Lower, Upper *float64
		Prior        posterior.Prior
		Remember     posterior.Remember
		Retests      Retests `json:",omitzero"`
		Gauge        Gauge   `json:",omitzero"`
	}
	parts := map[string]part{}
	for _, process := range c.Processes {
		if ch, _, ok := p.split(process); ok {
			parts[ch.Name] = part{ch.Family, ch.Lower, ch.Upper, ch.Prior, ch.Remember, ch.Retests, ch.Gauge}
		}
	}
	text, err := json.Marshal([]any{c.String(), r.Raise, r.Clear, r.LeastUnits, r.LeastOf, parts})
	if err != nil {
		panic("rules: a checked plan holds only finite numbers: " + err.Error())
	}
	sum := sha256.Sum256(text)
	return hex.EncodeToString(sum[:6])
}

// RuleVersion is the fingerprint of one rule of the plan as it stands in messages and in the
// journal; empty for a rule that the plan does not have.
func (p *Plan) RuleVersion(name string) string {
	r, ok := p.Rule(name)
	if !ok {
		return ""
	}
	if r.Quiet != nil {
		return r.Quiet.version()
	}
	c, err := claim.Parse(r.Claim)
	if err != nil {
		return ""
	}
	return p.version(r, c)
}
