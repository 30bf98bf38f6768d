package evidence

import "math"

// A span is the stretch of x on which both factors of an integral over a pair are at work: x in
// (lo, hi) with z = z(lo) + slope (x-lo) in the other law's support. It is kept by distances
// from its ends, all sums of positive numbers, so that neither 0 nor 1 costs a digit on
// either variable. An infinite width stands for (lo, infinity), for gamma laws.
type span struct {
	lo, width float64
	loQ       float64 // 1-lo
	x0, q1    float64 // x at lo; 1-x at hi
	z0, w1    float64 // the smaller of z at the two ends; the smaller of 1-z at the two ends
	slope     float64 // dz/dx
	rateX     float64 // what turns x into the density's own variable; 1 for Beta
	rateZ     float64
	beta      bool
}

// at is x, 1-x, z, 1-z at the coordinate u = log((x-lo)/(hi-x)), or log(x-lo) on an infinite span,
// and du/dx inverted over what turns a density of logit x (log x) into one of x.
func (s *span) at(u float64) (x, q, z, w, rate float64) {
	if math.IsInf(s.width, 1) {
		p := exp(u)
		x = s.x0 + p
		return x, 0, s.z0 + float64(s.slope*p), 0, p / x
	}
	// The distances from lo and hi.
	e := exp(-math.Abs(u))
	far := s.width / (1 + e)
	near := far * e
	p, r := far, near
	if u < 0 {
		p, r = near, far
	}
	x, q = s.x0+p, s.q1+r
	if s.slope > 0 {
		z, w = s.z0+float64(s.slope*p), s.w1+float64(s.slope*r)
	} else {
		z, w = s.z0-float64(s.slope*r), s.w1-float64(s.slope*p)
	}
	rate = p / x * (r / s.width)
	if s.beta {
		rate /= q
	}
	return x, q, z, w, rate
}

// coordinate is u at a place, kept off the ends.
func (s *span) coordinate(at place) float64 {
	p := at.x - s.lo
	if math.IsInf(s.width, 1) {
		return log(math.Max(p, float64(1e-3*at.x)+1e-300))
	}
	if s.beta && s.lo > 0.5 {
		p = s.loQ - at.q
	}
	t := p / s.width
	if t > 0 && t < 0.5 {
		return log(t)
	}
	if t >= 0.5 && t < 1 {
		r := s.width - p
		if s.beta && s.lo <= 0.5 {
			r = at.q - s.q1
		}
		if r > 0 {
			return -log(r / s.width)
		}
	}
	return math.Copysign(14, t-0.5)
}

// densityTimesTail is f_X(x) P(Z > z) (or < z) dx/du.
func (g *integrand) densityTimesTail(u float64) (logarithm, factor float64) {
	s := &g.span
	x, q, z, w, rate := s.at(u)
	l, f := g.other.tailAt(z*s.rateZ, w, g.above)
	return g.density.logDensity(x*s.rateX, q) + l, f * rate
}

// A pair is the law of x, the law of z and the line between them: z = slope x + offset, or with inverse
// z = (x - offset)/slope, so that the claim's own numbers are used either way and not rounded
// quotients. claimAbove tells whether the claim is Z > that line.
type pair struct {
	x, z          *law
	rateX, rateZ  float64
	slope, offset float64
	inverse       bool
	top           float64 // of both supports: 1 or infinity
	claimAbove    bool
}

// place is a point of (0, 1) by its distances from both ends.
type place struct{ x, q float64 }

// sum3 is a + b + c with one rounding in all but rare cases.
func sum3(a, b, c float64) float64 {
	s := a + b
	t := s - a
	low := (a - (s - t)) + (b - t)
	return (s + c) + low
}

// crossings is where the line meets 0 and 1.
func (p *pair) crossings() (zero, one place) {
	s, o := p.slope, p.offset
	if p.inverse {
		return place{o, 1 - o}, place{s + o, sum3(1, -s, -o)}
	}
	return place{-o / s, (s + o) / s}, place{(1 - o) / s, sum3(s, -1, o) / s}
}

// ends is the line at 0 and at 1.
func (p *pair) ends() (at0, at1 place) {
	s, o := p.slope, p.offset
	if p.inverse {
		return place{-o / s, (s + o) / s}, place{(1 - o) / s, sum3(s, -1, o) / s}
	}
	return place{o, 1 - o}, place{s + o, sum3(1, -s, -o)}
}

// odds weighs P(Z > line(X)) (or <) by the side that a normal guess says is the rarer, and by the other side
// where the guess was wrong.
func (p *pair) odds(claimRare bool) Odds {
	if claimRare {
		return p.weigh(p.claimAbove)
	}
	return p.weigh(!p.claimAbove).against()
}

func (p *pair) weigh(above bool) Odds {
	o := oddsOf(p.logProbability(above))
	if o.LogFor > -0.5 {
		return oddsOf(p.logProbability(!above)).against()
	}
	return o
}

