package evidence

import "math"

// gammaOdds is the odds of X > x for X ~ Gamma(shape) with the given rate: one incomplete gamma
// function, the rarer side by a positive expansion (law). TestPublishedGammas, TestLawTails.
func gammaOdds(shape, rate, x float64) Odds {
	if !(x > 0) {
		return certain(true)
	}
	if math.IsInf(x, 1) {
		return certain(false)
	}
	l := gammaLaw(shape)
	below, above := l.logTails(rate*x, 0)
	return Odds{LogFor: above, LogAgainst: below}
}

// gammaWindowOdds is the odds of lo < X < hi. TestGammaWindow, TestWindowAgainstTails.
func gammaWindowOdds(shape, rate, lo, hi float64) Odds {
	l := gammaLaw(shape)
	return l.windowOdds(rate*lo, rate*hi, math.Inf(1))
}

// gammaLineOdds is the odds of X1 > slope X2 + offset for independent X_i ~ Gamma(shape_i) of rate_i. With
// offset 0 (a ratio of rates) it is one incomplete beta function: G1/(G1+G2) ~ Beta(shape1, shape2);
// else the integral of betaLineOdds, over a half-line where the line rises.
// Shapes from 0.05 on where the offset is not 0. TestPublicCases, TestSweepPairs, TestGammaLineExactSums,
// TestGammaLineProperties.
func gammaLineOdds(shape1, rate1, shape2, rate2, slope, offset float64) Odds {
	if slope == 0 || offset == 0 && slope < 0 {
		return gammaOdds(shape1, rate1, offset)
	}
	if offset == 0 {
		// G1/G2 > slope rate1/rate2.
		return betaRatioOdds(shape1, shape2, slope, rate1, rate2)
	}
	if slope < 0 && offset < 0 {
		return certain(true)
	}
	one, two := gammaLaw(shape1), gammaLaw(shape2)
	return lineOdds(&one, &two, rate1, rate2, slope, offset, shape1/rate1, shape2/rate2,
		math.Sqrt(shape1)/rate1, math.Sqrt(shape2)/rate2, math.Inf(1))
}

// betaRatioOdds is the odds of X/(1-X) > r u/v for X ~ Beta(a, b) and r, u, v > 0. The excess a(1-x) - bx =
// (av - b(ru))/(v + ru) is formed from exact products, before anything is rounded to a place in (0, 1).
func betaRatioOdds(a, b, r, u, v float64) Odds {
	ru := r * u
	return betaRatioOddsLow(a, b, ru, math.FMA(r, u, -ru), v)
}

// betaRatioOddsLow is the odds of X/(1-X) > (w + wLow)/v.
func betaRatioOddsLow(a, b, w, wLow, v float64) Odds {
	x, q := w/(w+v), v/(w+v)
	if !(x > 0) || !(q > 0) {
		return certain(x == 0)
	}
	av, bw := float64(a*v), float64(b*w)
	lambda := ((av - bw) + (math.FMA(a, v, -av) - math.FMA(b, wLow, math.FMA(b, w, -bw)))) / (w + v)
	l := betaLaw(a, b)
	below, above := l.logTailsFrom(x, q, lambda)
	return Odds{LogFor: above, LogAgainst: below}
}

// gammaLargestOdds is the odds of X_which - max of the others > tolerance (contest); up to
// 64, shapes from 0.05 on. TestGammaLargest.
func gammaLargestOdds(shape, rate []float64, which int, tolerance float64) Odds {
	c := gammaContest(shape, rate, which, tolerance)
	return c.odds()
}

// gammaSmallestOdds is the odds of X_which - min of the others > tolerance.
func gammaSmallestOdds(shape, rate []float64, which int, tolerance float64) Odds {
	c := gammaContest(shape, rate, which, tolerance)
	c.smallest = true
	return c.odds().against()
}

func gammaContest(shape, rate []float64, which int, tolerance float64) contest {
	c := contest{n: len(shape), which: which, tolerance: tolerance, top: math.Inf(1)}
	for i := range shape {
		c.laws[i], c.rates[i] = gammaLaw(shape[i]), rate[i]
	}
	return c
}
