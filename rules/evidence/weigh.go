package evidence

import (
	"fmt"
	"math"

	"steelyard/rules/claim"
	"steelyard/rules/posterior"
)

// Weigh is the posterior odds of a bound claim; p[i] belongs to c.Processes[i]. The error is a
// sentence: a posterior that is not a distribution yet, or a spread of zero, which is a fault
// of the gauge or of the rounding and not evidence. TestPublicCases.
func Weigh(c *claim.Claim, p []Process) (Odds, error) {
	if err := weighable(c, p); err != nil {
		return Odds{}, err
	}
	switch {
	case c.Test == claim.Within:
		return window(c, p, c.Low, c.High), nil
	case c.Test == claim.Above:
		return above(c, p, c.Bound), nil
	}
	return above(c, p, c.Bound).against(), nil
}

// weakest is the least parameter of a Beta or gamma law of which two can be compared: below it,
// part of the law lies under the smallest float64.
const weakest = 0.05

// weighable says why a claim can't be weighed now; nil where it can.
func weighable(c *claim.Claim, p []Process) error {
	if len(p) != len(c.Processes) {
		return fmt.Errorf("the claim %s speaks of %d processes, and %d are given", c, len(c.Processes), len(p))
	}
	paired := (c.Kind == claim.Proportion || c.Kind == claim.Rate) && len(c.Terms) > 1
	for i := range p {
		if err := p[i].Proper(); err != nil {
			return fmt.Errorf("%s: %w", c.Processes[i], err)
		}
		f := p[i].Family
		if (f == posterior.NormalFamily || f == posterior.LognormalFamily) && !(p[i].SS > 0) {
			return fmt.Errorf("%s: all its values are the same, so its spread is zero; look at the gauge or its rounding", c.Processes[i])
		}
		if paired && !(p[i].A >= weakest && (f == posterior.PoissonFamily || p[i].B >= weakest)) {
			return fmt.Errorf("%s: its prior is too weak to compare it with another before more is counted; parameters of at least %v are needed",
				c.Processes[i], weakest)
		}
	}
	return nil
}

// above is the odds of the claim's quantity lying above x.
func above(c *claim.Claim, p []Process, x float64) Odds {
	switch c.Form {
	case claim.Ratio:
		return ratioAbove(c, p, x)
	case claim.Absolute:
		if x < 0 {
			return certain(true)
		}
		return linearWithin(c, p, -x, x).against()
	case claim.Largest, claim.Smallest:
		return extremeAbove(c, p, x)
	}
	return linearAbove(c, p, x)
}

// window is the odds of the claim's quantity lying between lo and hi. Where no integral of the
// window itself is at hand it is what the two tails leave, which keeps relative accuracy while
// the window holds more than about 1e-4 of the probability.
func window(c *claim.Claim, p []Process, lo, hi float64) Odds {
	switch {
	case math.IsInf(lo, -1):
		return above(c, p, hi).against()
	case math.IsInf(hi, 1):
		return above(c, p, lo)
	case c.Form == claim.Linear:
		return linearWithin(c, p, lo, hi)
	}
	return between(above(c, p, lo), above(c, p, hi))
}

// between is the odds of lying between two levels, from the odds of lying above each.
func between(lo, hi Odds) Odds {
	contrary := math.Min(logSum(lo.LogAgainst, hi.LogFor), 0)
	if contrary < -math.Ln2 {
		return oddsOf(contrary).against()
	}
	inside := lo.LogFor + log1mexp(math.Min(hi.LogFor-lo.LogFor, 0))
	if hi.LogFor > hi.LogAgainst {
		inside = hi.LogAgainst + log1mexp(math.Min(lo.LogAgainst-hi.LogAgainst, 0))
	}
	return Odds{LogFor: inside, LogAgainst: contrary}
}

func linearAbove(c *claim.Claim, p []Process, x float64) Odds {
	one, w := &p[c.Terms[0].Process], c.Terms[0].Weight
	if len(c.Terms) == 2 && (c.Kind == claim.Proportion || c.Kind == claim.Rate) {
		// w X1 + v X2 > x is X1 > -(v/w) X2 + x/w, turned round for w < 0.
		two, v := &p[c.Terms[1].Process], c.Terms[1].Weight
		line := betaLineOdds
		if c.Kind == claim.Rate {
			line = gammaLineOdds
		}
		o := line(one.A, one.B, two.A, two.B, -v/w, x/w)
		if w < 0 {
			return o.against()
		}
		return o
	}
	switch c.Kind {
	case claim.Mean, claim.Bias:
		m := contrastOf(c, p)
		return m.above(x)
	case claim.Median:
		if x <= 0 {
			return certain(true)
		}
		m := contrastOf(c, p)
		return m.above(log(x))
	case claim.Next:
		m := next(one)
		if one.Family == posterior.LognormalFamily {
			if x <= 0 {
				return certain(true)
			}
			x = log(x)
		}
		return m.above(x)
	case claim.SD:
		return sdOdds(one.SS, one.Nu, x)
	case claim.Outside:
		return outsideOdds(one, x).against()
	case claim.Capability:
		return capabilityOdds(one, x)
	case claim.Proportion:
		return betaOdds(one.A, one.B, x)
	}
	return gammaOdds(one.A, one.B, x)
}

