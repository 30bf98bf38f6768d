package evidence

import "math"

// scaled is a mean's posterior: centre + centreLow + scale t_nu.
type scaled struct {
	centre, centreLow, scale, nu float64
}

// meanOf is what is believed of the mean (of logarithms, for lognormal).
func meanOf(p *Process) scaled {
	return scaled{p.M, p.MLow, math.Sqrt(p.SS / p.Nu / p.K), p.Nu}
}

// differenceTail is log P(s1 T1 + s2 T2 > d) for d >= 0, T_i independent Student variables (the
// Behrens–Fisher problem). Given B ~ Beta(nu1/2, nu2/2) the sum is Student with N = nu1 + nu2
// degrees of freedom and squared scale c/N, c = s1^2 nu1/B + s2^2 nu2/(1-B) (Ruben 1960), so
//
//	P = E_B[ S_N(d / sqrt(c/N)) ],
//
// the integral of a positive function, taken by the trapezoid rule in u = logit B, which
// converges exponentially. Relative accuracy in the tail is that of S_N. TestPublicCases,
// TestBehrensFisherTable, TestSweepMeans.
func differenceTail(one, two scaled, d float64) float64 {
	m := newMixture(one, two)
	return m.average(d, 0, 0)
}

// differenceWindow is log P(lo < s1 T1 + s2 T2 < hi), width being hi - lo: the same average of windows.
func differenceWindow(one, two scaled, lo, hi, width float64) float64 {
	m := newMixture(one, two)
	return m.average(lo, hi, width)
}

// mixture is the law of B, written for nu2 <= nu1.
type mixture struct {
	s1, s2, nu1, nu2, n float64
}

func newMixture(one, two scaled) mixture {
	if one.nu < two.nu {
		one, two = two, one
	}
	return mixture{one.scale, two.scale, one.nu, two.nu, one.nu + two.nu}
}

// average is the logarithm of the mean over B of P(sum > lo) or, with a width, of
// P(lo < sum < hi), under the Student law that the sum has given B. It goes outwards from the
// mode of the weight until what is left, a probability being at most 1, is below half an ulp of
// the sum.
func (m *mixture) average(lo, hi, width float64) float64 {
	h := 1 / math.Sqrt(1/(0.35*0.35)+1/(0.62*0.62*(2/m.nu1+2/m.nu2)))
	t := newStudent(m.n)
	var sum growing
	weights := 0.0
	for _, side := range [2]float64{1, -1} {
		for i := 0; i < 100000; i++ {
			if i == 0 && side < 0 {
				continue
			}
			du := side * h * float64(i)
			logW := m.logWeight(du)
			c := float64(m.s1*m.s1*m.nu1)*m.perB(du) + float64(m.s2*m.s2*m.nu2)*m.perRest(du)
			root := math.Sqrt(c / m.n)
			l, factor := 0.0, 1.0
			if width > 0 {
				l = t.logWindow(lo/root, hi/root, width/root)
			} else {
				l, factor = t.tail(lo / root)
			}
			sum.add(logW+l, factor)
			weights += math.Exp(logW)
			if logW < -45 && sum.beyond(logW) {
				break
			}
		}
	}
	return sum.log() - math.Log(weights)
}

// growing is a sum of positive terms factor e^logarithm of any size, kept as a number times
// e^from.
type growing struct{ from, sum float64 }

func (g *growing) add(logarithm, factor float64) {
	if math.IsInf(logarithm, -1) || factor == 0 {
		return
	}
	if g.sum == 0 {
		g.from = logarithm
	}
	if logarithm-g.from > 300 {
		g.sum *= math.Exp(g.from - logarithm)
		g.from = logarithm
	}
	g.sum += float64(factor * math.Exp(logarithm-g.from))
}

// beyond says whether a term of that logarithm is lost in the rounding of the sum.
func (g *growing) beyond(logarithm float64) bool {
	return g.sum > 0 && math.Exp(logarithm-g.from) < 2e-16*g.sum
}

func (g *growing) log() float64 { return g.from + math.Log(g.sum) }

