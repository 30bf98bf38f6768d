package claim

import (
	"fmt"
	"math"
	"math/big"
	"slices"
	"strconv"
	"strings"
)

// deepest is how far parentheses may nest.
const deepest = 64

// kinds are the quantities in the order in which errors list them.
var kinds = []Kind{Mean, SD, Next, Outside, Capability, Median, Proportion, Rate, Bias}

// Parse reads a claim:
//
//	claim    = sum ( "<" | ">" ) sum | sum "within" ( sum ".." sum | "limits" ) .
//	sum      = product { ( "+" | "-" ) product } .
//	product  = factor { ( "*" | "/" ) factor } .
//	factor   = number | kind "(" name ")" | ( "max" | "min" ) "(" sum { "," sum } ")"
//	         | "|" sum "|" | "(" sum ")" | ( "+" | "-" ) factor .
//
// What it says must come to one of the Forms: quantities of one kind, summed with constant
// weights; one ratio of two; one absolute value; one quantity minus the largest or smallest of
// others. Terms on the right move to the left, constants on the left to the right. Numbers are
// taken as they are written, in decimal, and rounded to float64 at the end. Two forms are
// read as others that say the same: |q - k| < d as q within k-d .. k+d, and sd(a) > r*sd(b) as a
// ratio (median likewise). The error is an *Error.
func Parse(text string) (*Claim, error) {
	tokens, err := lex(text)
	if err != nil {
		return nil, err
	}
	p := &parser{tokens: tokens}
	c, err := p.claim()
	if err != nil {
		return nil, err // not c, err: a nil *Error is not a nil error
	}
	return c, nil
}

type parser struct {
	tokens []token
	at     int
	depth  int
	names  names
}

func (p *parser) peek() token { return p.tokens[p.at] }

func (p *parser) sign(text string) bool {
	if t := p.peek(); t.kind == tokenSign && t.text == text {
		p.at++
		return true
	}
	return false
}

func (p *parser) expect(text, what string) *Error {
	if !p.sign(text) {
		return &Error{Column: p.peek().column, Read: p.peek().read(), Expected: what}
	}
	return nil
}

func (p *parser) claim() (*Claim, *Error) {
	left, err := p.sum()
	if err != nil {
		return nil, err
	}
	t := p.peek()
	switch {
	case p.sign(">"):
		return p.compare(left, Above)
	case p.sign("<"):
		return p.compare(left, Below)
	case t.kind == tokenWord && t.text == "within":
		p.at++
		return p.within(left)
	}
	return nil, &Error{Column: t.column, Read: t.read(), Expected: `a comparison: "<", ">" or "within"`}
}

func (p *parser) end() *Error {
	if t := p.peek(); t.kind != tokenEnd {
		return &Error{Column: t.column, Read: t.read(), Expected: "the end of the claim"}
	}
	return nil
}

func (p *parser) compare(left value, test Test) (*Claim, *Error) {
	right, err := p.sum()
	if err == nil {
		err = p.end()
	}
	if err != nil {
		return nil, err
	}
	if left.isConstant() { // 0.4 < q reads as q > 0.4
		left, right, test = right, left, test.turned()
	}
	all, err := left.plus(right.negated())
	if err != nil {
		return nil, err
	}
	return p.names.build(all, bounds{test: test, bound: new(big.Rat)})
}

func (p *parser) within(left value) (*Claim, *Error) {
	if t := p.peek(); t.kind == tokenWord && t.text == "limits" {
		p.at++
		return p.withinLimits(left, t)
	}
	low, err := p.constant()
	if err == nil {
		err = p.expect("..", `".." between the two bounds`)
	}
	if err != nil {
		return nil, err
	}
	column := p.peek().column
	high, err := p.constant()
	if err == nil {
		err = p.end()
	}
	if err != nil {
		return nil, err
	}
	if low.Cmp(high) >= 0 {
		l, _ := low.Float64()
		h, _ := high.Float64()
		return nil, &Error{Column: column, Read: number(h), Expected: "a bound above " + number(l)}
	}
	return p.names.build(left, bounds{test: Within, low: low, high: high})
}

func (p *parser) withinLimits(left value, t token) (*Claim, *Error) {
	if err := p.end(); err != nil {
		return nil, err
	}
	// The bounds stand in until Bind knows the limits.
	c, err := p.names.build(left, bounds{test: Within, low: new(big.Rat), high: one})
	if err != nil {
		return nil, err
	}
	if !left.isSingle() || left.terms[0].weight.Cmp(one) != 0 || !slices.Contains([]Kind{Next, Mean, Median}, c.Kind) {
		return nil, &Error{Column: t.column, Read: `"limits"`,
			Expected: "two numbers: limits belong to one mean, median or next unit"}
	}
	c.Limits, c.Low, c.High = true, math.Inf(-1), math.Inf(1)
	return c, nil
}

// constant reads a sum that must come to a number.
func (p *parser) constant() (*big.Rat, *Error) {
	t := p.peek()
	v, err := p.sum()
	if err == nil && !v.isConstant() {
		err = &Error{Column: t.column, Read: t.read(), Expected: "a number"}
	}
	return v.constant, err
}

func (p *parser) sum() (value, *Error) {
	v, err := p.product()
	for err == nil {
		switch {
		case p.sign("+"):
			var w value
			if w, err = p.product(); err == nil {
				v, err = v.plus(w)
			}
		case p.sign("-"):
			var w value
			if w, err = p.product(); err == nil {
				v, err = v.plus(w.negated())
			}
		default:
			return v, nil
		}
	}
	return v, err
}

