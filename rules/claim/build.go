package claim

import (
	"fmt"
	"math"
	"slices"
)

// times multiplies by a constant.
func (v value) times(by float64) (value, *Error) {
	if by == 0 && v.kind != "" {
		return v, &Error{Column: v.column, Read: "a quantity times 0", Expected: "a factor that is not 0"}
	}
	v.terms = slices.Clone(v.terms)
	if v.form == Linear {
		for i := range v.terms {
			v.terms[i].Weight *= by
		}
	} else {
		v.scale *= by
	}
	v.constant *= by
	if math.IsInf(v.constant, 0) || math.IsNaN(v.constant) {
		return v, &Error{Column: v.column, Read: "a number that grows beyond all bounds", Expected: "numbers that float64 can hold"}
	}
	return v, nil
}

// plus adds two parts.
func (v value) plus(w value) (value, *Error) {
	constant := v.constant + w.constant
	switch {
	case w.kind == "":
		v.constant = constant
		return v, nil
	case v.kind == "":
		w.constant = constant
		return w, nil
	case v.kind != w.kind:
		return v, &Error{Column: w.column, Read: string(w.kind), Expected: string(v.kind) + ": all quantities of a claim are of one kind"}
	case v.form == Linear && w.form == Linear:
		v.terms, v.constant = merge(v.terms, w.terms), constant
		return v, nil
	case v.form == Linear && w.form == Largest:
		return contest(v, w, constant)
	case v.form == Largest && w.form == Linear:
		return contest(w, v, constant)
	}
	return v, &Error{Column: w.column, Read: "a second ratio, absolute value, max or min", Expected: "one alone"}
}

// contest makes one quantity minus the largest, or smallest, of others.
func contest(one, others value, constant float64) (value, *Error) {
	if len(one.terms) != 1 || one.terms[0].Weight != -others.scale || math.Abs(others.scale) != 1 {
		return one, &Error{Column: others.column, Read: "max or min beside other weights",
			Expected: "one quantity minus max(...) or min(...) of others"}
	}
	if len(others.terms)+1 > mostExtremes {
		return one, &Error{Column: others.column, Read: fmt.Sprintf("%d quantities", len(others.terms)+1), Expected: fmt.Sprintf("at most %d", mostExtremes)}
	}
	form := Smallest
	if others.isMax {
		form = Largest
	}
	if slices.ContainsFunc(others.terms, func(t Term) bool { return t.Process == one.terms[0].Process }) {
		return one, &Error{Column: others.column, Read: "the process itself among those it is compared with", Expected: "other processes"}
	}
	terms := append([]Term{{1, one.terms[0].Process}}, others.terms...)
	return value{form: form, kind: one.kind, terms: terms, constant: constant, scale: one.terms[0].Weight, column: one.column}, nil
}

// merge adds up weighted terms, those of one process together.
func merge(a, b []Term) []Term {
	sum := slices.Clone(a)
	for _, t := range b {
		if i := slices.IndexFunc(sum, func(s Term) bool { return s.Process == t.Process }); i >= 0 {
			sum[i].Weight += t.Weight
		} else {
			sum = append(sum, t)
		}
	}
	return sum
}

// over divides by a constant, or makes a ratio.
func (v value) over(w value, column int) (value, *Error) {
	if w.kind == "" {
		if w.constant == 0 {
			return v, &Error{Column: column, Read: "a division by 0", Expected: "a divisor that is not 0"}
		}
		if v.form == Linear {
			v.terms = slices.Clone(v.terms)
			for i := range v.terms {
				v.terms[i].Weight /= w.constant
			}
		} else {
			v.scale /= w.constant
		}
		v.constant /= w.constant
		return v, nil
	}
	single := func(x value) bool {
		return x.form == Linear && len(x.terms) == 1 && x.constant == 0
	}
	if !single(v) || !single(w) || v.kind != w.kind {
		return v, &Error{Column: column, Read: "this quotient", Expected: "one quantity over another of the same kind"}
	}
	if !slices.Contains([]Kind{SD, Median, Proportion, Rate}, v.kind) {
		return v, &Error{Column: column, Read: fmt.Sprintf("a ratio of two quantities %s", v.kind), Expected: "a ratio of sd, median, proportion or rate, or a difference"}
	}
	if v.terms[0].Process == w.terms[0].Process {
		return v, &Error{Column: column, Read: "a process over itself", Expected: "two processes"}
	}
	return value{
		form: Ratio, kind: v.kind, column: v.column, scale: v.terms[0].Weight / w.terms[0].Weight,
		terms: []Term{{1, v.terms[0].Process}, {1, w.terms[0].Process}},
	}, nil
}