// logWeight is the log density of u at du from the mode, less that at the mode.
func (m *mixture) logWeight(du float64) float64 {
	q := m.nu2 / m.n
	if du < -600 {
		return math.Inf(-1)
	}
	return -float64(m.nu2/2*du) - float64(m.n/2*math.Log1p(float64(q*math.Expm1(-du))))
}

// perB is 1/B, and perRest 1/(1-B), at du from the mode.
func (m *mixture) perB(du float64) float64    { return 1 + float64(m.nu2/m.nu1*math.Exp(-du)) }
func (m *mixture) perRest(du float64) float64 { return 1 + float64(m.nu1/m.nu2*math.Exp(du)) }

// meansAt is the combination of at most two means with weights, standardised: the second has
// scale 0 where there is one alone. The centre is formed in pairs, so that means of 1e9 with
// spreads of 1e-3 lose nothing.
type meansAt struct {
	one, two          scaled
	centre, centreLow float64
}

func combine(one scaled, w1 float64, two *scaled, w2 float64) meansAt {
	hi, lo := times(one.centre, one.centreLow, w1)
	c := meansAt{one: scaled{scale: math.Abs(w1) * one.scale, nu: one.nu}, centre: hi, centreLow: lo}
	if two != nil {
		h2, l2 := times(two.centre, two.centreLow, w2)
		c.two = scaled{scale: math.Abs(w2) * two.scale, nu: two.nu}
		c.centre, c.centreLow = addPairs(hi, lo, h2, l2)
	}
	return c
}

// times multiplies a pair by a number.
func times(hi, lo, by float64) (float64, float64) {
	p := float64(hi * by)
	return p, math.FMA(hi, by, -p) + float64(lo*by)
}

// addPairs adds two pairs.
func addPairs(a, aLow, b, bLow float64) (hi, lo float64) {
	s := a + b
	t := s - a
	e := (a - (s - t)) + (b - t) + (aLow + bLow)
	hi = s + e
	return hi, e - (hi - s)
}

// beyond is x minus the centre.
func (c *meansAt) beyond(x float64) float64 {
	hi, lo := addPairs(x, 0, -c.centre, -c.centreLow)
	return hi + lo
}

// above is the odds of the combination lying above x.
func (c *meansAt) above(x float64) Odds {
	d := c.beyond(x)
	if d < 0 {
		return c.tail(-d).against()
	}
	return c.tail(d)
}

func (c *meansAt) tail(d float64) Odds {
	switch {
	case c.two.scale == 0:
		return one(c.one, d)
	case c.one.scale == 0:
		return one(c.two, d)
	}
	return oddsOf(differenceTail(c.one, c.two, d))
}

// one is the odds of one scaled Student variable lying above d >= 0.
func one(s scaled, d float64) Odds {
	t := newStudent(s.nu)
	return oddsOf(math.Min(t.logTail(d/s.scale), 0))
}

// oneWindow is the logarithm of its probability to lie between lo and hi, width apart.
func oneWindow(s scaled, lo, hi, width float64) float64 {
	t := newStudent(s.nu)
	return t.logWindow(lo/s.scale, hi/s.scale, width/s.scale)
}

// within is the odds of the combination lying between lo and hi, each side integrated for
// itself: the contrary is the sum of the two tails.
func (c *meansAt) within(lo, hi float64) Odds {
	contrary := logSum(c.above(lo).LogAgainst, c.above(hi).LogFor)
	if contrary < -math.Ln2 {
		return oddsOf(math.Min(contrary, 0)).against()
	}
	a, b, width := c.beyond(lo), c.beyond(hi), hi-lo
	var inside float64
	switch {
	case c.two.scale == 0:
		inside = oneWindow(c.one, a, b, width)
	case c.one.scale == 0:
		inside = oneWindow(c.two, a, b, width)
	default:
		inside = differenceWindow(c.one, c.two, a, b, width)
	}
	return Odds{LogFor: math.Min(inside, 0), LogAgainst: math.Min(contrary, 0)}
}
