package evidence

import "math"

// largestGroup is the most processes a claim of the largest or smallest may have.
const largestGroup = 64

// A contest is X_which against the largest of the others: the event X_which - max > tolerance. With
// smallest it is the event X_which - min < tolerance instead.
//
//	P(event) = int f_w(x) prod_j F_j(x - tolerance) dx,
//	P(contrary) = int F_w(z + tolerance) sum_j f_j(z) prod_{i != w,j} F_i(z) dz,
//
// F the tails below (above for smallest), each integrand positive and with one peak.
type contest struct {
	laws      [largestGroup]law
	rates     [largestGroup]float64
	n, which  int
	tolerance float64
	top       float64 // of the support: 1 or infinity
	smallest  bool
	span      span // of x for the event, of z for the contrary
}

// odds weighs the event, or its contrary where the event is not the rarer.
func (c *contest) odds() Odds {
	// A difference of two such quantities is between -top and top.
	if math.Abs(c.tolerance) >= c.top {
		return certain((c.tolerance < 0) != c.smallest)
	}
	logFor := math.Min(c.logEvent(), 0)
	if logFor < -0.5 {
		return oddsOf(logFor)
	}
	return oddsOf(c.logContrary()).against()
}

// logEvent is log P(event). Where x-tolerance is beyond the support the product is 0 or 1.
func (c *contest) logEvent() float64 {
	lo, hi := math.Max(0, c.tolerance), math.Min(c.top, c.top+c.tolerance)
	outer := math.Inf(-1)
	if c.smallest {
		// All the others are above x-tolerance for certain where that is below 0.
		if c.tolerance > 0 {
			outer, _ = c.logTails(c.which, place{c.tolerance, 1 - c.tolerance})
		}
	} else if c.tolerance < 0 && c.top == 1 {
		_, outer = c.logTails(c.which, place{hi, -c.tolerance})
	}
	if lo >= hi {
		return outer
	}
	c.lay(lo, hi, -c.tolerance)
	g := integrand{kind: winner, many: c}
	g.leftRate, g.rightRate = c.falls()
	return logSum(outer, g.logIntegral(c.span.coordinate(c.mean(c.which)), c.step()))
}

// logContrary is log P(contrary).
func (c *contest) logContrary() float64 {
	lo, hi := math.Max(0, -c.tolerance), math.Min(c.top, c.top-c.tolerance)
	outer := math.Inf(-1)
	if c.smallest {
		// X_which is above z+tolerance for certain where that is below 0: the smallest is there.
		if lo > 0 {
			outer = c.logSomeBeyond(place{lo, 1 - lo})
		}
	} else if c.tolerance > 0 && c.top == 1 {
		outer = c.logSomeBeyond(place{hi, c.tolerance})
	}
	if lo >= hi {
		return outer
	}
	c.lay(lo, hi, c.tolerance)
	g := integrand{kind: challengers, many: c}
	g.leftRate, g.rightRate = c.falls()
	mean := place{-1, 0}
	for j := range c.n {
		if j != c.which {
			m := c.mean(j)
			if mean.x < 0 || (m.x > mean.x) != c.smallest {
				mean = m
			}
		}
	}
	return logSum(outer, g.logIntegral(c.span.coordinate(mean), c.step()))
}

func (c *contest) mean(j int) place {
	l := &c.laws[j]
	if l.gamma {
		return place{l.a / c.rates[j], 0}
	}
	return place{l.a / l.n, l.b / l.n}
}

// logSomeBeyond is the logarithm of the probability that some other is on the far side of a place inside the
// support.
func (c *contest) logSomeBeyond(at place) float64 {
	none := 0.0
	for j := range c.n {
		if j == c.which {
			continue
		}
		below, above := c.logTails(j, at)
		if c.smallest {
			below = above
		}
		none += below
	}
	return log1mexp(none)
}

// lay prepares the span of x where both x and z = x + shift are in the support; the ends' distances
// are the shift itself.
func (c *contest) lay(lo, hi, shift float64) {
	forth, back := math.Max(shift, 0), math.Max(-shift, 0)
	c.span = span{lo: lo, width: hi - lo, loQ: 1 - lo, x0: back, q1: forth, z0: forth, w1: back,
		slope: 1, beta: !c.laws[0].gamma}
}

// step is the width in which the peak is sought: the narrowest law's, in logits or logarithms.
func (c *contest) step() float64 {
	s := 1.0
	for i := range c.n {
		l := &c.laws[i]
		s = math.Min(s, math.Sqrt(1/l.a+1/l.b))
	}
	return s
}

// falls is the least rate at which the integrand falls off at the span's ends.
func (c *contest) falls() (left, right float64) {
	left, right = 1, 1
	if c.span.lo == 0 {
		left = math.Inf(1)
		for i := range c.n {
			left = math.Min(left, c.laws[i].a)
		}
	}
	if c.span.q1 == 0 {
		right = math.Inf(1)
		for i := range c.n {
			right = math.Min(right, c.laws[i].b)
		}
	}
	return left, right
}

func (c *contest) logTails(j int, at place) (below, above float64) {
	return c.laws[j].logTails(at.x*c.rates[j], at.q)
}

// logWinner is the logarithm of f_w(x) prod_j F_j(z) dx/du.
func (c *contest) logWinner(u float64) float64 {
	x, q, z, w, rate := c.span.at(u)
	s := c.laws[c.which].logDensity(x*c.rates[c.which], q) + log(rate)
	for j := range c.n {
		if j != c.which {
			s += c.logTail(j, z, w)
		}
	}
	return s
}

func (c *contest) logTail(j int, x, q float64) float64 {
	return c.laws[j].logTail(x*c.rates[j], q, c.smallest)
}

// logChallengers is the logarithm of F_w(x) sum_j f_j(z) prod F_i(z) dz/du; the span's x is z here.
func (c *contest) logChallengers(u float64) float64 {
	z, q, x, w, rate := c.span.at(u)
	product := c.logTail(c.which, x, w) + log(rate)
	sum := math.Inf(-1)
	for j := range c.n {
		if j == c.which {
			continue
		}
		tail := c.logTail(j, z, q)
		if math.IsInf(tail, -1) {
			return tail
		}
		product += tail
		sum = logSum(sum, c.laws[j].logDensity(z*c.rates[j], q)-tail)
	}
	return product + sum
}
