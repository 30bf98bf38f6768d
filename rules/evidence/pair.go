package evidence

import "math"

// A span is the stretch of x on which both factors of an integral over a pair are at work: x in
// (lo, hi) with z = z(lo) + slope (x-lo) in the other law's support. It is kept by distances
// from its ends, all sums of positive numbers, so that neither 0 nor 1 costs a digit on
// either variable. An infinite width stands for (lo, infinity), for gamma laws.
type span struct {
	lo, width float64
	x0, q1    float64 // x at lo; 1-x at hi
	z0, w1    float64 // the smaller of z at the two ends; the smaller of 1-z at the two ends
	slope     float64 // dz/dx
	rateX     float64 // what turns x into the density's own variable; 1 for Beta
	rateZ     float64
	beta      bool
}

// at is x, 1-x, z, 1-z at the coordinate u = log((x-lo)/(hi-x)), or log(x-lo) on an infinite span,
// and log dx/du.
func (s *span) at(u float64) (x, q, z, w, logRate float64) {
	if math.IsInf(s.width, 1) {
		p := math.Exp(u)
		return s.x0 + p, 0, s.z0 + float64(s.slope*p), 0, u
	}
	// The distances from lo and hi.
	e := math.Exp(-math.Abs(u))
	near := s.width * e / (1 + e)
	far := s.width / (1 + e)
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
	return x, q, z, w, math.Log(p * r / s.width)
}

// coordinate is u at x, kept off the ends.
func (s *span) coordinate(x float64) float64 {
	p := x - s.lo
	if math.IsInf(s.width, 1) {
		return math.Log(math.Max(p, 1e-3*x+1e-300))
	}
	t := math.Min(math.Max(p/s.width, 1e-6), 1-1e-6)
	return math.Log(t / (1 - t))
}

// logDensityTimesTail is the logarithm of f_X(x) P(Z > z) (or < z) dx/du.
func (g *integrand) logDensityTimesTail(u float64) float64 {
	s := &g.span
	x, q, z, w, logRate := s.at(u)
	if s.beta {
		logRate -= math.Log(x * q)
	} else {
		logRate -= math.Log(x)
	}
	below, above := g.other.logTails(z*s.rateZ, w)
	if g.above {
		below = above
	}
	return g.density.logDensity(x*s.rateX, q) + logRate + below
}

// A pair is X > slope Z + offset or its like to be weighed: the law of x, of z, and the line
// z = slope x + offset between them; claimAbove tells whether the claim is Z > that line.
type pair struct {
	x, z          *law
	rateX, rateZ  float64
	slope, offset float64
	top           float64 // of both supports: 1 or infinity
	claimAbove    bool
}

// odds weighs P(Z > slope X + offset) (or <) by the side that a normal guess says is the rarer, and by
// the other side too where the guess was wrong.
func (p *pair) odds(claimRare bool) Odds {
	if claimRare {
		return p.weigh(p.claimAbove)
	}
	return p.weigh(!p.claimAbove).against()
}

func (p *pair) weigh(above bool) Odds {
	o := oddsOf(p.logProbability(above))
	if o.LogFor > -0.5 {
		o.LogAgainst = math.Min(p.logProbability(!above), 0)
	}
	return o
}

// logProbability is log P(Z > line(X)) or log P(Z < line(X)): the stretch of X on which the line lies
// in Z's support by the integral, what is beyond it where the tail is certain in closed form.
func (p *pair) logProbability(above bool) float64 {
	g := integrand{kind: densityTimesTail, density: p.x, other: p.z, above: above}
	s := &g.span
	s.rateX, s.rateZ, s.slope, s.beta = p.rateX, p.rateZ, p.slope, !p.x.gamma
	lo, hi := 0.0, p.top
	// Where the line crosses 0 and, for Beta laws, 1.
	zero, one := -p.offset/p.slope, (1-p.offset)/p.slope
	first, last := zero, one
	if p.slope < 0 {
		first, last = one, zero
	}
	if p.x.gamma && p.slope > 0 {
		last = math.Inf(1)
	} else if p.x.gamma {
		first = math.Inf(-1)
	}
	// Left of first the line is below the support for a rising line, above it for a falling one.
	outer := math.Inf(-1)
	certainLeft := (p.slope > 0) == above
	if first > lo {
		if certainLeft {
			outer = p.logX(math.Min(first, hi), true)
		}
	}
	if last < hi {
		if !certainLeft {
			outer = logSum(outer, p.logX(math.Max(last, lo), false))
		}
	}
	if first >= hi || last <= lo {
		return outer
	}
	p.lay(s, math.Max(lo, first), math.Min(hi, last), first > lo, last < hi)
	mean := p.x.a / p.rateX
	if s.beta {
		mean = p.x.a / p.x.n
	}
	u := s.coordinate(mean)
	return logSum(outer, g.logIntegral(u, p.width(s, u)))
}

// width is about the standard deviation of X in the coordinate u, at most 1.
func (p *pair) width(s *span, u float64) float64 {
	x, q, _, _, logRate := s.at(u)
	d := x / math.Sqrt(p.x.a)
	if s.beta {
		d = math.Sqrt(x * q / (p.x.n + 1))
	}
	return math.Min(1, d*math.Exp(-logRate))
}

// lay fills in the span (lo, hi); cutLo and cutHi tell that the end is where the line leaves Z's support.
func (p *pair) lay(s *span, lo, hi float64, cutLo, cutHi bool) {
	s.lo, s.width = lo, hi-lo
	s.x0, s.q1 = lo, 1-hi
	zAt := func(x float64) float64 { return math.FMA(p.slope, x, p.offset) }
	zLo, zHi := math.Max(zAt(lo), 0), math.Max(zAt(hi), 0)
	wLo, wHi := math.Max(1-zAt(lo), 0), math.Max(1-zAt(hi), 0)
	if lo == 0 {
		zLo, wLo = p.offset, 1-p.offset
	}
	if hi == 1 && s.beta {
		zHi = p.slope + p.offset
		wHi = (1 - p.slope) - p.offset
	}
	if p.slope > 0 {
		s.z0, s.w1 = zLo, wHi
		if cutLo {
			s.z0 = 0
		}
		if cutHi {
			s.w1 = 0
		}
		return
	}
	s.z0, s.w1 = zHi, wLo
	if cutHi {
		s.z0 = 0
	}
	if cutLo {
		s.w1 = 0
	}
}

// logX is log P(X < x) or log P(X > x).
func (p *pair) logX(x float64, isBelow bool) float64 {
	if x <= 0 || x >= p.top {
		if isBelow == (x > 0) {
			return 0
		}
		return math.Inf(-1)
	}
	q := 1 - x
	below, above := p.x.logTailsLow(x*p.rateX, q, (1-x)-q)
	if isBelow {
		return below
	}
	return above
}
