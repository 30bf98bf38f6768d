package evidence

import "math"

// An integrand is a positive function of the whole real line, by its logarithm, that falls off
// at least exponentially on both sides and has one peak. The kinds share one struct, so that
// nothing is handed through an interface and nothing is allocated.
type integrand struct {
	kind integrandKind

	// Two processes: the density of one law times a tail of another.
	density, other *law
	span           span
	above          bool // the other's tail

	// Several processes.
	many *contest

	// Spread.
	spread *spreadCurve

	// How the integrand falls off: at the least as exp(leftRate u) and exp(-rightRate u).
	leftRate, rightRate float64
	// Outside of these it falls off just so.
	leftBend, rightBend float64

	// Where there are two peaks.
	twoPeaks bool    // there is a second peak,
	through  float64 // about here, that the sum has to reach
}

type integrandKind int

const (
	densityTimesTail integrandKind = iota
	winner
	challengers
	inside
	beyond
)

// at is the integrand as factor e^logarithm: what would only be put into the logarithm to be taken
// out again stays outside.
func (g *integrand) at(u float64) (logarithm, factor float64) {
	if math.Abs(u) > farthest && g.spread == nil {
		return math.Inf(-1), 1
	}
	switch g.kind {
	case densityTimesTail:
		return g.densityTimesTail(u)
	case winner:
		return g.many.logWinner(u), 1
	case challengers:
		return g.many.logChallengers(u), 1
	}
	return g.spread.at(g.kind, u)
}

// logAt is the logarithm of the integrand.
func (g *integrand) logAt(u float64) float64 {
	l, f := g.at(u)
	if f == 1 {
		return l
	}
	return l + log(f)
}

// logIntegral is the logarithm of the integral over the real line, by the trapezoidal rule: for a
// function analytic in a strip it converges exponentially (Trefethen & Weideman, The
// Exponentially Convergent Trapezoidal Rule, SIAM Review 2014). The peak is sought from start in
// steps of width; the first step of the rule comes from the curvature at the peak and is
// halved until the sum stands. Halving squares the relative error at least, so the sums are
// within 1e-13 once two of them agree to agreement. TestSweepPairs, TestSweepSpread.
func (g *integrand) logIntegral(start, width float64) float64 {
	peak, top, scale := g.peak(start, width)
	if math.IsInf(top, -1) || math.IsNaN(top) {
		return top
	}
	m := mapping{at: peak, top: top}
	if g.leftRate < slowRate {
		m.left = 1
	}
	if g.rightRate < slowRate {
		m.right = 1
	}
	h := 0.8 * scale / (1 + m.left + m.right)
	sum, left, right := g.sweep(&m, h)
	// Where the logarithms are large, their rounding shows.
	enough := g.agreement(&m) + float64(1e-15*math.Abs(top))
	for range maxHalvings {
		odd := 0.0
		for k := -left; k < right; k++ {
			odd += g.term(&m, float64((k+0.5)*h))
		}
		settled := math.Abs(odd-sum) <= enough*(odd+sum)
		sum += odd
		h *= 0.5
		left, right = 2*left, 2*right
		if settled {
			break
		}
	}
	return log(h*sum) + top
}

const (
	maxHalvings = 10
	negligible  = 1e-18
	slowRate    = 4
	// Beyond farthest a place is not apart from the end of its span in float64.
	farthest = 700
)

// agreement is the relative difference of two sums at which the second is taken. Of a pair the narrower
// density is integrated, and of two sides the rarer, so nothing in the integrand is narrower than its
// peak and the error of the second sum is the square of the difference. Two things have to show in the
// difference itself: a narrow step of some law of a contest, and a bend far out where the mapping has
// made the steps long.
func (g *integrand) agreement(m *mapping) float64 {
	const near = 3
	if g.many != nil || m.left > 0 && m.at-g.leftBend > near || m.right > 0 && g.rightBend-m.at > near {
		return 1e-12
	}
	if g.spread != nil {
		return 1e-9
	}
	return 2e-8
}

// A mapping is u = at + t + left (1 - e^-t) + right (e^t - 1): where the integrand falls off slowly, the sum
// runs out double-exponentially instead (Takahasi & Mori, 1974).
type mapping struct{ at, top, left, right float64 }

// term is the integrand at t over e^top, du/dt included.
func (g *integrand) term(m *mapping, t float64) float64 {
	u, rate := t, 1.0
	if m.left != 0 {
		e := exp(-t)
		u += 1 - e
		rate += e
	}
	if m.right != 0 {
		e := exp(t)
		u += e - 1
		rate += e
	}
	l, f := g.at(m.at + u)
	if l -= m.top; l < -800 {
		return 0
	}
	return rate * f * exp(l)
}

// sweep sums the terms at k h, outwards on both sides until they are negligible.
func (g *integrand) sweep(m *mapping, h float64) (sum, left, right float64) {
	sum = g.term(m, 0)
	for _, sign := range [2]float64{-1, 1} {
		k := 1.0
		for before := math.Inf(1); k < 4000; k++ {
			term := g.term(m, sign*float64(k*h))
			sum += term
			if term <= negligible*sum && term <= before && !(g.twoPeaks && (g.through-m.at)*sign > float64(k*h)) {
				break
			}
			before = term
		}
		if sign < 0 {
			left = k
		} else {
			right = k
		}
	}
	return sum, left, right
}

// peak is where the integrand is largest, nearly; the logarithm there; and the scale of its
// width, 1/sqrt(-curvature), at most widest.
func (g *integrand) peak(start, width float64) (at, top, scale float64) {
	const widest = 1.5
	x, fx := start, g.logAt(start)
	// Uphill in growing steps until the peak is between a and b.
	step := width
	a, fa := x-step, g.logAt(x-step)
	b, fb := x+step, g.logAt(x+step)
	for i := 0; i < 200 && !(fx >= fa && fx >= fb); i++ {
		step = float64(1.7 * step)
		if fb > fa {
			a, fa, x, fx = x, fx, b, fb
			b = x + step
			fb = g.logAt(b)
		} else {
			b, fb, x, fx = x, fx, a, fa
			a = x - step
			fa = g.logAt(a)
		}
	}
	// Halve the wider side until the integrand has not fallen by more than e^-2 at either end, nor rises
	// between (two points equally far down the two flanks look flat too).
	for i, flat := 0, false; i < 80 && !flat; i++ {
		left := x-a > b-x
		low, high := fx-fa > 2, fx-fb > 2
		if low != high {
			left = low
		}
		next := 0.5 * (x + b)
		if left {
			next = 0.5 * (x + a)
		}
		fn := g.logAt(next)
		flat = !low && !high && fn <= fx
		switch {
		case fn > fx && left:
			b, fb, x, fx = x, fx, next, fn
		case fn > fx:
			a, fa, x, fx = x, fx, next, fn
		case left:
			a, fa = next, fn
		default:
			b, fb = next, fn
		}
	}
	curvature := 2 * ((fb-fx)/(b-x) - (fx-fa)/(x-a)) / (b - a)
	return x, fx, math.Min(widest, 1/math.Sqrt(math.Max(-curvature, 1e-300)))
}