// logProbability is log P(Z > line(X)) or log P(Z < line(X)): the stretch of X on which the line lies
// in Z's support by the integral, what is beyond it, where the tail is certain, in closed form.
func (p *pair) logProbability(above bool) float64 {
	g := integrand{kind: densityTimesTail, density: p.x, other: p.z, above: above}
	rising := p.slope > 0
	first, last := p.crossings()
	if !rising {
		first, last = last, first
	}
	if p.top > 1 && rising {
		last.x = math.Inf(1)
	} else if p.top > 1 {
		first.x = math.Inf(-1)
	}
	// Left of first a rising line is below Z's support, a falling one above it.
	outer := math.Inf(-1)
	if first.x > 0 && rising == above {
		outer = p.logX(first, true)
	}
	if p.short(last) && rising != above {
		outer = logSum(outer, p.logX(last, false))
	}
	if !p.short(first) || last.x <= 0 {
		return outer
	}
	p.lay(&g.span, first, last)
	mean := place{p.x.a / p.rateX, 0}
	if p.top == 1 {
		mean = place{p.x.a / p.x.n, p.x.b / p.x.n}
	}
	p.rates(&g, above)
	u := g.span.coordinate(mean)
	return logSum(outer, g.logIntegral(u, p.width(&g.span, u)))
}

// rates is how fast the integrand falls off at the span's ends: the density as x^a, or as the stretch itself
// where the end is not the support's; and the tail as z^a where it ends there in 0. And from where.
func (p *pair) rates(g *integrand, above bool) {
	s := &g.span
	g.leftRate, g.rightRate = 1, 1
	if s.lo == 0 {
		g.leftRate = p.x.a
	}
	if s.q1 == 0 {
		g.rightRate = p.x.b
	}
	if math.IsInf(s.width, 1) {
		g.rightRate = slowRate
	}
	zero, one := &g.leftRate, &g.rightRate
	if p.slope < 0 {
		zero, one = one, zero
	}
	if !above && s.z0 == 0 {
		*zero += p.z.a
	}
	if above && s.w1 == 0 {
		*one += p.z.b
	}
	// The other factor has its own end a little way beyond that of the span.
	left, right := math.Max(s.x0, s.z0/math.Abs(s.slope)), math.Max(s.q1, s.w1/math.Abs(s.slope))
	if s.slope < 0 {
		left, right = math.Max(s.x0, -s.w1/s.slope), math.Max(s.q1, -s.z0/s.slope)
	}
	g.leftBend, g.rightBend = math.Inf(1), math.Inf(-1)
	width := s.width
	if math.IsInf(width, 1) {
		width = 1
	}
	if left > 0 {
		g.leftBend = log(left / width)
	}
	if right > 0 {
		g.rightBend = -log(right / width)
	}
}

// short tells whether a place is short of the support's upper end.
func (p *pair) short(at place) bool {
	if p.top == 1 {
		return at.q > 0
	}
	return at.x < p.top
}

// width is about the standard deviation of X in the coordinate u, at most 1.
func (p *pair) width(s *span, u float64) float64 {
	x, q, _, _, rate := s.at(u)
	d := 1 / math.Sqrt(p.x.a)
	if s.beta {
		d = 1 / math.Sqrt(x*q*(p.x.n+1))
	}
	return math.Min(1, d/rate)
}

// lay fills in the span between the crossings first and last, or the support's ends where these are inside.
func (p *pair) lay(s *span, first, last place) {
	s.rateX, s.rateZ, s.beta = p.rateX, p.rateZ, p.top == 1
	s.slope = p.slope
	if p.inverse {
		s.slope = 1 / p.slope
	}
	at0, at1 := p.ends()
	lo, hi := place{0, 1}, place{p.top, 0}
	zLo, zHi := at0, at1
	rising := p.slope > 0
	edge := func(low bool) place {
		if low {
			return place{0, 1}
		}
		return place{1, 0}
	}
	if first.x > 0 {
		lo, zLo = first, edge(rising)
	}
	if p.short(last) {
		hi, zHi = last, edge(!rising)
	}
	s.lo, s.x0, s.q1 = lo.x, lo.x, hi.q
	s.width = hi.x - lo.x
	if s.beta && lo.x > 0.5 {
		s.width = lo.q - hi.q
	}
	s.loQ = lo.q
	if rising {
		s.z0, s.w1 = zLo.x, zHi.q
	} else {
		s.z0, s.w1 = zHi.x, zLo.q
	}
}

// logX is log P(X < x) or log P(X > x).
func (p *pair) logX(at place, isBelow bool) float64 {
	if at.x <= 0 || !p.short(at) {
		if isBelow == (at.x > 0) {
			return 0
		}
		return math.Inf(-1)
	}
	x, q, low := float64(at.x*p.rateX), at.q, 0.0
	if p.top == 1 {
		// The nearer end's distance is the exact one.
		if x < 0.5 {
			q = 1 - x
			low = (1 - q) - x
		} else {
			x = 1 - q
			low = -p.x.b / p.x.a * ((1 - x) - q)
		}
	}
	below, above := p.x.logTailsLow(x, q, low)
	if isBelow {
		return below
	}
	return above
}
