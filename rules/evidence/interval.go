package evidence

import (
	"math"

	"steelyard/rules/claim"
	"steelyard/rules/posterior"
)

// logit975 is log(0.975/0.025): the odds at the ends of the central 95 % interval.
const logit975 = 3.6635616461296463

// Estimate is the median and central 95 % interval of the quantity of a bound claim: the
// places at which the odds of lying above are even, 39 to 1 and 1 to 39, found on the odds that
// Weigh gives. An interval that has no end on one side is given as infinite.
func Estimate(c *claim.Claim, p []Process) (Interval, error) {
	if err := weighable(c, p); err != nil {
		return Interval{}, err
	}
	if m, ok := symmetric(c, p); ok {
		upper := quantile(c, p, logit975, m.centre, m.width())
		return Interval{Median: m.centre, Lower: m.centre - m.beyond(upper), Upper: upper}, nil
	}
	start, scale := guess(c, p)
	q := func(logit float64) float64 { return quantile(c, p, logit, start, scale) }
	return Interval{Median: q(0), Lower: q(-logit975), Upper: q(logit975)}, nil
}

// symmetric gives the law of a quantity that is symmetric about its centre: its median is the
// centre, and its interval reaches as far down as up.
func symmetric(c *claim.Claim, p []Process) (m contrast, ok bool) {
	if c.Form != claim.Linear {
		return m, false
	}
	one := &p[c.Terms[0].Process]
	switch {
	case c.Kind == claim.Mean || c.Kind == claim.Bias:
		return contrastOf(c, p), true
	case c.Kind == claim.Next && one.Family == posterior.NormalFamily:
		return next(one), true
	}
	return m, false
}

// guess is a place and a scale from which to look for the quantiles; they decide how many
// steps are needed, not what is found.
func guess(c *claim.Claim, p []Process) (start, scale float64) {
	one := &p[c.Terms[0].Process]
	switch c.Kind {
	case claim.Mean, claim.Bias:
		return 0, one.M/1e3 + meanOf(one).scale
	case claim.Next:
		return exp(one.M), exp(one.M)
	case claim.Median:
		if c.Form == claim.Ratio {
			return 1, 0.1
		}
		return exp(one.M), exp(one.M) * meanOf(one).scale
	case claim.SD:
		if c.Form == claim.Ratio {
			return 1, 0.1
		}
		s := math.Sqrt(one.SS / one.Nu)
		return s, s / math.Sqrt(one.Nu)
	case claim.Proportion, claim.Rate:
		if c.Form == claim.Ratio {
			return 1, 0.1
		}
		mean := one.A / (one.A + one.B)
		if c.Kind == claim.Rate {
			mean = one.A / one.B
		}
		if len(c.Terms) > 1 {
			return 0, float64(mean/2) + 1e-12
		}
		return mean, mean / math.Sqrt(one.A+1)
	case claim.Outside:
		return 0.01, 0.01
	}
	return 1, 0.1
}

// farOdds bounds the logarithms of odds that the search looks at: e^40 is far beyond the ends of
// the interval, and the shape beyond would only lead a secant astray.
const farOdds = 40

// quantile is the x at which log(P(q < x)/P(q > x)) is logit: inside a bracket that is widened
// first, by regula falsi with the Illinois rule, every third step being a bisection.
func quantile(c *claim.Claim, p []Process, logit, start, scale float64) float64 {
	f := func(x float64) float64 {
		o := above(c, p, x)
		return math.Max(math.Min(o.LogAgainst-o.LogFor, farOdds), -farOdds) - logit
	}
	lo, hi, fLo, fHi := bracket(f, start, scale)
	if math.IsInf(lo, 0) {
		return lo
	}
	if math.IsInf(hi, 0) {
		return hi
	}
	moved := 0 // which end moved last: -1 lo, 1 hi
	for step := range 300 {
		x := hi - fHi*(hi-lo)/(fHi-fLo)
		if step%3 == 2 || !(x > lo && x < hi) {
			x = lo + float64((hi-lo)/2)
		}
		fx := f(x)
		if math.Abs(fx) < 1e-13 || x <= lo || x >= hi || hi-lo < 4e-16*math.Max(math.Abs(lo), math.Abs(hi)) {
			return x
		}
		if fx < 0 {
			lo, fLo = x, fx
			if moved < 0 {
				fHi /= 2
			}
			moved = -1
		} else {
			hi, fHi = x, fx
			if moved > 0 {
				fLo /= 2
			}
			moved = 1
		}
	}
	return lo + float64((hi-lo)/2)
}

// bracket finds two places between which f, which grows, passes 0.
func bracket(f func(float64) float64, start, scale float64) (lo, hi, fLo, fHi float64) {
	if !(scale > 0) || math.IsInf(scale, 0) {
		scale = 1
	}
	lo, hi = start-scale, start+scale
	fLo, fHi = f(lo), f(hi)
	for step := scale; fLo > 0; step *= 2 {
		if hi, fHi = lo, fLo; step > 1e300 {
			return math.Inf(-1), hi, fLo, fHi
		}
		lo -= 2 * step
		fLo = f(lo)
	}
	for step := scale; fHi < 0; step *= 2 {
		if lo, fLo = hi, fHi; step > 1e300 {
			return lo, math.Inf(1), fLo, fHi
		}
		hi += 2 * step
		fHi = f(hi)
	}
	return lo, hi, fLo, fHi
}
