package evidence

import "math"

// certain is the odds of a claim that cannot be otherwise.
func certain(claim bool) Odds {
	if claim {
		return Odds{LogFor: 0, LogAgainst: math.Inf(-1)}
	}
	return Odds{LogFor: math.Inf(-1), LogAgainst: 0}
}

// against swaps the sides.
func (o Odds) against() Odds { return Odds{LogFor: o.LogAgainst, LogAgainst: o.LogFor} }

// log1mexp is log(1 - e^l) for l <= 0: the logarithm of the other side of a probability.
// It keeps relative accuracy as long as e^l is not nearly 1.
func log1mexp(l float64) float64 {
	if l > -math.Ln2 {
		return log(-expm1(l))
	}
	return log1p(-exp(l))
}

// oddsOf completes a pair from the logarithm of the claim's probability.
func oddsOf(logFor float64) Odds {
	logFor = math.Min(logFor, 0)
	return Odds{LogFor: logFor, LogAgainst: log1mexp(logFor)}
}

// logSum is log(e^a + e^b).
func logSum(a, b float64) float64 {
	if a < b {
		a, b = b, a
	}
	if math.IsInf(b, -1) {
		return a
	}
	return a + log1p(exp(b-a))
}

// polynomial is c[0] + c[1] x + ..., the even and the odd terms by Horner's rule side by side, so that one
// chain need not wait for the other.
func polynomial(c []float64, x float64) float64 {
	v := x * x
	i := len(c) - 1
	even, odd := 0.0, 0.0
	if i&1 == 0 {
		even = c[i]
		i--
	}
	for ; i >= 1; i -= 2 {
		odd = math.FMA(odd, v, c[i])
		even = math.FMA(even, v, c[i-1])
	}
	return math.FMA(odd, x, even)
}

// deviance is t - log(1+t) for ratio = 1+t > 0, without cancellation near t = 0. Both are
// asked for so that a caller who knows either end exactly loses nothing. With u = t/(2+t),
// log(1+t) = 2 atanh(u), and t - 2u = tu (so that the first term carries the answer).
// Relative error a few ulp. TestDeviance.
func deviance(ratio, t float64) float64 {
	if t < -0.4 || t > 0.6 {
		if t > math.MaxFloat64 {
			return t
		}
		return t - log(ratio)
	}
	u := t / (2 + t)
	v := float64(u * u)
	series := devianceSeries[:]
	if v < 0.008 {
		series = series[:7]
	}
	return u * (t - float64(2*v*polynomial(series, v)))
}

// devianceSeries is 1/3, 1/5, 1/7, ...: u <= 1/4 wants eleven terms and five to spare.
var devianceSeries = [...]float64{1. / 3, 1. / 5, 1. / 7, 1. / 9, 1. / 11, 1. / 13, 1. / 15, 1. / 17, 1. / 19,
	1. / 21, 1. / 23, 1. / 25, 1. / 27, 1. / 29}

// stirling is log Gamma(a) - (a-1/2) log a + a - log(2 pi)/2, the error of Stirling's formula,
// for a > 0 (Abramowitz & Stegun 6.1.41). Below 12 the argument is raised by
// Gamma(a+1) = a Gamma(a). TestStirling.
func stirling(a float64) float64 {
	if a >= 12 {
		r := 1 / a
		return r * polynomial(stirlingSeries[:], r*r)
	}
	product, top := 1.0, a
	for top < 12 {
		product *= top
		top++
	}
	d := top - a
	// (top-1/2) log top - (a-1/2) log a - log product - d, with the logarithms of like size joined.
	return stirling(top) + float64((top-0.5)*log(top)) - float64((a-0.5)*log(a)) - log(product) - d
}

var stirlingSeries = [...]float64{1. / 12, -1. / 360, 1. / 1260, -1. / 1680, 1. / 1188, -691. / 360360, 1. / 156,
	-3617. / 122400}

// logRoot2Pi is log sqrt(2 pi).
const logRoot2Pi = 0.918938533204672741780329736405617639861

// mills is Mills' ratio (1-Phi(z))/phi(z) of the standard normal law for z >= 0: (1+z) mills(z)
// is a polynomial in (z-5)/(z+5), a Chebyshev fit (computed with 60 digits; largest
// relative error 1e-17). TestMills.
func mills(z float64) float64 {
	if z > 1e8 {
		return 1 / z
	}
	return polynomial(millsFit[:], (z-5)/(z+5)) / (1 + z)
}

var millsFit = [...]float64{
	1.15684862829189459,
	-0.229487538252112901,
	0.0777815988687355287,
	0.0250721793016119471,
	-0.066177600778993396,
	0.0615050458410135683,
	-0.0380265921877623661,
	0.0163482312692141011,
	-0.00420129031066357415,
	0.0000195307328930300477,
	0.000457043818200079524,
	-0.000134374746012551308,
	-0.0000248054584472145001,
	0.0000227111229498828807,
	-1.77234381856015555e-7,
	-3.28056701289558284e-6,
	3.21971316090421867e-7,
	4.96818850334183663e-7,
	-6.73832346517704732e-8,
	-8.23232122351542755e-8,
	1.00828956462601881e-8,
	1.40102487824428699e-8,
	-1.08469252888607948e-9,
	-2.0394569774234491e-9,
	6.28837785549867698e-11,
	1.73275789432351038e-10,
}

