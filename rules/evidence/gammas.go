package evidence

func gammaOdds(shape, rate, x float64) Odds                                     { return unweighed }
func gammaLineOdds(shape1, rate1, shape2, rate2, slope, offset float64) Odds    { return unweighed }
func gammaLargestOdds(shape, rate []float64, which int, tolerance float64) Odds { return unweighed }
func gammaSmallestOdds(shape, rate []float64, which int, tolerance float64) Odds {
	return unweighed
}
func gammaWindowOdds(shape, rate, lo, hi float64) Odds { return unweighed }
