package claim

import (
	"math"
	"strings"
)

// String is the canonical form: terms on the left in the order of first mention, weights
// written as products where they are not 1, a bare number on the right, one blank around
// operators, names quoted only where they must be. Parse of it is the same claim.
func (c *Claim) String() string {
	var b strings.Builder
	switch c.Form {
	case Absolute:
		b.WriteString("|")
		c.writeSum(&b)
		b.WriteString("|")
	case Ratio:
		b.WriteString(c.term(0) + " / " + c.term(1))
	case Largest, Smallest:
		name := map[Form]string{Largest: "max", Smallest: "min"}[c.Form]
		b.WriteString(c.term(0) + " - " + name + "(")
		for i := 1; i < len(c.Terms); i++ {
			if i > 1 {
				b.WriteString(", ")
			}
			b.WriteString(c.term(i))
		}
		b.WriteString(")")
	default:
		c.writeSum(&b)
	}
	switch {
	case c.Limits:
		b.WriteString(" within limits")
	case c.Test == Within:
		b.WriteString(" within " + number(c.Low) + " .. " + number(c.High))
	case c.Test == Above:
		b.WriteString(" > " + number(c.Bound))
	default:
		b.WriteString(" < " + number(c.Bound))
	}
	return b.String()
}

// term is term i without its weight.
func (c *Claim) term(i int) string {
	return string(c.Kind) + "(" + quote(c.Processes[c.Terms[i].Process]) + ")"
}

func (c *Claim) writeSum(b *strings.Builder) {
	for i, t := range c.Terms {
		w := t.Weight
		switch {
		case i == 0 && w < 0:
			b.WriteString("-")
		case i > 0 && w < 0:
			b.WriteString(" - ")
		case i > 0:
			b.WriteString(" + ")
		}
		if w = math.Abs(w); w != 1 {
			b.WriteString(number(w) + " * ")
		}
		b.WriteString(c.term(i))
	}
}