// normalDensity is phi(z).
func normalDensity(z float64) float64 {
	const invRoot2Pi = 0.398942280401432677939946059934381868
	return float64(invRoot2Pi * exp(-normalExponent(z)))
}

// normalExponent is z^2/2.
func normalExponent(z float64) float64 { return float64(0.5 * float64(z*z)) }

// normalTail is 1 - Phi(z).
func normalTail(z float64) float64 {
	if z >= 0 {
		if z > 40 {
			return 0
		}
		return float64(mills(z) * normalDensity(z))
	}
	return 1 - normalTail(-z)
}

// normalTails is P(Z > a) + P(Z > b) of a standard normal Z as factor e^logarithm.
func normalTails(a, b float64) (logarithm, factor float64) {
	if a > b {
		a, b = b, a
	}
	if a <= 0 {
		return 0, normalTail(a) + normalTail(b)
	}
	factor = mills(a)
	if rest := 0.5 * (b - a) * (b + a); rest < 45 {
		factor += float64(mills(b) * exp(-rest))
	}
	return -normalExponent(a) - logRoot2Pi, factor
}

// logNormalWindow is log P(lo < Z < hi).
func logNormalWindow(lo, hi float64) float64 {
	l, f := normalWindow(lo, hi)
	return l + log(f)
}

// normalWindow is P(lo < Z < hi) of a standard normal Z as factor e^logarithm, with relative accuracy also
// where the window is narrow or deep in a tail: from a to a+d on the upper side,
// phi(a) (m(a) - e^(-d(a+d/2)) m(a+d)); where that would cancel, the density's own integral
// by sixteen points of Gauss and Legendre.
func normalWindow(lo, hi float64) (logarithm, factor float64) {
	if !(lo < hi) {
		return math.Inf(-1), 1
	}
	if lo+hi < 0 {
		lo, hi = -hi, -lo
	}
	d := hi - lo
	switch {
	case lo <= -0.5:
		// The middle is inside: both tails together are below 0.62.
		return 0, 1 - (normalTail(-lo) + normalTail(hi))
	case lo > 0 && d*(lo+float64(0.5*d)) > 1:
		f := mills(lo)
		if fall := d * (lo + float64(0.5*d)); fall < 45 {
			f -= float64(exp(-fall) * mills(hi))
		}
		return -normalExponent(lo) - logRoot2Pi, f
	case lo <= 0 && hi > 0.5:
		return 0, 1 - normalTail(-lo) - normalTail(hi)
	}
	// Here d(lo+d/2) <= 1 or hi <= 1/2: a smooth integrand on a short stretch.
	half := 0.5 * d
	s := 0.0
	for i, x := range legendreNodes {
		r, l := half*(1+x), half*(1-x)
		s = math.FMA(legendreWeights[i], float64(exp(-r*(lo+float64(0.5*r))))+float64(exp(-l*(lo+float64(0.5*l)))), s)
	}
	return -normalExponent(lo) - logRoot2Pi, half * s
}

// normalQuantile is z with 1 - Phi(z) = p for 0 < p < 1 and q = 1-p given beside it, so
// that neither end loses digits (in the middle 1/2 - p is exact): Newton's method on log(1-Phi) from the
// two-term asymptote. TestNormalQuantile.
func normalQuantile(p, q float64) float64 {
	if p > q {
		return -normalQuantile(q, p)
	}
	if p > 0.3 {
		return normalCentre(0.5 - p)
	}
	l := log(p)
	t := float64(-2*l) - 1.8379
	z := math.Sqrt(math.Max(0.1, t-log(math.Max(1, t))))
	for range 20 {
		m := mills(z)
		step := float64((log(m) - normalExponent(z) - logRoot2Pi - l) * m)
		z += step
		if math.Abs(step) < 1e-9*z {
			// The last step was below 1e-9; the next one would be below its square.
			break
		}
	}
	return z
}

// normalCentre is z > 0 with Phi(z) - 1/2 = c for c in [0, 0.2]: Newton's method on
// the series of the integral of phi, all of one sign once e^(-z^2/2) is taken out.
func normalCentre(c float64) float64 {
	z := 0.0
	for range 20 {
		s, term := 0.0, z
		for k := 3.0; term > 1e-18*s; k += 2 {
			s += term
			term *= float64(z*z) / k
		}
		f := normalDensity(z)
		step := (c - float64(s*f)) / f
		z += step
		if math.Abs(step) <= 1e-9*z {
			break
		}
	}
	return z
}

// legendreNodes and legendreWeights are the positive half of Gauss and Legendre's 16 points
// on (-1, 1) (Abramowitz & Stegun, table 25.4).
var legendreNodes = [8]float64{0.0950125098376374402, 0.281603550779258913, 0.458016777657227386,
	0.617876244402643748, 0.755404408355003034, 0.865631202387831744, 0.944575023073232576, 0.989400934991649933}

var legendreWeights = [8]float64{0.189450610455068496, 0.182603415044923589, 0.169156519395002538,
	0.149595988816576732, 0.124628971255533872, 0.0951585116824927848, 0.0622535239386478929, 0.0271524594117540949}
