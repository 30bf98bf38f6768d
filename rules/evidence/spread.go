package evidence

import (
	"math"

	"steelyard/rules/posterior"
)

// sdOdds is the odds of sigma > x, SS/sigma^2 ~ chi-squared(nu): a gamma tail. TestSDClosedForms.
func sdOdds(ss, nu, x float64) Odds {
	switch {
	case x < 0 || x == 0 && ss > 0:
		return certain(true)
	case ss == 0 || math.IsInf(x, 1):
		return certain(false)
	}
	// In the variable t = SS/(2 x^2) ~ Gamma(nu/2), sigma > x is below t.
	root := math.Sqrt(ss) / x
	return gammaOdds(nu/2, 1, 0.5*float64(root*root)).against()
}

// sdRatioOdds is the odds of sigma1/sigma2 > r: chi2/(chi1+chi2) ~ Beta(nu2/2, nu1/2), one
// incomplete beta function, its point formed from exact products. Any nu > 0. TestPublicCases,
// TestPublishedSD, TestSDClosedForms.
func sdRatioOdds(ss1, nu1, ss2, nu2, r float64) Odds {
	switch {
	case r < 0 || r == 0 && ss1 > 0 || ss2 == 0 && ss1 > 0 && !math.IsInf(r, 1):
		return certain(true)
	case ss1 == 0 || math.IsInf(r, 1):
		return certain(false)
	}
	rr := r * r
	w := rr * ss2
	low := math.FMA(rr, ss2, -w) + float64(math.FMA(r, r, -rr)*ss2)
	return betaRatioOddsLow(nu2/2, nu1/2, w, low, ss1)
}

// A spreadCurve is the edge of a claim about mean and spread, in units that make one picture of
// all: s = H/sigma, H half the distance of the limits (1 where there is one). The claim is
//
//	s dU - v > m and s dL - v > -m,  m ~ N(0, 1/K) independent of s,  dU = (U-M)/H, dL = (M-L)/H,
//
// with v = 3c for capability > c; for fraction outside < f, v = z_f with one limit, and with two the
// v(rho) that solves Q(v) + Q(v + 2 rho) = f, rho = s - v being the half-width left to the mean in
// sigmas. x = SS/(2 sigma^2) = kappa s^2 ~ Gamma(nu/2).
//
// With two limits the integral is taken over u = log rho, not over sigma: s(rho) is analytic (it solves
// ds/drho = tanh(rho s), s(0) = z_{f/2}), while rho(s) ends in a square root.
type spreadCurve struct {
	law          law
	kappa        float64
	rootK        float64
	upper, lower float64 // dU, dL; +Inf where there is no limit
	// The edge.
	fraction    float64 // 0 for capability
	logFraction float64
	logInside   float64 // log(1-f)
	v           float64 // 3c; z_f
	hazard      float64 // phi(z_f)/Q(z_f)
	s0          float64 // s where rho = 0: 3c or z_{f/2}; 0 where s starts at 0 (one limit, c <= 0)
}

// newSpreadCurve places the process in the units of spreadCurve; logarithms of limits for lognormal.
func newSpreadCurve(p *Process) spreadCurve {
	upper, upperLow, lower, lowerLow := p.Upper, 0.0, p.Lower, 0.0
	if p.Family == posterior.LognormalFamily {
		upper, upperLow = logPair(p.Upper)
		lower, lowerLow = logPair(p.Lower)
	}
	h := 1.0
	two := !math.IsInf(upper, 1) && !math.IsInf(lower, -1)
	if two {
		h = 0.5 * ((upper - lower) + (upperLow - lowerLow))
	} else {
		h = math.Sqrt(p.SS / p.Nu)
	}
	root := math.Sqrt(0.5*p.SS) / h
	return spreadCurve{law: gammaLaw(p.Nu / 2), kappa: root * root, rootK: math.Sqrt(p.K),
		upper: distance(upper, upperLow, p.M, p.MLow) / h, lower: distance(p.M, p.MLow, lower, lowerLow) / h}
}

// distance is (a + aLow) - (b + bLow).
func distance(a, aLow, b, bLow float64) float64 {
	d := a - b
	if math.IsInf(d, 0) {
		return d
	}
	bb := a - d
	rounding := (a - (d + bb)) + (bb - b)
	return d + (rounding + (aLow - bLow))
}

