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
		upper := quantile(c, p, logit975, m.centre+float64(2.1*m.width()), float64(0.5*m.width()))
		return Interval{Median: m.centre, Lower: m.centre - m.beyond(upper), Upper: upper}, nil
	}
	start, scale := guess(c, p)
	median := quantile(c, p, 0, start, scale)
	lower := quantile(c, p, -logit975, median-2*scale, scale)
	upper := quantile(c, p, logit975, median+2*scale, scale)
	return Interval{Median: median, Lower: lower, Upper: upper}, nil
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
		return guessMeans(c, p)
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

// guessMeans is guess for |contrast| and for one mean less the largest or smallest.
func guessMeans(c *claim.Claim, p []Process) (start, scale float64) {
	if c.Form == claim.Absolute {
		k := contrastOf(c, p)
		return math.Abs(k.centre), k.width()
	}
	one := meanOf(&p[c.Terms[0].Process])
	rival := meanOf(&p[c.Terms[1].Process])
	for _, t := range c.Terms[2:] {
		if s := meanOf(&p[t.Process]); (s.centre > rival.centre) == (c.Form == claim.Largest) {
			rival = s
		}
	}
	return one.centre - rival.centre, hypot(one.scale, rival.scale)
}

// farOdds bounds the logarithms of odds that the search looks at: e^40 is far beyond the ends of
// the interval, and the shape beyond would only lead a secant astray.
const farOdds = 40

// quantile is the x at which log(P(q < x)/P(q > x)) is logit: inside a bracket that is widened first, by
// Chandrupatla's choice between inverse quadratic interpolation and bisection (Advances in Engineering
// Software 28, 1997).
func quantile(c *claim.Claim, p []Process, logit, start, scale float64) float64 {
	f := func(x float64) float64 {
		o := above(c, p, x)
		return math.Max(math.Min(o.LogAgainst-o.LogFor, farOdds), -farOdds) - logit
	}
	a, b, fa, fb := bracket(f, start, scale)
	if math.IsInf(a, 0) {
		return a
	}
	if math.IsInf(b, 0) {
		return b
	}
	t := fa / (fa - fb)
	for range 200 {
		x := a + float64(t*(b-a))
		fx := f(x)
		third, fthird := b, fb
		if (fx < 0) == (fa < 0) {
			third, fthird = a, fa
		} else {
			b, fb = a, fa
		}
		a, fa = x, fx
		best := a
		if math.Abs(fb) < math.Abs(fa) {
			best = b
		}
		least := float64(4e-16*math.Abs(best)) / math.Max(math.Abs(b-a), math.SmallestNonzeroFloat64)
		if math.Abs(fx) < 1e-11 || least > 0.5 {
			return best
		}
		t = step(a, b, third, fa, fb, fthird)
		t = math.Min(math.Max(t, least), 1-least)
	}
	return a
}

// step is where to look next, from a towards b as a share of the way.
func step(a, b, c, fa, fb, fc float64) float64 {
	xi, phi := (a-b)/(c-b), (fa-fb)/(fc-fb)
	if float64(phi*phi) < xi && float64((1-phi)*(1-phi)) < 1-xi {
		return float64(fa/(fb-fa)*(fc/(fb-fc))) + float64((c-a)/(b-a)*(fa/(fc-fa))*(fb/(fc-fb)))
	}
	return 0.5
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
