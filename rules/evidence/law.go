package evidence

import "math"

// A law is a Beta(a, b) or, with b infinite, a Gamma(a) of rate 1, prepared for many evaluations
// of its density and tails.
//
// With N = a+b, the density of Y = logit X (of log X for the gamma law) is
//
//	f(y) = sqrt(ab/(2 pi N)) exp(stirling(N)-stirling(a)-stirling(b)) exp(-D),
//	D = a r(Nx/a - 1) + b r(N(1-x)/b - 1),  r(t) = t - log(1+t),
//
// in which nothing large cancels (Loader, Fast and Accurate Computation of Binomial
// Probabilities, 2000). A tail is f times a ratio of Mills' kind, found by
//
//   - near the mean of a law with a and b at least smoothFrom: the substitution w^2/2 = D,
//     dy/dw = w/(Nx-a) = g(w), a power series (Temme, The Asymptotic Expansion of the
//     Incomplete Gamma Functions, 1979, and DiDonato & Morris, TOMS 708, 1992), integrated
//     by parts into one Mills' ratio and a polynomial;
//   - else on the low side of the smaller parameter the series of positive terms
//     sum (N)_n/(s+1)_n v^n / s (Abramowitz & Stegun 26.5.4), on the high side a continued
//     fraction (26.5.8 contracted as by DiDonato & Morris; for gamma 6.5.31);
//   - for a parameter below smallShape, whose high side is rare, an integral of the density.
//
// Valid for every a, b > 0; relative error below 1e-13 to a+b = 1e9 where log P > -700.
// TestLawTails.
type law struct {
	a, b, n  float64
	gamma    bool
	logScale float64 // log of f's factor before exp(-D)
	reach    float64 // |w| up to which the power series serves; 0 for none
	first    float64 // the factor of Mills' ratio
	rest     [lawTerms]float64
}

const (
	lawTerms   = 22
	smoothFrom = 30
	smallShape = 0.05
)

func betaLaw(a, b float64) law {
	l := law{a: a, b: b, n: a + b}
	l.logScale = stirling(l.n) - stirling(a) - stirling(b) - logRoot2Pi + float64(0.5*log(a/l.n*b))
	if a >= smoothFrom && b >= smoothFrom {
		l.expand(a/l.n*b, (b-a)/l.n, 1/l.n)
		l.reach = 0.7 * math.Sqrt(a/l.n*b)
	}
	return l
}

func gammaLaw(a float64) law {
	l := law{a: a, b: math.Inf(1), n: math.Inf(1), gamma: true}
	l.logScale = -stirling(a) - logRoot2Pi + float64(0.5*log(a))
	if a >= smoothFrom {
		l.expand(a, 1, 0)
		l.reach = 0.7 * math.Sqrt(a)
	}
	return l
}

// expand finds the series g(w) = dy/dw and integrates it by parts. With e = Nx-a, e e' =
// w (c0 + c1 e - c2 e^2), so the squares' coefficients E_k = (2/k)(c1 e_{k-2} - c2 E_{k-2}),
// E_2 = c0, and g = w/e. Then g = A + w B - B', B_{k-1} = g_k + (k+1) B_{k+1}, and
// int_w^inf e^{-t^2/2} g dt = e^{-w^2/2} (A mills(w) + B(w)).
func (l *law) expand(c0, c1, c2 float64) {
	const terms = lawTerms + 2
	var e, square, g [terms + 1]float64
	e[1] = math.Sqrt(c0)
	square[2] = c0
	for k := 3; k <= terms; k++ {
		square[k] = 2 / float64(k) * (float64(c1*e[k-2]) - float64(c2*square[k-2]))
		s := square[k]
		for i := 2; i <= k-2; i++ {
			s -= float64(e[i] * e[k-i])
		}
		e[k-1] = s / (2 * e[1])
	}
	g[0] = 1 / e[1]
	for k := 1; k < lawTerms; k++ {
		s := 0.0
		for i := 1; i <= k; i++ {
			s += float64(e[i+1] * g[k-i])
		}
		g[k] = -s / e[1]
	}
	var b [terms + 2]float64
	for k := lawTerms - 1; k >= 1; k-- {
		b[k-1] = g[k] + float64(float64(k+1)*b[k+1])
	}
	l.first = g[0] + b[1]
	copy(l.rest[:], b[:])
}

