// Package claim is the language in which a rule says what it weighs: a statement about
// processes that has a posterior probability.
//
// Parse reads a claim and refuses, with the column, what has no exact route. String
// prints the one canonical form: Parse of String is the identity. Bind checks names and
// families against what is configured; Spread writes a claim about `this` and `others`
// out for one line of a characteristic.
package claim

import "steelyard/rules/posterior"

// Kind is the quantity a claim speaks of; all terms of one claim are of one kind.
type Kind string

// The kinds, as the language writes them.
const (
	Mean       Kind = "mean"       // normal
	SD         Kind = "sd"         // normal
	Next       Kind = "next"       // normal, lognormal: the next unit
	Outside    Kind = "outside"    // normal, lognormal: fraction beyond the limits
	Capability Kind = "capability" // normal
	Median     Kind = "median"     // lognormal
	Proportion Kind = "proportion" // binomial
	Rate       Kind = "rate"       // poisson
	Bias       Kind = "bias"       // a rig's offset, from reference parts
)

// Form is the shape of the left side.
type Form int

// The forms. In Linear and Absolute, the quantity is the weighted sum of Terms. In Ratio it is
// Terms[0] over Terms[1]. In Largest (Smallest) it is Terms[0] minus the largest
// (smallest) of Terms[1:], each with weight 1.
const (
	Linear Form = iota
	Absolute
	Ratio
	Largest
	Smallest
)

// Test is the comparison.
type Test int

// The tests: quantity > Bound; quantity < Bound; Low < quantity < High.
const (
	Above Test = iota
	Below
	Within
)

// Term is one weighted quantity; Process is an index into Claim.Processes.
type Term struct {
	Weight  float64
	Process int
}

// Claim is one parsed claim. It is immutable once parsed.
type Claim struct {
	Kind      Kind
	Form      Form
	Terms     []Term
	Processes []string // the distinct process names, in order of first appearance: "head.L4"
	Test      Test
	Bound     float64 // Above, Below
	Low, High float64 // Within; an infinite one stands for no limit on that side
	Limits    bool    // Within: Low and High are the characteristic's own limits, filled in by Bind

	places []int // column of the first mention of each process
}

// Known tells Bind what a process name stands for.
type Known struct {
	Family posterior.Family
	Lower  float64 // the characteristic's limits; -Inf and +Inf where there is none
	Upper  float64
	Offset bool // what a rig adds to what it measures: bias speaks of it, and nothing else does
}
