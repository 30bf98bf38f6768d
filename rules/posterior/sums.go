package posterior

import (
	"fmt"
	"math"
)

const (
	largest     = 1e150         // of a normal value; the square of a difference stays below the largest float64
	mostCounted = float64(1e15) // of a count; sums of counts stay exact
)

// Accepts says in a sentence why a value, of so many or over such an exposure, can't be one
// of the family's; nil where it can.
func (f Family) Accepts(value, of float64) error {
	if math.IsNaN(value) || math.IsInf(value, 0) || math.IsNaN(of) || math.IsInf(of, 0) {
		return fmt.Errorf("the value %v of %v is not a finite number", value, of)
	}
	switch f {
	case NormalFamily:
		if math.Abs(value) > largest {
			return fmt.Errorf("the value %v is too large: at most %v is expected, so that squares of differences fit",
				value, largest)
		}
		return nil
	case LognormalFamily:
		if value <= 0 {
			return fmt.Errorf("the value %v is not above 0, as the lognormal family needs", value)
		}
		return nil
	case BinomialFamily:
		if value < 0 || value > of || of < 1 || value != math.Trunc(value) || of != math.Trunc(of) {
			return fmt.Errorf("%v counted of %v: whole numbers are expected, with 0 <= counted <= of", value, of)
		}
		if of > mostCounted {
			return fmt.Errorf("%v counted of %v: at most %v are expected", value, of, mostCounted)
		}
		return nil
	case PoissonFamily:
		if value < 0 || value != math.Trunc(value) || of <= 0 {
			return fmt.Errorf("the count %v over the exposure %v: a whole number from 0 on and an exposure above 0 are expected",
				value, of)
		}
		if value > mostCounted {
			return fmt.Errorf("the count %v is too large: at most %v is expected", value, mostCounted)
		}
		return nil
	}
	return fmt.Errorf("there is no family %q; normal, lognormal, binomial and poisson are", string(f))
}

// Add takes one observation: a value (normal, lognormal), so many counted `of` so many
// (binomial), or a count over the exposure `of` (poisson). What Accepts refuses must not get
// here: a value of which there is no logarithm, say, would spoil all that comes after it. The spread
// of normal values that differ by less than about 1e-145 loses digits, as their squares underflow.
func (s Sums) Add(f Family, value, of float64) Sums {
	switch f {
	case NormalFamily:
		return s.push(pair{hi: value})
	case LognormalFamily:
		return s.push(logPair(value))
	}
	return Sums{N: s.N + 1, Total: s.Total + value, Exposure: s.Exposure + of}
}

// push is Welford's update (Technometrics 4, 1962) in pairs:
//
//	mean' = mean + (x - mean)/n', S' = S + (x - mean)^2 n/n', n' = n + 1.
//
// TestNormalUpdate, TestNISTUnivariate, TestOrderAndGroupingDoNotMatter.
func (s Sums) push(x pair) Sums {
	n := s.N + 1
	mean := pair{s.Mean, s.MeanLow}
	d := x.add(mean.neg())
	mean = mean.add(d.overFloat(n))
	ss := pair{s.SS, s.SSLow}.add(d.mul(d).mul(pair{hi: s.N}).overFloat(n))
	return Sums{N: n, Mean: mean.hi, MeanLow: mean.lo, SS: ss.hi, SSLow: ss.lo}
}

// Merge is what both say together (Chan, Golub & LeVeque, The American Statistician 37, 1983):
//
//	n = nA + nB, d = meanB - meanA, mean = meanA + d nB/n, S = SA + SB + d^2 nA nB/n.
//
// The two must be of one family. Order and grouping change the mean and S by an ulp at most, and
// counts not at all. TestWindowMerge, TestOrderAndGroupingDoNotMatter, TestCountsMerge.
func Merge(f Family, a, b Sums) Sums {
	switch {
	case a.N == 0:
		return b
	case b.N == 0:
		return a
	case f == BinomialFamily || f == PoissonFamily:
		return Sums{N: a.N + b.N, Total: a.Total + b.Total, Exposure: a.Exposure + b.Exposure}
	}
	n := twoSum(a.N, b.N)
	meanA, meanB := pair{a.Mean, a.MeanLow}, pair{b.Mean, b.MeanLow}
	d := meanB.add(meanA.neg())
	byN := func(x pair) pair {
		if n.lo == 0 { // as always without a discount, and cheaper
			return x.overFloat(n.hi)
		}
		return x.over(n)
	}
	mean := meanA.add(byN(d.mul(pair{hi: b.N})))
	between := byN(d.mul(d).mul(twoProduct(a.N, b.N)))
	ss := pair{a.SS, a.SSLow}.add(pair{b.SS, b.SSLow}).add(between)
	return Sums{N: n.hi, Mean: mean.hi, MeanLow: mean.lo, SS: ss.hi, SSLow: ss.lo}
}

// Scale weighs the evidence down by a factor between 0 and 1, the average staying where it is.
// TestDiscounts, TestSteadyState.
func (s Sums) Scale(by float64) Sums {
	ss := pair{s.SS, s.SSLow}.mul(pair{hi: by})
	return Sums{N: float64(s.N * by), Mean: s.Mean, MeanLow: s.MeanLow, SS: ss.hi, SSLow: ss.lo,
		Total: float64(s.Total * by), Exposure: float64(s.Exposure * by)}
}

// Units is how many units the sums speak of: for binomial how many were looked at, else the
// observations. Fractional under a discount.
func (s Sums) Units(f Family) float64 {
	if f == BinomialFamily {
		return s.Exposure
	}
	return s.N
}

// FromSummary are the sums of n values with an average and a standard deviation of divisor n-1
// (for lognormal, of natural logarithms); n is from 1 on and sd from 0 on. TestFromSummary.
func FromSummary(n, mean, sd float64) Sums {
	ss := twoProduct(sd, sd).mul(pair{hi: n - 1})
	return Sums{N: n, Mean: mean, SS: ss.hi, SSLow: ss.lo}
}