// excess is a(1-x) - bx = a - Nx (a - x for gamma) without the cancellation of products;
// low is what q = 1-x could not hold.
func (l *law) excess(x, q, low float64) float64 {
	if l.gamma {
		return l.a - x
	}
	aq, bx := float64(l.a*q), float64(l.b*x)
	return (aq - bx) + (math.FMA(l.a, low, math.FMA(l.a, q, -aq)) - math.FMA(l.b, x, -bx))
}

// deviance is D at x with its excess.
func (l *law) deviance(x, q, lambda float64) float64 {
	if l.gamma {
		return l.a * deviance(x/l.a, -lambda/l.a)
	}
	return float64(l.a*deviance(l.n*x/l.a, -lambda/l.a)) + float64(l.b*deviance(l.n*q/l.b, lambda/l.b))
}

// logDensity is log f(y) at x with q = 1-x beside it (q is not read for gamma).
func (l *law) logDensity(x, q float64) float64 {
	return l.logScale - l.deviance(x, q, l.excess(x, q, 0))
}

// logTails is log P(X < x) and log P(X > x), x inside the support.
func (l *law) logTails(x, q float64) (below, above float64) {
	return l.logTailsFrom(x, q, l.excess(x, q, 0))
}

// logTailsLow is logTails with what q could not hold.
func (l *law) logTailsLow(x, q, low float64) (below, above float64) {
	return l.logTailsFrom(x, q, l.excess(x, q, low))
}

// logTailsFrom is logTails at x, 1-x with the excess known better than these give it.
func (l *law) logTailsFrom(x, q, lambda float64) (below, above float64) {
	f, ratio, isBelow := l.tail(x, q, lambda, l.deviance(x, q, lambda))
	small := math.Min(f+log(ratio), 0)
	if isBelow {
		return small, log1mexp(small)
	}
	return log1mexp(small), small
}

// logTail is log P(X > x) (above) or log P(X < x).
func (l *law) logTail(x, q float64, above bool) float64 {
	t, f := l.tailAt(x, q, above)
	return t + log(f)
}

// tailAt is P(X > x) (above) or P(X < x) as factor e^logarithm.
func (l *law) tailAt(x, q float64, above bool) (logarithm, factor float64) {
	lambda := l.excess(x, q, 0)
	f, ratio, isBelow := l.tail(x, q, lambda, l.deviance(x, q, lambda))
	if isBelow == above {
		return 0, math.Max(1-float64(ratio*exp(f)), 0)
	}
	return f, ratio
}

// tail is the tail for which there is a positive expansion, as ratio e^f, and which it is.
func (l *law) tail(x, q, lambda, d float64) (f, ratio float64, isBelow bool) {
	f = l.logScale - d
	if !(d <= math.MaxFloat64) {
		return math.Inf(-1), 1, lambda > 0
	}
	if l.reach > 0 {
		w := math.Sqrt(2 * d)
		switch {
		case w > l.reach && lambda > 0:
			return f, l.fractionBelow(x, q, lambda), true
		case w > l.reach:
			return f, l.fractionAbove(x, q, lambda), false
		case lambda > 0:
			return f, float64(l.first*mills(w)) - polynomial(l.rest[:], -w), true
		}
		return f, float64(l.first*mills(w)) + polynomial(l.rest[:], w), false
	}
	if l.gamma || l.a <= l.b {
		if low := l.lowEnd(); x <= low {
			if l.a < smallShape {
				return l.logHighOfSmall(x, q, low), 1, false
			}
			return f, l.series(l.a, x), true
		}
		return f, l.fractionAbove(x, q, lambda), false
	}
	if low := l.lowEnd(); q <= low {
		if l.b < smallShape {
			return l.logHighOfSmall(x, q, low), 1, true
		}
		return f, l.series(l.b, q), false
	}
	return f, l.fractionBelow(x, q, lambda), true
}

