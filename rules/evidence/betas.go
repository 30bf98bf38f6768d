package evidence

import "math"

// betaOdds is the odds of X > x for X ~ Beta(a, b): one incomplete beta function, the rarer side by
// a positive expansion (law). x beyond (0, 1) is certain either way.
// TestPublicCases, TestPublishedBetas, TestLawTails.
func betaOdds(a, b, x float64) Odds {
	if x <= 0 || x >= 1 {
		return certain(x <= 0)
	}
	l := betaLaw(a, b)
	q := 1 - x
	below, above := l.logTailsLow(x, q, (1-q)-x)
	return Odds{LogFor: above, LogAgainst: below}
}

// betaWindowOdds is the odds of lo < X < hi for X ~ Beta(a, b), also of narrow windows deep in a tail.
// TestBetaWindow, TestWindowAgainstTails.
func betaWindowOdds(a, b, lo, hi float64) Odds {
	l := betaLaw(a, b)
	return l.windowOdds(lo, hi, 1)
}

// betaLineOdds is the odds of X1 > slope X2 + offset for independent X1 ~ Beta(a1, b1) and
// X2 ~ Beta(a2, b2): the integral of the narrower one's density times the other's tail over the
// stretch where that tail is neither 0 nor 1, in the log-odds of the place in the stretch,
// where nothing is singular nearer than pi to the real line (logIntegral). Each side positive.
// Any slope and offset; parameters from 0.05 on (below, part of the law lies beneath the smallest float64).
// TestPublicCases, TestSweepPairs, TestBetaLineExactSums, TestBetaLineProperties.
func betaLineOdds(a1, b1, a2, b2, slope, offset float64) Odds {
	if slope == 0 {
		return betaOdds(a1, b1, offset)
	}
	one, two := betaLaw(a1, b1), betaLaw(a2, b2)
	mean1, mean2 := a1/one.n, a2/two.n
	sd1 := math.Sqrt(mean1 * (b1 / one.n) / (one.n + 1))
	sd2 := math.Sqrt(mean2 * (b2 / two.n) / (two.n + 1))
	return lineOdds(&one, &two, 1, 1, slope, offset, mean1, mean2, sd1, sd2, 1)
}

// lineOdds chooses the narrower law for the density and the rarer side for the integral.
func lineOdds(one, two *law, rate1, rate2, slope, offset, mean1, mean2, sd1, sd2, top float64) Odds {
	rare := mean1 < float64(slope*mean2)+offset
	if sd1 < math.Abs(slope)*sd2 {
		// X1's density; the claim is X2 < (X1-offset)/slope, or > for a falling line.
		p := pair{x: one, z: two, rateX: rate1, rateZ: rate2, slope: slope, offset: offset, inverse: true,
			top: top, claimAbove: slope < 0}
		return p.odds(rare)
	}
	p := pair{x: two, z: one, rateX: rate2, rateZ: rate1, slope: slope, offset: offset, top: top, claimAbove: true}
	return p.odds(rare)
}

// betaLargestOdds is the odds of X_which - max of the others > tolerance, X_i ~ Beta(a[i], b[i])
// independent (contest); up to 64, parameters from 0.05 on. TestPublicCases, TestBetaLargest.
func betaLargestOdds(a, b []float64, which int, tolerance float64) Odds {
	c := betaContest(a, b, which, tolerance)
	return c.odds()
}

func betaContest(a, b []float64, which int, tolerance float64) contest {
	c := contest{n: len(a), which: which, tolerance: tolerance, top: 1}
	for i := range a {
		c.laws[i], c.rates[i] = betaLaw(a[i], b[i]), 1
	}
	return c
}

// betaSmallestOdds is the odds of X_which - min of the others > tolerance: for 1-X it is the contrary of the
// largest, with the tolerance's sign turned. TestBetaLargest.
func betaSmallestOdds(a, b []float64, which int, tolerance float64) Odds {
	return betaLargestOdds(b, a, which, -tolerance).against()
}
