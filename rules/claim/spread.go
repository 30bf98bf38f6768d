package claim

import (
	"math/big"
	"slices"
)

// This and Others are the names that stand for each line in turn, and for the rest of them,
// in a rule spread over the lines of a characteristic.
const (
	This   = "this"
	Others = "others"
)

// IsSpread says whether the claim speaks of this or others.
func (c *Claim) IsSpread() bool {
	return slices.Contains(c.Processes, This) || slices.Contains(c.Processes, Others)
}

// Spread writes the claim out for one line of a characteristic: `this` is that line, and
// `others` the equal-weight average of the rest or, within max and min, each of the rest; in a
// ratio there must be one other line alone. The result is in canonical form and not yet bound.
// The error is an *Error at the place in the claim that does not fit this line: a claim that
// names a line outright, such as mean(this) - mean(head.L1) > 0.4, does not fit that line.
func (c *Claim) Spread(characteristic, line string, lines []string) (*Claim, error) {
	s := spreading{from: c, characteristic: characteristic, line: line}
	s.rest = slices.DeleteFunc(slices.Clone(lines), func(l string) bool { return l == line })
	v, err := s.value()
	if err != nil {
		return nil, err
	}
	b := bounds{test: c.Test, bound: rat(c.Bound)}
	if c.Test == Within && !c.Limits {
		b.low, b.high = rat(c.Low), rat(c.High)
	} else {
		b.low, b.high = new(big.Rat), one // stand in for limits
	}
	out, err := s.names.build(v, b)
	if err != nil {
		return nil, err
	}
	if c.Limits {
		out.Limits, out.Low, out.High = true, c.Low, c.High
	}
	return out, nil
}

// spreading is a claim being written out for one line.
type spreading struct {
	from                 *Claim
	characteristic, line string
	rest                 []string // the other lines
	names                names
}

// value puts the claim together again, of processes instead of this and others.
func (s *spreading) value() (value, *Error) {
	c := s.from
	parts := make([][]weighted, len(c.Terms))
	for i, t := range c.Terms {
		var err *Error
		if parts[i], err = s.part(t, (c.Form == Largest || c.Form == Smallest) && i > 0); err != nil {
			return value{}, err
		}
	}
	whole := func(terms []weighted) value {
		v := constantValue(new(big.Rat), 1)
		v.kind, v.terms = c.Kind, terms
		return v
	}
	switch c.Form {
	case Ratio:
		return whole(parts[0]).over(whole(parts[1]), c.place(c.Terms[1].Process))
	case Largest, Smallest:
		v := whole(unique(slices.Concat(parts[1:]...)))
		v.column = c.place(c.Terms[1].Process)
		return whole(parts[0]).plus(v.extreme(c.Form == Largest).negated())
	}
	var terms []weighted
	for _, p := range parts {
		terms = merge(terms, p)
	}
	v := whole(terms)
	if c.Form == Absolute {
		v.shape = absolute
	}
	return v, nil
}

// part is what one term becomes.
func (s *spreading) part(t Term, competes bool) ([]weighted, *Error) {
	name, column := s.from.Processes[t.Process], s.from.place(t.Process)
	weight := rat(t.Weight)
	switch {
	case name == This:
		return []weighted{{weight, s.names.index(s.characteristic+"."+s.line, column)}}, nil
	case name != Others:
		return []weighted{{weight, s.names.index(name, column)}}, nil
	case len(s.rest) == 0:
		return nil, &Error{Column: column, Read: Others, Expected: "a characteristic with more than one line"}
	case len(s.rest) > 1 && !competes && s.from.Form != Linear && s.from.Form != Absolute:
		return nil, &Error{Column: column, Read: Others, Expected: "others in a sum or difference, or within max or min"}
	}
	if !competes {
		weight.Quo(weight, big.NewRat(int64(len(s.rest)), 1))
	}
	var terms []weighted
	for _, l := range s.rest {
		terms = append(terms, weighted{weight, s.names.index(s.characteristic+"."+l, column)})
	}
	return terms, nil
}

// unique leaves out what has been there before.
func unique(terms []weighted) (first []weighted) {
	for _, t := range terms {
		if !slices.ContainsFunc(first, func(f weighted) bool { return f.process == t.process }) {
			first = append(first, t)
		}
	}
	return first
}

// extreme makes max or min of quantities; of one quantity it is that quantity.
func (v value) extreme(isMax bool) value {
	if len(v.terms) > 1 {
		v.shape, v.isMax = extreme, isMax
	}
	return v
}
