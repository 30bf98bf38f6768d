package claim

import (
	"fmt"
	"math/big"
	"slices"
)

// names are the processes a claim mentions, each with the column of its first mention.
type names struct {
	names  []string
	places []int
}

// index is the number of a name, which is added where it is new.
func (n *names) index(name string, column int) int {
	i := slices.Index(n.names, name)
	if i < 0 {
		i = len(n.names)
		n.names, n.places = append(n.names, name), append(n.places, column)
	}
	return i
}

// bounds are what a quantity is compared with; low and high for Within only.
type bounds struct {
	test             Test
	bound, low, high *big.Rat
}

// minus moves a constant across; over divides by a factor, which turns the test where it is
// below 0.
func (b bounds) minus(c *big.Rat) bounds {
	if b.test == Within {
		b.low, b.high = new(big.Rat).Sub(b.low, c), new(big.Rat).Sub(b.high, c)
	} else {
		b.bound = new(big.Rat).Sub(b.bound, c)
	}
	return b
}

func (b bounds) over(by *big.Rat) bounds {
	switch {
	case b.test == Within:
		b.low, b.high = new(big.Rat).Quo(b.low, by), new(big.Rat).Quo(b.high, by)
		if by.Sign() < 0 {
			b.low, b.high = b.high, b.low
		}
	default:
		b.bound = new(big.Rat).Quo(b.bound, by)
		if by.Sign() < 0 {
			b.test = b.test.turned()
		}
	}
	return b
}

// turned is the test that stands for a claim whose sides have been swapped.
func (t Test) turned() Test { return [...]Test{Above: Below, Below: Above, Within: Within}[t] }

// build makes the canonical claim of a value and what it is compared with.
func (n *names) build(v value, b bounds) (*Claim, *Error) {
	switch {
	case v.isConstant():
		return nil, &Error{Column: 1, Read: "a claim without a quantity",
			Expected: "a quantity such as mean(head.L1)"}
	case v.shape == extreme:
		return nil, &Error{Column: v.column, Read: "max or min alone",
			Expected: "one quantity minus max(...) or min(...) of others"}
	}
	v.terms = slices.DeleteFunc(slices.Clone(v.terms), func(t weighted) bool { return t.weight.Sign() == 0 })
	if len(v.terms) == 0 {
		return nil, &Error{Column: v.column, Read: "quantities that cancel out", Expected: "a quantity that is left"}
	}
	v, b = v.simple(b)
	b = b.minus(v.constant).over(v.scale)
	c := &Claim{Kind: v.kind, Form: v.form()}
	b, err := n.weigh(c, v, b)
	if err != nil {
		return nil, err
	}
	if err := c.compare(b, v.column); err != nil {
		return nil, err
	}
	if c.IsSpread() {
		return c, nil // Spread finds out how many terms there are
	}
	return c, c.route()
}

// simple writes two forms as simpler ones that say the same: |q + k| < d is q within
// -k-d .. -k+d; and for quantities that can't be below 0, q - r*p > 0 is q/p > r.
func (v value) simple(b bounds) (value, bounds) {
	if v.shape == absolute && v.inner.Sign() != 0 && b.test != Within {
		rest := b.minus(v.constant).over(v.scale)
		if rest.test == Below && rest.bound.Sign() > 0 {
			v.shape, v.scale, v.constant = sum, one, v.inner
			return v, bounds{test: Within, low: new(big.Rat).Neg(rest.bound), high: rest.bound}
		}
	}
	if v.shape == sum && len(v.terms) == 2 && (v.kind == SD || v.kind == Median) && b.test != Within &&
		b.bound.Cmp(v.constant) == 0 && v.terms[0].weight.Sign()*v.terms[1].weight.Sign() < 0 {
		first, second := v.terms[0], v.terms[1]
		if first.weight.Sign() < 0 {
			b.test = b.test.turned()
		}
		b.bound = new(big.Rat).Neg(new(big.Rat).Quo(second.weight, first.weight))
		v.shape, v.constant = ratio, new(big.Rat)
		v.terms = []weighted{{one, first.process}, {one, second.process}}
	}
	return v, b
}

func (v value) form() Form {
	switch {
	case v.shape == absolute:
		return Absolute
	case v.shape == ratio:
		return Ratio
	case v.shape == contest && v.isMax:
		return Largest
	case v.shape == contest:
		return Smallest
	}
	return Linear
}