// next is the posterior predictive law of one more unit: the mean's, wider by the unit's own
// spread (Gelman et al., Bayesian Data Analysis, section 3.2).
func next(p *Process) (k contrast) {
	k.add(scaled{p.M, p.MLow, math.Sqrt(p.SS / p.Nu * (1 + 1/p.K)), p.Nu}, 1)
	return k
}

func linearWithin(c *claim.Claim, p []Process, lo, hi float64) Odds {
	one := &p[c.Terms[0].Process]
	switch {
	case c.Kind == claim.Mean || c.Kind == claim.Bias:
		m := contrastOf(c, p)
		return m.within(lo, hi)
	case c.Kind == claim.Median || c.Kind == claim.Next && one.Family == posterior.LognormalFamily:
		if hi <= 0 {
			return certain(false)
		}
		if lo <= 0 {
			return linearAbove(c, p, hi).against()
		}
		lo, hi = log(lo), log(hi)
		if c.Kind == claim.Median {
			m := contrastOf(c, p)
			return m.within(lo, hi)
		}
		m := next(one)
		return m.within(lo, hi)
	case c.Kind == claim.Next:
		m := next(one)
		return m.within(lo, hi)
	case c.Kind == claim.Proportion && len(c.Terms) == 1:
		return betaWindowOdds(one.A, one.B, lo, hi)
	case c.Kind == claim.Rate && len(c.Terms) == 1:
		return gammaWindowOdds(one.A, one.B, lo, hi)
	}
	return between(linearAbove(c, p, lo), linearAbove(c, p, hi))
}

func ratioAbove(c *claim.Claim, p []Process, r float64) Odds {
	one, two := &p[c.Terms[0].Process], &p[c.Terms[1].Process]
	if r <= 0 {
		return certain(true)
	}
	switch c.Kind {
	case claim.SD:
		return sdRatioOdds(one.SS, one.Nu, two.SS, two.Nu, r)
	case claim.Median:
		var m contrast
		m.add(meanOf(one), 1)
		m.add(meanOf(two), -1)
		return m.above(log(r))
	case claim.Proportion:
		return betaLineOdds(one.A, one.B, two.A, two.B, r, 0)
	}
	return gammaLineOdds(one.A, one.B, two.A, two.B, r, 0)
}

// meansAbove is extremeAbove of means: one less a tolerance is the largest of all or, their signs turned, not.
func meansAbove(c *claim.Claim, p []Process, x float64) Odds {
	var r ranking
	sign := 1.0
	if c.Form == claim.Smallest {
		sign = -1
	}
	reference := meanOf(&p[c.Terms[0].Process])
	for i, t := range c.Terms {
		s := meanOf(&p[t.Process])
		s.centre, s.centreLow = addPairs(s.centre, s.centreLow, -reference.centre, -reference.centreLow)
		if i == 0 {
			s.centre, s.centreLow = addPairs(s.centre, s.centreLow, -x, 0)
		}
		s.centre, s.centreLow = sign*s.centre, sign*s.centreLow
		r.add(s)
	}
	if o := r.odds(0); sign > 0 {
		return o
	} else {
		return o.against()
	}
}

func extremeAbove(c *claim.Claim, p []Process, x float64) Odds {
	if c.Kind == claim.Mean || c.Kind == claim.Bias {
		return meansAbove(c, p, x)
	}
	var a, b [64]float64
	n := len(c.Terms)
	for i, t := range c.Terms {
		a[i], b[i] = p[t.Process].A, p[t.Process].B
	}
	switch {
	case c.Kind == claim.Proportion && c.Form == claim.Largest:
		return betaLargestOdds(a[:n], b[:n], 0, x)
	case c.Kind == claim.Proportion:
		return betaSmallestOdds(a[:n], b[:n], 0, x)
	case c.Form == claim.Largest:
		return gammaLargestOdds(a[:n], b[:n], 0, x)
	}
	return gammaSmallestOdds(a[:n], b[:n], 0, x)
}