// logPair is log x as a value and what it could not hold, to about 1e-18; -Inf for x <= 0.
func logPair(x float64) (hi, lo float64) {
	if !(x > 0) || math.IsInf(x, 1) {
		if x > 0 {
			return x, 0
		}
		return math.Inf(-1), 0
	}
	m, k := math.Frexp(x)
	if m < math.Sqrt2/2 {
		m *= 2
		k--
	}
	// log m = 2 atanh(u), u = (m-1)/(m+1), the leading term as a pair; m-1 is exact.
	const ln2Hi, ln2Lo = 0x1.62e42fefa38p-1, 0x1.ef35793c7673p-45
	den := m + 1
	denLow := (1 - den) + m
	u := (m - 1) / den
	uLow := (math.FMA(-u, den, m-1) - float64(u*denLow)) / den
	v := u * u
	series := 2 * u * v * polynomial(devianceSeries[:], v)
	a, b := float64(float64(k)*ln2Hi), float64(2*u)
	hi = a + b
	bb := hi - a
	lo = (a - (hi - bb)) + (b - bb) + (float64(float64(k)*ln2Lo) + (float64(2*uLow) + float64(series)))
	sum := hi + lo
	return sum, (hi - sum) + lo
}

func (s *spreadCurve) two() bool { return !math.IsInf(s.upper, 1) && !math.IsInf(s.lower, 1) }

// edge is s, v and 2 dlog s/du at the coordinate u: log rho, or log s where s starts at 0.
func (c *spreadCurve) edge(u float64) (s, v, rate float64) {
	e := exp(u)
	if c.s0 == 0 {
		return e, c.v, 2
	}
	if c.fraction == 0 {
		return c.v + e, c.v, 2 * e / (c.v + e)
	}
	s, rate = c.solve(e)
	return s, s - e, 2 * e * rate / s
}

// solve is s(rho) and ds/drho = tanh(rho s): Newton's method on log(Q(v)+Q(v+2rho)) = log f, or where f is
// above 1/2 on the logarithm of what is inside, P(rho-s < Z < rho+s) = 1-f.
func (c *spreadCurve) solve(rho float64) (s, rate float64) {
	if c.fraction > 0.5 {
		return c.solveInside(rho)
	}
	v := c.v
	r := exp(-2 * rho * (v + rho))
	if r < 1e-9 {
		// Q(v+2rho) is r times Q(v) and less: one step of Newton's is exact to r^2.
		v += float64(r * mills(v+float64(2*rho)))
		return v + rho, 1 - 2*r
	}
	v = math.Min(v+log1p(r)/c.hazard, c.s0)
	for range 30 {
		// Halley's step: d is Newton's, bend is g''/g' of g = log(Q(v)+Q(v+2rho)).
		r = exp(-2 * rho * (v + rho))
		m := mills(v) + float64(r*mills(v+2*rho))
		d := (log(m) - normalExponent(v) - logRoot2Pi - c.logFraction) * m / (1 + r)
		bend := (1+r)/m - (v+float64(r*(v+2*rho)))/(1+r)
		step := d / (1 + float64(0.5*float64(d*bend)))
		v += step
		if math.Abs(step) <= 1e-6*(0.01+v) {
			break
		}
	}
	s = v + rho
	r = exp(-2 * rho * s)
	return s, -expm1(-2*rho*s) / (1 + r)
}

func (c *spreadCurve) solveInside(rho float64) (s, rate float64) {
	s = math.Max(c.s0, rho+c.v)
	for range 60 {
		w := logNormalWindow(rho-s, rho+s)
		step := (c.logInside - w) * exp(w) / (normalDensity(rho-s) + normalDensity(rho+s))
		s = math.Max(s+step, 0.5*s)
		if math.Abs(step) <= 1e-9*s {
			break
		}
	}
	r := exp(-2 * rho * s)
	return s, -expm1(-2*rho*s) / (1 + r)
}

// at is the integrand as factor e^logarithm: the density of s times the probability that the mean is inside the
// edge, or outside it, given s.
func (c *spreadCurve) at(kind integrandKind, u float64) (logarithm, factor float64) {
	s, v, rate := c.edge(u)
	f := c.law.logDensity(c.kappa*float64(s*s), 0)
	up, low := c.rootK*(float64(s*c.upper)-v), c.rootK*(float64(s*c.lower)-v)
	l, p := 0.0, 0.0
	switch {
	case kind == inside && math.IsInf(low, 1):
		l, p = normalTails(-up, math.Inf(1))
	case kind == inside && math.IsInf(up, 1):
		l, p = normalTails(-low, math.Inf(1))
	case kind == inside:
		l, p = normalWindow(-low, up)
	default:
		l, p = normalTails(up, low)
	}
	return f + l, p * rate
}