// weigh gives the claim its terms. One quantity has weight 1, and so has the first of a plain
// difference; within bars the first weight is above 0. What that divides by goes to the bounds.
func (n *names) weigh(c *Claim, v value, b bounds) (bounds, *Error) {
	if v.shape == absolute && v.inner.Sign() != 0 {
		return b, &Error{Column: v.column, Read: "a number beside the quantities between the bars",
			Expected: "quantities alone, or < and a bound above 0: the rest is written as `within lo .. hi` without bars"}
	}
	weights := make([]float64, len(v.terms))
	for i, t := range v.terms {
		var ok bool
		if weights[i], ok = round(t.weight); !ok {
			return b, &Error{Column: n.places[t.process], Read: "a weight too large or too small",
				Expected: "a weight that float64 can hold"}
		}
	}
	by := one
	switch first := v.terms[0].weight; {
	case len(weights) == 1, len(weights) == 2 && weights[0] < 0 && weights[1] == -weights[0]:
		by = first
	case v.shape == absolute && first.Sign() < 0:
		by = big.NewRat(-1, 1)
	}
	f, _ := by.Float64()
	for i, t := range v.terms {
		c.Terms = append(c.Terms, Term{weights[i] / f, c.mention(n.names[t.process], n.places[t.process])})
	}
	if v.shape == absolute {
		by = new(big.Rat).Abs(by)
	}
	return b.over(by), nil
}

// mention is the index of a process, which is added where it is new.
func (c *Claim) mention(name string, column int) int {
	i := slices.Index(c.Processes, name)
	if i < 0 {
		i = len(c.Processes)
		c.Processes, c.places = append(c.Processes, name), append(c.places, column)
	}
	return i
}

// compare gives the claim its test and bounds, rounded to float64.
func (c *Claim) compare(b bounds, column int) *Error {
	c.Test = b.test
	ok, okHigh := true, true
	if b.test == Within {
		c.Low, ok = round(b.low)
		c.High, okHigh = round(b.high)
		if ok && okHigh && c.Low >= c.High {
			return &Error{Column: column, Read: fmt.Sprintf("bounds that both come to %s", number(c.Low)),
				Expected: "bounds that float64 can tell apart"}
		}
	} else {
		c.Bound, ok = round(b.bound)
	}
	if !ok || !okHigh {
		return &Error{Column: column, Read: "a bound that comes to something too large or too small",
			Expected: "numbers that float64 can hold"}
	}
	return nil
}

// Most processes in a sum of means, a sum of proportions or rates, and a contest: beyond, package
// evidence has no exact route that is quick enough.
const (
	mostMeans    = 12
	mostCounts   = 2
	mostExtremes = 64
)

// route refuses what package evidence has no exact way to weigh.
func (c *Claim) route() *Error {
	n := len(c.Terms)
	refuse := func(term int, read, expected string) *Error {
		return &Error{Column: c.place(c.Terms[term].Process), Read: read, Expected: expected}
	}
	switch {
	case c.Form == Ratio || c.Form == Absolute:
		if c.Test != Within && c.Bound <= 0 || c.Test == Within && c.Low < 0 {
			what := map[Form]string{Ratio: "a ratio", Absolute: "an absolute value"}[c.Form]
			return refuse(0, what+" against a bound that is not above 0", "a bound above 0")
		}
	case c.Form != Linear && c.Kind != Mean && c.Kind != Bias && c.Kind != Proportion && c.Kind != Rate:
		return refuse(1, "max or min of several quantities "+string(c.Kind),
			"max or min of mean, proportion or rate, or the difference of two")
	case c.Form != Linear && n > mostExtremes:
		return refuse(mostExtremes, fmt.Sprintf("%d processes", n), fmt.Sprintf("at most %d", mostExtremes))
	}
	if c.Form != Linear && c.Form != Absolute {
		return nil
	}
	switch c.Kind {
	case Mean, Bias:
		if n > mostMeans {
			return refuse(mostMeans, fmt.Sprintf("a sum of %d quantities %s", n, c.Kind),
				fmt.Sprintf("at most %d", mostMeans))
		}
	case Proportion, Rate:
		if n > mostCounts {
			return refuse(mostCounts, fmt.Sprintf("a sum of %d quantities %s", n, c.Kind),
				fmt.Sprintf("at most %d, or one minus max(...) or min(...) of others", mostCounts))
		}
	case SD, Median:
		if n > 1 {
			return refuse(1, "a sum of two quantities "+string(c.Kind), "one alone, or the ratio of two")
		}
	default:
		if n > 1 {
			return refuse(1, "a second quantity "+string(c.Kind), "one alone")
		}
	}
	if c.Form == Absolute && c.Kind != Mean && c.Kind != Bias && c.Kind != Proportion && c.Kind != Rate {
		return refuse(0, "the absolute value of "+string(c.Kind), "the quantity without bars")
	}
	return nil
}
