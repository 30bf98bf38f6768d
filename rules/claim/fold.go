package claim

import (
	"fmt"
	"math"
	"math/big"
	"slices"
)

// shape is what a part of a claim has come to so far.
type shape int

const (
	sum      shape = iota // weighted quantities and a constant; a bare constant has no quantities
	absolute              // the absolute value of one
	ratio                 // of two quantities
	extreme               // max or min of quantities, before it is known what stands against them
	contest               // one quantity minus such an extreme
)

// value is what a part of a claim comes to: a shape times scale, plus constant. Numbers are
// exact here, as they were written, and are rounded to float64 once the claim is whole: so
// 0.1 + 0.2 is 0.3, and nothing is lost or grows beyond bounds on the way.
type value struct {
	shape    shape
	kind     Kind // empty for a constant
	terms    []weighted
	scale    *big.Rat // 1 for a sum, whose weights carry it
	constant *big.Rat
	inner    *big.Rat // of an absolute value: the constant between the bars
	isMax    bool     // of an extreme or a contest: max, not min
	column   int      // of its beginning
}

// weighted is a quantity with its exact weight; process is an index into the parser's names.
type weighted struct {
	weight  *big.Rat
	process int
}

var one = big.NewRat(1, 1)

func rat(x float64) *big.Rat { return new(big.Rat).SetFloat64(x) }

func constantValue(x *big.Rat, column int) value {
	return value{scale: one, constant: x, inner: new(big.Rat), column: column}
}

func quantityValue(kind Kind, process, column int) value {
	v := constantValue(new(big.Rat), column)
	v.kind, v.terms = kind, []weighted{{one, process}}
	return v
}

func (v value) isConstant() bool { return v.kind == "" }

// isSingle says whether v is one quantity times a constant.
func (v value) isSingle() bool {
	return v.shape == sum && len(v.terms) == 1 && v.constant.Sign() == 0
}

// mostBits is how long a numerator or denominator may get: ten times what any float64 needs.
const mostBits = 1 << 14

// checked refuses numbers that have become so long that work on them would take time.
func (v value) checked() (value, *Error) {
	long := func(x *big.Rat) bool { return x.Num().BitLen() > mostBits || x.Denom().BitLen() > mostBits }
	if long(v.constant) || long(v.scale) || long(v.inner) ||
		slices.ContainsFunc(v.terms, func(t weighted) bool { return long(t.weight) }) {
		return v, &Error{Column: v.column, Read: "numbers that come to something too large or too small",
			Expected: "numbers that float64 can hold"}
	}
	return v, nil
}

// times multiplies by a constant.
func (v value) times(by *big.Rat) (value, *Error) {
	if by.Sign() == 0 && !v.isConstant() {
		return v, &Error{Column: v.column, Read: "a quantity times 0", Expected: "a factor that is not 0"}
	}
	v.constant = new(big.Rat).Mul(v.constant, by)
	if v.shape == sum {
		v.terms = slices.Clone(v.terms)
		for i, t := range v.terms {
			v.terms[i].weight = new(big.Rat).Mul(t.weight, by)
		}
	} else {
		v.scale = new(big.Rat).Mul(v.scale, by)
	}
	return v.checked()
}

func (v value) negated() value {
	v, _ = v.times(big.NewRat(-1, 1)) // no longer than it was
	return v
}

// plus adds two parts.
func (v value) plus(w value) (value, *Error) {
	constant := new(big.Rat).Add(v.constant, w.constant)
	switch {
	case w.isConstant():
		v.constant = constant
		return v.checked()
	case v.isConstant():
		w.constant = constant
		return w.checked()
	case v.kind != w.kind:
		return v, &Error{Column: w.column, Read: string(w.kind),
			Expected: string(v.kind) + ": all quantities of a claim are of one kind"}
	case v.shape == sum && w.shape == sum:
		v.terms, v.constant = merge(v.terms, w.terms), constant
		return v.checked()
	case v.shape == sum && w.shape == extreme:
		return against(v, w, constant)
	case v.shape == extreme && w.shape == sum:
		return against(w, v, constant)
	}
	return v, &Error{Column: w.column, Read: "another part beside a ratio, an absolute value, max or min",
		Expected: "a ratio or an absolute value alone, or one quantity minus max(...) or min(...) of others"}
}

// merge adds up weighted terms, those of one process together.
func merge(a, b []weighted) []weighted {
	all := slices.Clone(a)
	for _, t := range b {
		i := slices.IndexFunc(all, func(s weighted) bool { return s.process == t.process })
		if i < 0 {
			all = append(all, t)
			continue
		}
		all[i].weight = new(big.Rat).Add(all[i].weight, t.weight)
	}
	return all
}

// against makes the contest of one quantity with the largest, or smallest, of others.
func against(single, others value, constant *big.Rat) (value, *Error) {
	if len(single.terms) != 1 || new(big.Rat).Neg(single.terms[0].weight).Cmp(others.scale) != 0 {
		return single, &Error{Column: others.column, Read: "max or min beside other weights",
			Expected: "one quantity minus max(...) or min(...) of others"}
	}
	subject := single.terms[0]
	if slices.ContainsFunc(others.terms, func(t weighted) bool { return t.process == subject.process }) {
		return single, &Error{Column: others.column, Read: "the process itself among those it is compared with",
			Expected: "other processes"}
	}
	terms := append([]weighted{{one, subject.process}}, others.terms...)
	return value{shape: contest, kind: single.kind, terms: terms, scale: subject.weight, constant: constant,
		inner: new(big.Rat), isMax: others.isMax, column: min(single.column, others.column)}.checked()
}

// over divides by a constant, or makes a ratio. Column is that of the stroke.
func (v value) over(w value, column int) (value, *Error) {
	switch {
	case w.isConstant() && w.constant.Sign() == 0:
		return v, &Error{Column: column, Read: "a division by 0", Expected: "a divisor that is not 0"}
	case w.isConstant():
		return v.times(new(big.Rat).Inv(w.constant))
	case !v.isSingle() || !w.isSingle() || v.kind != w.kind:
		return v, &Error{Column: column, Read: "this quotient", Expected: "one quantity over another of the same kind"}
	case !slices.Contains([]Kind{SD, Median, Proportion, Rate}, v.kind):
		return v, &Error{Column: column, Read: fmt.Sprintf("a ratio of two quantities %s", v.kind),
			Expected: "a ratio of sd, median, proportion or rate, or a difference"}
	case v.terms[0].process == w.terms[0].process:
		return v, &Error{Column: column, Read: "a process over itself", Expected: "two processes"}
	}
	return value{
		shape: ratio, kind: v.kind, column: v.column, constant: new(big.Rat), inner: new(big.Rat),
		scale: new(big.Rat).Quo(v.terms[0].weight, w.terms[0].weight),
		terms: []weighted{{one, v.terms[0].process}, {one, w.terms[0].process}},
	}.checked()
}

// round is the float64 nearest to x; false where that is infinite, or 0 for an x that is not.
func round(x *big.Rat) (float64, bool) {
	f, _ := x.Float64()
	return f, !math.IsInf(f, 0) && (f != 0 || x.Sign() == 0)
}
