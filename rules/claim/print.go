package claim

import (
	"math"
	"strings"
)

// String is the canonical form, of which Parse makes the same claim again:
//
//   - processes in the order of first mention, each once in a sum;
//   - one quantity alone, or the first of a plain difference, with weight 1; other weights as
//     they were, written as products; within bars, the first weight above 0;
//   - on the right a bare number, or two with ".." between, as the shortest decimal that is the
//     float64; one blank around operators; names quoted only where they must be.
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
