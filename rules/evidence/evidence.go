// Package evidence weighs a claim: the posterior probability that it is true and that it
// is not, each with full relative accuracy, and the median and central 95 % interval of
// the claim's quantity.
//
// Weigh and Estimate allocate nothing, read no clock and draw no random number; the same
// input gives the same bits on every machine: products that feed a sum are rounded
// explicitly (float64(x*y)) or use math.FMA, and elementary functions are this package's own.
package evidence

import "math"

import "steelyard/rules/posterior"

// Process is what the claim's process at the same index of claim.Claim.Processes is
// believed to be, and its characteristic's limits (-Inf, +Inf where there is none).
type Process struct {
	posterior.Posterior
	Lower, Upper float64
}

// Odds are the two sides of a claim as natural logarithms of probabilities, each with
// relative accuracy in the probability. A side that is exactly 0 is -Inf.
type Odds struct {
	LogFor     float64 // log P(claim)
	LogAgainst float64 // log P(not claim)
}

// Probability is P(claim).
func (o Odds) Probability() float64 { return exp(o.LogFor) }

// Contrary is P(not claim).
func (o Odds) Contrary() float64 { return exp(o.LogAgainst) }

// Log10 is the decimal logarithm of the odds for the claim.
func (o Odds) Log10() float64 { return (o.LogFor - o.LogAgainst) / math.Ln10 }

// Interval is the median and the central 95 % interval of a claim's quantity.
type Interval struct {
	Median, Lower, Upper float64
}