// logProbability is log P(claim) (inside) or of its contrary; for s below s0 nothing is inside.
func (c *spreadCurve) logProbability(kind integrandKind) float64 {
	outer := math.Inf(-1)
	if c.s0 > 0 && kind == beyond {
		outer, _ = c.law.logTails(c.kappa*float64(c.s0*c.s0), 0)
	}
	g := integrand{kind: kind, spread: c, leftRate: c.leftRate(kind), rightRate: slowRate}
	width := math.Min(1, math.Sqrt(0.5/c.law.a))
	s := math.Sqrt(c.law.a / c.kappa)
	if c.s0 == 0 {
		return g.logIntegral(log(s), width)
	}
	rho := math.Max(s-c.v, 0.5*math.Min(1, 1/c.rootK))
	width = math.Min(1, width*s/rho)
	if kind == beyond && c.v < 0 && c.fraction > 0 && math.Min(c.upper, c.lower) < 0 {
		// With the mean beyond a limit more than half is outside both where sigma is small and where it is large: two
		// peaks. The sum has to pass the second, which lies beyond s = v/d.
		g.through, _, _ = g.peak(log(math.Max(s, 1.5*c.v/math.Min(c.upper, c.lower))-c.v), width)
		g.twoPeaks = true
		rho = 0.1 * c.s0
	}
	return logSum(outer, g.logIntegral(log(rho), width))
}

// leftRate is how fast the integrand falls off as u goes to -infinity: d log s/du as rho (once more where
// ds/drho vanishes), the window as rho; or the density of log s.
func (c *spreadCurve) leftRate(kind integrandKind) float64 {
	if c.s0 == 0 {
		return 2 * c.law.a
	}
	rate := 1.0
	if c.fraction > 0 {
		rate++
	}
	if kind == inside {
		rate++
	}
	return rate
}

// odds weighs the side that is the rarer at the estimates, and the other where that was wrong.
func (c *spreadCurve) odds(claimRare bool) Odds {
	kind, other := beyond, inside
	if claimRare {
		kind, other = inside, beyond
	}
	o := oddsOf(c.logProbability(kind))
	if o.LogFor > -0.5 {
		o = oddsOf(c.logProbability(other)).against()
	}
	if !claimRare {
		return o.against()
	}
	return o
}

// outsideOdds is the odds of F < fraction, F = Phi((L-mu)/sigma) + Phi((mu-U)/sigma) the part of the process
// beyond its limits; for lognormal of the logarithms. One limit: an integral over log sigma (the
// noncentral t law in a form that keeps both tails); two: spreadCurve. Any fraction, K and nu > 0; for nu to
// 1e6 within 1e-11 (measured 1e-12), beyond that the rounding of SS and the limits shows first.
// TestPublicCases, TestTolerance, TestSweepSpread, TestLognormalLimits.
func outsideOdds(p *Process, fraction float64) Odds {
	if !(fraction > 0) || fraction >= 1 {
		return certain(fraction >= 1)
	}
	c := newSpreadCurve(p)
	if o, ok := c.degenerate(p); ok {
		return o
	}
	c.fraction, c.logFraction, c.logInside = fraction, log(fraction), log1p(-fraction)
	c.v = normalQuantile(fraction, 1-fraction)
	c.hazard = normalDensity(c.v) / fraction
	s := math.Sqrt(c.law.a / c.kappa)
	if !c.two() {
		return c.odds(s*math.Min(c.upper, c.lower) < c.v)
	}
	if c.s0 = normalCentre(0.5 * (1 - fraction)); fraction < 0.6 {
		c.s0 = normalQuantile(0.5*fraction, 1-float64(0.5*fraction))
	}
	return c.odds(normalTail(s*c.upper)+normalTail(s*c.lower) >= fraction)
}

// capabilityOdds is the odds of min((U-mu)/(3 sigma), (mu-L)/(3 sigma)) > c for any c: a plain
// integral over log sigma for one limit or c <= 0, else spreadCurve. TestPublicCases, TestSweepSpread,
// TestSpreadProperties.
func capabilityOdds(p *Process, c float64) Odds {
	if math.IsInf(c, 0) {
		return certain(c < 0)
	}
	k := newSpreadCurve(p)
	if o, ok := k.degenerate(p); ok {
		return o
	}
	k.v = 3 * c
	if k.two() && c > 0 {
		k.s0 = k.v
	}
	s := math.Sqrt(k.law.a / k.kappa)
	return k.odds(s*math.Min(k.upper, k.lower) < k.v)
}

// degenerate answers where there is no limit, or no spread: then the mean is known too, and is inside
// or not.
func (c *spreadCurve) degenerate(p *Process) (Odds, bool) {
	if math.IsInf(c.upper, 1) && math.IsInf(c.lower, 1) {
		return certain(true), true
	}
	if math.IsInf(c.upper, -1) || math.IsInf(c.lower, -1) {
		return certain(false), true
	}
	if p.SS > 0 {
		return Odds{}, false
	}
	return certain(c.upper > 0 && c.lower > 0), true
}
