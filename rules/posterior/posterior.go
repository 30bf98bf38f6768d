// Package posterior holds what the measurements of one process say, and what is
// believed of the process in the light of them.
//
// Sums are the data alone: mergeable, order-free statistics without a prior. A Prior
// turns Sums into a Posterior in closed form. A Memory decides which measurements the
// Sums speak of: everything in the segment, the last N units, a window of time, or all
// with a discount. Nothing here reads a clock, a file or a random number.
//
// Four families (Family): normal; lognormal, which is the normal family on natural
// logarithms; binomial (so many counted of so many); poisson (a count over an exposure).
package posterior

// Family names a conjugate family as configuration writes it.
type Family string

// The families.
const (
	NormalFamily    Family = "normal"
	LognormalFamily Family = "lognormal"
	BinomialFamily  Family = "binomial"
	PoissonFamily   Family = "poisson"
)

// Sums are the sufficient statistics of measurements, without a prior. The zero value
// stands for no measurement. For the normal family the mean and the sum of squared
// deviations are kept as unevaluated pairs (value + Low) of float64, so that order and
// grouping do not show in the last bits; for lognormal they are of natural logarithms.
type Sums struct {
	N        float64 `json:"n"`                  // units; fractional under a discount
	Mean     float64 `json:"mean,omitempty"`     // normal, lognormal: average
	MeanLow  float64 `json:"mean_low,omitempty"` // what Mean's float64 could not hold
	SS       float64 `json:"ss,omitempty"`       // sum of squared deviations from the average
	SSLow    float64 `json:"ss_low,omitempty"`
	Total    float64 `json:"total,omitempty"`    // binomial: counted; poisson: count
	Exposure float64 `json:"exposure,omitempty"` // binomial: of; poisson: exposure
}

// Prior is what is believed of a process before its data. With Reference true the other
// fields are not read: normal and lognormal p(mu, sigma^2) ∝ 1/sigma^2, binomial
// Beta(1/2, 1/2), poisson Gamma(1/2, rate 0). An informative normal prior is in the units
// of the data, its mean and its sd each worth a number of units (both above 0).
type Prior struct {
	Reference bool    `json:"reference,omitempty"`
	Mean      float64 `json:"mean,omitempty"`
	MeanWorth float64 `json:"mean_worth,omitempty"`
	SD        float64 `json:"sd,omitempty"`
	SDWorth   float64 `json:"sd_worth,omitempty"`
	A         float64 `json:"a,omitempty"` // binomial: Beta(A, B)
	B         float64 `json:"b,omitempty"`
	Shape     float64 `json:"shape,omitempty"` // poisson: Gamma(Shape, Rate)
	Rate      float64 `json:"rate,omitempty"`
}

// Posterior is the closed-form belief about one process.
//
//	normal, lognormal  mu | sigma^2 ~ N(M+MLow, sigma^2/K), SS/sigma^2 ~ chi-squared(Nu);
//	                   so mu ~ M+MLow + sqrt(SS/(Nu K)) t_Nu. Proper once Nu > 0 and K > 0.
//	binomial           proportion ~ Beta(A, B)
//	poisson            rate ~ Gamma(shape A, rate B)
type Posterior struct {
	Family Family
	M      float64
	MLow   float64 // what M's float64 could not hold
	K      float64
	Nu     float64
	SS     float64
	A, B   float64
}