func (p *parser) product() (value, *Error) {
	v, err := p.factor()
	for err == nil {
		t := p.peek()
		switch {
		case p.sign("*"):
			var w value
			if w, err = p.factor(); err != nil {
				return v, err
			}
			switch {
			case w.isConstant():
				v, err = v.times(w.constant)
			case v.isConstant():
				v, err = w.times(v.constant)
			default:
				err = &Error{Column: t.column, Read: "a product of two quantities", Expected: "a product of a quantity and a number"}
			}
		case p.sign("/"):
			var w value
			if w, err = p.factor(); err == nil {
				v, err = v.over(w, t.column)
			}
		default:
			return v, nil
		}
	}
	return v, err
}

func (p *parser) factor() (value, *Error) {
	p.depth++
	defer func() { p.depth-- }()
	t := p.peek()
	if p.depth > deepest {
		return value{}, &Error{Column: t.column, Read: t.read(), Expected: fmt.Sprintf("at most %d levels of nesting", deepest)}
	}
	switch {
	case t.kind == tokenNumber:
		p.at++
		x, err := exact(t)
		return constantValue(x, t.column), err
	case p.sign("-"):
		v, err := p.factor()
		if err != nil {
			return v, err
		}
		v.column = t.column
		return v.negated(), nil
	case p.sign("+"):
		return p.factor()
	case p.sign("("):
		v, err := p.sum()
		if err == nil {
			err = p.expect(")", `")"`)
		}
		return v, err
	case p.sign("|"):
		return p.absolute(t)
	case t.kind == tokenWord:
		return p.quantity(t)
	}
	return value{}, &Error{Column: t.column, Read: t.read(), Expected: "a quantity such as mean(head.L1), or a number"}
}

func (p *parser) absolute(t token) (value, *Error) {
	v, err := p.sum()
	if err == nil {
		err = p.expect("|", `a closing "|"`)
	}
	if err != nil {
		return v, err
	}
	if v.isConstant() {
		v.constant = new(big.Rat).Abs(v.constant)
		return v, nil
	}
	if v.shape != sum {
		return v, &Error{Column: t.column, Read: "the absolute value of a ratio, an absolute value, max or min",
			Expected: "a sum or difference between the bars"}
	}
	v.shape, v.column = absolute, t.column
	v.inner, v.constant = v.constant, new(big.Rat)
	return v, nil
}

// quantity reads kind(name), max(...) or min(...).
func (p *parser) quantity(t token) (value, *Error) {
	p.at++
	isExtreme := t.text == "max" || t.text == "min"
	if !isExtreme && !slices.Contains(kinds, Kind(t.text)) {
		words := []string{"max", "min"}
		for _, k := range kinds {
			words = append(words, string(k))
		}
		return value{}, &Error{Column: t.column, Read: t.read(), Expected: "a quantity: " + joinKinds(), Nearest: Nearest(t.text, words)}
	}
	if err := p.expect("(", `"(" after `+t.text); err != nil {
		return value{}, err
	}
	if isExtreme {
		return p.extremes(t)
	}
	name := p.peek()
	if name.kind != tokenWord && name.kind != tokenName || name.text == "" {
		return value{}, &Error{Column: name.column, Read: name.read(), Expected: "the name of a process, such as head.L1"}
	}
	p.at++
	if err := p.expect(")", `")" after the name`); err != nil {
		return value{}, err
	}
	return quantityValue(Kind(t.text), p.names.index(name.text, name.column), t.column), nil
}

func joinKinds() string {
	text := ""
	for i, k := range kinds {
		if i > 0 {
			text += ", "
		}
		text += string(k)
	}
	return text + ", or max(...) and min(...) of one of them"
}

// extremes reads the arguments of max or min.
func (p *parser) extremes(t token) (value, *Error) {
	all := constantValue(new(big.Rat), t.column)
	for {
		at := p.peek()
		w, err := p.sum()
		if err != nil {
			return w, err
		}
		if !w.isSingle() || w.terms[0].weight.Cmp(one) != 0 {
			return w, &Error{Column: at.column, Read: at.read(), Expected: "single quantities between the commas"}
		}
		if !all.isConstant() && w.kind != all.kind {
			return w, &Error{Column: at.column, Read: string(w.kind), Expected: string(all.kind) + ", as the first one is"}
		}
		all.kind, all.terms = w.kind, append(all.terms, w.terms...)
		if p.sign(",") {
			continue
		}
		all.terms = unique(all.terms)
		if p.names.names[all.terms[0].process] == Others {
			all.shape = extreme // of one name that stands for several
			all.isMax = t.text == "max"
		}
		return all.extreme(t.text == "max"), p.expect(")", `"," or ")"`)
	}
}

// exact is the number a token stands for, which must be one that float64 can hold.
func exact(t token) (*big.Rat, *Error) {
	f, err := strconv.ParseFloat(t.text, 64)
	x := new(big.Rat)
	switch zero := strings.Trim(t.text[:mantissa(t.text)], "0.") == ""; {
	case err == nil && zero:
		return x, nil
	case err == nil && f != 0:
		if _, ok := x.SetString(t.text); ok {
			return x, nil
		}
	}
	return x, &Error{Column: t.column, Read: t.read(), Expected: "a number that float64 can hold"}
}

// mantissa is where the exponent of a number begins, or its end.
func mantissa(text string) int {
	if i := strings.IndexAny(text, "eE"); i >= 0 {
		return i
	}
	return len(text)
}

func number(x float64) string { return strconv.FormatFloat(x, 'g', -1, 64) }