// build makes the claim that the quantity, with everything on the left, passes the test
// against 0, or lies within low and high.
func (p *parser) build(v value, test Test, low, high float64) (*Claim, *Error) {
	if v.kind == "" {
		return nil, &Error{Column: 1, Read: "a claim without a quantity", Expected: "a quantity such as mean(head.L1)"}
	}
	c := &Claim{Kind: v.kind, Form: v.form, Test: test, Terms: v.terms}
	bound := -v.constant
	low, high = low-v.constant, high-v.constant
	scale := 1.0
	switch v.form {
	case Linear:
		c.Terms = slices.DeleteFunc(slices.Clone(v.terms), func(t Term) bool { return t.Weight == 0 })
		if len(c.Terms) == 0 {
			return nil, &Error{Column: v.column, Read: "quantities that cancel out", Expected: "a quantity that is left"}
		}
		// One quantity alone, or a plain difference, is written with weight 1 in front.
		if w := c.Terms[0].Weight; len(c.Terms) == 1 || w < 0 && len(c.Terms) == 2 && c.Terms[1].Weight == -w {
			scale = w
			for i := range c.Terms {
				c.Terms[i].Weight /= w
			}
		}
	default:
		scale = v.scale
	}
	if scale < 0 {
		c.Test = [...]Test{Below, Above, Within}[test]
	}
	bound, low, high = bound/scale, low/scale, high/scale
	if low > high {
		low, high = high, low
	}
	if test == Within {
		c.Low, c.High = low+0, high+0
	} else {
		c.Bound = bound + 0 // turns -0 into 0
	}
	if !finite(c.Bound) || !finite(c.Low) || !finite(c.High) {
		return nil, &Error{Column: v.column, Read: "a bound that grows beyond all bounds", Expected: "numbers that float64 can hold"}
	}
	p.renumber(c)
	return c, c.route(v.column)
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }

// renumber lists only the processes that are left, in the order of the terms.
func (p *parser) renumber(c *Claim) {
	terms := slices.Clone(c.Terms)
	for i, t := range terms {
		name := p.names[t.Process]
		j := slices.Index(c.Processes, name)
		if j < 0 {
			j = len(c.Processes)
			c.Processes = append(c.Processes, name)
			c.places = append(c.places, p.places[t.Process])
		}
		terms[i].Process = j
	}
	c.Terms = terms
}

// route refuses what the engine has no exact way to weigh.
func (c *Claim) route(column int) *Error {
	refuse := func(read, expected string) *Error {
		return &Error{Column: column, Read: read, Expected: expected}
	}
	n := len(c.Terms)
	if c.Form == Ratio {
		if c.Test != Within && c.Bound <= 0 || c.Test == Within && c.Low < 0 {
			return refuse("a ratio against a bound that is not above 0", "a bound above 0")
		}
		return nil
	}
	switch c.Kind {
	case Mean, Bias:
		if c.Form == Largest || c.Form == Smallest {
			return refuse("max or min of means", "differences of two means: no exact route for more has been built yet")
		}
		if n > mostTerms {
			return refuse(fmt.Sprintf("a contrast of %d means", n), fmt.Sprintf("at most %d", mostTerms))
		}
	case Proportion, Rate:
		if (c.Form == Linear || c.Form == Absolute) && n > 2 {
			return refuse(fmt.Sprintf("%d quantities %s", n, c.Kind), "one, or two with weights")
		}
	default:
		if c.Form != Linear || n != 1 {
			what := "one alone"
			if c.Kind == SD || c.Kind == Median {
				what = "one alone, or the ratio of two"
			}
			return refuse(fmt.Sprintf("more than one %s", c.Kind), what)
		}
	}
	if c.Form == Absolute && (c.Test != Within && c.Bound <= 0 || c.Test == Within && c.Low < 0) {
		return refuse("an absolute value against a bound that is not above 0", "a bound above 0")
	}
	return nil
}
