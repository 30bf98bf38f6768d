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
}

type integrandKind int

const (
	densityTimesTail integrandKind = iota
	winner
	challengers
	inside
	beyond
)

// logAt is the logarithm of the integrand.
func (g *integrand) logAt(u float64) float64 {
	switch g.kind {
	case densityTimesTail:
		return g.logDensityTimesTail(u)
	case winner:
		return g.many.logWinner(u)
	case challengers:
		return g.many.logChallengers(u)
	}
	return g.spread.logAt(g.kind, u)
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
	h := scale
	sum, left, right := g.sweep(peak, top, h)
	for range maxHalvings {
		odd := 0.0
		for k := -left; k < right; k++ {
			odd += math.Exp(g.logAt(peak+float64((k+0.5)*h)) - top)
		}
		settled := math.Abs(odd-sum) <= agreement*(odd+sum)
		sum += odd
		h *= 0.5
		left, right = 2*left, 2*right
		if settled {
			break
		}
	}
	return math.Log(h*sum) + top
}

const (
	agreement   = 1e-8
	maxHalvings = 12
	negligible  = 1e-18
)

// sweep sums the integrand over e^top at peak + k h, outwards on both sides until it is negligible.
func (g *integrand) sweep(peak, top, h float64) (sum, left, right float64) {
	sum = math.Exp(g.logAt(peak) - top)
	for _, sign := range [2]float64{-1, 1} {
		k := 1.0
		for before := math.Inf(1); k < 4000; k++ {
			term := math.Exp(g.logAt(peak+sign*float64(k*h)) - top)
			sum += term
			if term <= negligible*sum && term <= before {
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
		step *= 1.7
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
	// Halve the wider side until the integrand has not fallen by more than e^-2 at either end.
	for i := 0; i < 60 && (fx-fa > 2 || fx-fb > 2); i++ {
		left := x-a > b-x
		if fx-fa <= 2 {
			left = false
		} else if fx-fb <= 2 {
			left = true
		}
		next := 0.5 * (x + b)
		if left {
			next = 0.5 * (x + a)
		}
		fn := g.logAt(next)
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
