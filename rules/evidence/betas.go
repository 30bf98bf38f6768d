package evidence

import "math"

func certain(claim bool) Odds {
	if claim {
		return Odds{LogFor: 0, LogAgainst: math.Inf(-1)}
	}
	return Odds{LogFor: math.Inf(-1), LogAgainst: 0}
}

var unweighed = Odds{LogFor: math.NaN(), LogAgainst: math.NaN()}

func betaOdds(a, b, x float64) Odds                                      { return unweighed }
func betaLineOdds(a1, b1, a2, b2, slope, offset float64) Odds            { return unweighed }
func betaLargestOdds(a, b []float64, which int, tolerance float64) Odds  { return unweighed }
func betaSmallestOdds(a, b []float64, which int, tolerance float64) Odds { return unweighed }
func betaWindowOdds(a, b, lo, hi float64) Odds                           { return unweighed }
