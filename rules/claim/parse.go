package claim

import (
	"fmt"
	"math"
	"slices"
	"strconv"
)

// deepest is how far parentheses may nest.
const deepest = 64

// Most processes that a contrast of means, and a largest or smallest of proportions or rates,
// may have.
const (
	mostTerms    = 2 // no exact route for more has been built yet
	mostExtremes = 64
)

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
// weights; one ratio of two; one absolute value; one quantity against the largest or smallest
// of others. Terms on the right move to the left, constants on the left to the right. The
// error is an *Error.
func Parse(text string) (*Claim, error) {
	tokens, err := lex(text)
	if err != nil {
		return nil, err
	}
	p := &parser{tokens: tokens}
	c, err := p.claim()
	if err != nil {
		return nil, err
	}
	return c, nil
}

type parser struct {
	tokens []token
	at     int
	depth  int
	names  []string
	places []int // column of the first mention of each name
}

// value is what a part of a claim comes to.
type value struct {
	form     Form
	kind     Kind // empty for a constant
	terms    []Term
	constant float64
	isMax    bool    // of the form Largest, before it is known what stands against it: max, not min
	scale    float64 // of an absolute value or a ratio: its sign and factor
	column   int
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
	right, err = right.times(-1)
	if err != nil {
		return nil, err
	}
	all, err := left.plus(right)
	if err != nil {
		return nil, err
	}
	return p.build(all, test, 0, 0)
}

func (p *parser) within(left value) (*Claim, *Error) {
	if t := p.peek(); t.kind == tokenWord && t.text == "limits" {
		p.at++
		if err := p.end(); err != nil {
			return nil, err
		}
		c, err := p.build(left, Within, 0, 0)
		if err != nil {
			return nil, err
		}
		if c.Form != Linear || len(c.Terms) != 1 || c.Terms[0].Weight != 1 || left.constant != 0 || (c.Kind != Next && c.Kind != Mean && c.Kind != Median) {
			return nil, &Error{Column: t.column, Read: `"limits"`, Expected: "two numbers: limits belong to one mean, median or next unit"}
		}
		c.Limits, c.Low, c.High = true, math.Inf(-1), math.Inf(1)
		return c, nil
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
	if !(low < high) {
		return nil, &Error{Column: column, Read: number(high), Expected: "a bound above " + number(low)}
	}
	return p.build(left, Within, low, high)
}

// constant reads a sum that must come to a number.
func (p *parser) constant() (float64, *Error) {
	t := p.peek()
	v, err := p.sum()
	if err != nil {
		return 0, err
	}
	if v.kind != "" {
		return 0, &Error{Column: t.column, Read: t.read(), Expected: "a number"}
	}
	return v.constant, nil
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
				if w, err = w.times(-1); err == nil {
					v, err = v.plus(w)
				}
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
			case w.kind == "":
				v, err = v.times(w.constant)
			case v.kind == "":
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
		x, err := strconv.ParseFloat(t.text, 64)
		if err != nil || math.IsInf(x, 0) {
			return value{}, &Error{Column: t.column, Read: t.read(), Expected: "a number that float64 can hold"}
		}
		return value{constant: x, column: t.column}, nil
	case p.sign("-"):
		v, err := p.factor()
		if err != nil {
			return v, err
		}
		return v.times(-1)
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
	if v.form != Linear || v.kind == "" {
		return v, &Error{Column: t.column, Read: "the absolute value", Expected: "a difference of quantities between the bars"}
	}
	if v.constant != 0 {
		return v, &Error{Column: t.column, Read: "a number beside the quantities between the bars", Expected: "quantities alone; write the bounds as `within lo .. hi` without bars"}
	}
	v.form, v.scale, v.column = Absolute, 1, t.column
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
	i := slices.Index(p.names, name.text)
	if i < 0 {
		i = len(p.names)
		p.names, p.places = append(p.names, name.text), append(p.places, name.column)
	}
	return value{kind: Kind(t.text), terms: []Term{{1, i}}, column: t.column}, nil
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
	v := value{form: Largest, isMax: t.text == "max", scale: 1, column: t.column}
	for {
		at := p.peek()
		w, err := p.sum()
		if err != nil {
			return v, err
		}
		if w.form != Linear || len(w.terms) != 1 || w.terms[0].Weight != 1 || w.constant != 0 {
			return v, &Error{Column: at.column, Read: at.read(), Expected: "single quantities between the commas"}
		}
		if v.kind != "" && w.kind != v.kind {
			return v, &Error{Column: at.column, Read: string(w.kind), Expected: string(v.kind) + ", as the first one is"}
		}
		v.kind, v.terms = w.kind, append(v.terms, w.terms...)
		if p.sign(",") {
			continue
		}
		return v, p.expect(")", `"," or ")"`)
	}
}

func number(x float64) string { return strconv.FormatFloat(x, 'g', -1, 64) }