// lowEnd is the value of the smaller parameter's variable up to which its series serves: somewhat above
// the mean, where the high tail is not yet rare.
func (l *law) lowEnd() float64 {
	if l.gamma {
		return l.a + 1.5
	}
	return math.Min(0.5, (math.Min(l.a, l.b)+1.5)/l.n)
}

// series is sum_n (N)_n/(s)_{n+1} v^n, the low tail over f, for the parameter s and its variable v.
func (l *law) series(s, v float64) float64 {
	sum, term := 0.0, 1/s
	if l.gamma {
		for n := 1.0; term > 1e-18*sum; n++ {
			sum += term
			term *= v / (s + n)
		}
		return sum
	}
	for n := 1.0; term > 1e-18*sum; n++ {
		sum += term
		term *= v * (l.n + n - 1) / (s + n)
	}
	return sum
}

// fractionBelow is P(X < x)/f for x below the mean.
func (l *law) fractionBelow(x, q, lambda float64) float64 {
	if l.gamma {
		return l.series(l.a, x)
	}
	return betaFraction(l.a, l.b, x, q, lambda)
}

// fractionAbove is P(X > x)/f for x above the mean.
func (l *law) fractionAbove(x, q, lambda float64) float64 {
	if l.gamma {
		return gammaFraction(l.a, x)
	}
	return betaFraction(l.b, l.a, q, x, -lambda)
}

// betaFraction is the contracted continued fraction of I_x(a,b) B(a,b) x^-a y^-b for lambda =
// a-(a+b)x > 0 (DiDonato & Morris, TOMS 708, BFRAC).
func betaFraction(a, b, x, y, lambda float64) float64 {
	c, c0, c1, yp1 := 1+lambda, b/a, 1+1/a, y+1
	n, p, s := 0.0, 1.0, a+1
	an, bn, anp1, bnp1 := 0.0, 1.0, 1.0, c/c1
	r := c1 / c
	for range 20000 {
		n++
		t := n / a
		w := n * (b - n) * x
		e := a / s
		alpha := (p * (p + c0) * e * e) * (w * x)
		e = (1 + t) / (c1 + t + t)
		beta := n + w/s + float64(e*(c+float64(n*yp1)))
		p = 1 + t
		s += 2
		an, anp1 = anp1, float64(alpha*an)+float64(beta*anp1)
		bn, bnp1 = bnp1, float64(alpha*bn)+float64(beta*bnp1)
		r0 := r
		r = anp1 / bnp1
		if math.Abs(r-r0) <= 1e-16*r {
			break
		}
		an /= bnp1
		bn /= bnp1
		anp1, bnp1 = r, 1
	}
	return r
}

// gammaFraction is Gamma(a,x) x^-a e^x as Legendre's continued fraction (Abramowitz & Stegun
// 6.5.31 contracted), by Lentz's method.
func gammaFraction(a, x float64) float64 {
	b := x + 1 - a
	c, d := 1e300, 1/b
	r := d
	for i := 1.0; i < 20000; i++ {
		an := -i * (i - a)
		b += 2
		d = 1 / (float64(an*d) + b)
		c = b + an/c
		step := float64(c * d)
		r *= step
		if math.Abs(step-1) <= 2e-16 {
			break
		}
	}
	return r
}

// logHighOfSmall is the logarithm of the high tail, from v to top and on, of the variable of a
// parameter below smallShape: panels of Gauss and Legendre in log v, a smooth integrand there.
func (l *law) logHighOfSmall(x, q, top float64) float64 {
	mirrored := !l.gamma && l.b < l.a
	v := x
	if mirrored {
		v = q
	}
	sum := 0.0
	span := log(top / v)
	panels := math.Ceil(span)
	for i := 0.0; i < panels; i++ {
		for k, node := range legendreNodes {
			for _, t := range [2]float64{0.5 * (1 - node), 0.5 * (1 + node)} {
				sum += float64(legendreWeights[k] * l.densityInLog(v*exp(span*(i+t)/panels), mirrored))
			}
		}
	}
	return log(float64(0.5*span/panels*sum) + exp(l.logBeyond(top, mirrored)))
}

// densityInLog is the density of log V, V = X or 1-X.
func (l *law) densityInLog(v float64, mirrored bool) float64 {
	switch {
	case l.gamma:
		return exp(l.logDensity(v, 0))
	case mirrored:
		return exp(l.logDensity(1-v, v)) / (1 - v)
	}
	return exp(l.logDensity(v, 1-v)) / (1 - v)
}

// logBeyond is the high tail of V beyond v by the continued fraction.
func (l *law) logBeyond(v float64, mirrored bool) float64 {
	x, q := v, 1-v
	if mirrored {
		x, q = q, x
	}
	lambda := l.excess(x, q, 0)
	d := l.deviance(x, q, lambda)
	if mirrored {
		return l.logScale - d + log(l.fractionBelow(x, q, lambda))
	}
	return l.logScale - d + log(l.fractionAbove(x, q, lambda))
}

// windowOdds is the odds of lo < X < hi, top being the end of the support: by the tails where they leave
// half or more of the larger, by the density's integral between where they would cancel.
func (l *law) windowOdds(lo, hi, top float64) Odds {
	if !(lo < hi) || hi <= 0 || lo >= top || lo <= 0 && hi >= top {
		return certain(lo <= 0 && hi >= top && lo < hi)
	}
	belowLo, aboveLo := math.Inf(-1), 0.0
	if lo > 0 {
		belowLo, aboveLo = l.logTailsLow(lo, 1-lo, (1-(1-lo))-lo)
	}
	belowHi, aboveHi := 0.0, math.Inf(-1)
	if hi < top {
		belowHi, aboveHi = l.logTailsLow(hi, 1-hi, (1-(1-hi))-hi)
	}
	against := math.Min(logSum(belowLo, aboveHi), 0)
	switch {
	case against < -0.7:
		return Odds{LogFor: log1mexp(against), LogAgainst: against}
	case belowLo < belowHi-0.7 && belowHi < aboveLo:
		return Odds{LogFor: belowHi + log1mexp(belowLo-belowHi), LogAgainst: against}
	case aboveHi < aboveLo-0.7 && aboveLo <= belowHi:
		return Odds{LogFor: aboveLo + log1mexp(aboveHi-aboveLo), LogAgainst: against}
	}
	return Odds{LogFor: l.logBetween(lo, hi), LogAgainst: against}
}

// logBetween is log P(lo < X < hi) by panels of Gauss and Legendre in logit X (log X), for 0 < lo < hi < top.
func (l *law) logBetween(lo, hi float64) float64 {
	width, odds := log1p((hi-lo)/lo), lo
	if !l.gamma {
		width, odds = log1p((hi-lo)/lo/(1-hi)), lo/(1-lo)
	}
	panels := math.Ceil(width / math.Min(1, math.Sqrt(1/l.a+1/l.b)))
	f := func(y float64) float64 {
		o := float64(odds * exp(y))
		if l.gamma {
			return l.logDensity(o, 0)
		}
		return l.logDensity(o/(1+o), 1/(1+o))
	}
	top := math.Max(f(0), f(width))
	sum := 0.0
	for i := 0.0; i < panels; i++ {
		for k, node := range legendreNodes {
			for _, t := range [2]float64{0.5 * (1 - node), 0.5 * (1 + node)} {
				sum += float64(legendreWeights[k] * exp(f(width*(i+t)/panels)-top))
			}
		}
	}
	return log(0.5*width/panels*sum) + top
}
