package claim

import (
	"fmt"
	"math"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// written is a part of a claim as text, and what it comes to where the quantities have given
// values: another way to read the text, against which Parse is held.
type written struct {
	text string
	at   func(q map[string]float64) float64
}

// writer makes random parts about quantities of one kind.
type writer struct {
	t     *rapid.T
	kind  Kind
	names []string
}

func (w writer) number() written {
	x := rapid.Float64Range(-100, 100).Draw(w.t, "number")
	format := rapid.SampledFrom([]string{"%g", "%.3f", "%.2e", "+%.1f"}).Draw(w.t, "format")
	if strings.HasPrefix(format, "+") {
		x = math.Abs(x)
	}
	text := fmt.Sprintf(format, x)
	if _, err := fmt.Sscan(text, &x); err != nil {
		w.t.Fatal(err)
	}
	return written{text, func(map[string]float64) float64 { return x }}
}

// factor is a number above 0, so that no weight vanishes.
func (w writer) factor() written {
	n := rapid.IntRange(1, 99).Draw(w.t, "factor")
	return written{fmt.Sprint(n), func(map[string]float64) float64 { return float64(n) }}
}

func (w writer) quantity(name string) written {
	return written{fmt.Sprintf("%s(%s)", w.kind, quote(name)), func(q map[string]float64) float64 { return q[name] }}
}

// linear is a sum of quantities and numbers, at most so deep.
func (w writer) linear(depth int) written {
	if depth == 0 {
		return w.quantity(rapid.SampledFrom(w.names).Draw(w.t, "name"))
	}
	a := w.linear(depth - 1)
	switch rapid.IntRange(0, 7).Draw(w.t, "operator") {
	case 0:
		b := w.linear(depth - 1)
		return written{a.text + "+" + b.text, func(q map[string]float64) float64 { return a.at(q) + b.at(q) }}
	case 1:
		b := w.linear(depth - 1)
		return written{a.text + " - (" + b.text + ")", func(q map[string]float64) float64 { return a.at(q) - b.at(q) }}
	case 2:
		b := w.factor()
		return written{"(" + a.text + ") * " + b.text, func(q map[string]float64) float64 { return a.at(q) * b.at(q) }}
	case 3:
		b := w.factor()
		return written{b.text + "*(" + a.text + ")", func(q map[string]float64) float64 { return a.at(q) * b.at(q) }}
	case 4:
		b := w.factor()
		return written{"(" + a.text + ")/" + b.text, func(q map[string]float64) float64 { return a.at(q) / b.at(q) }}
	case 5:
		return written{"-(" + a.text + ")", func(q map[string]float64) float64 { return -a.at(q) }}
	case 6:
		b := w.number()
		return written{a.text + " + " + b.text, func(q map[string]float64) float64 { return a.at(q) + b.at(q) }}
	}
	return a
}

// side is the left of a claim in any of the forms.
func (w writer) side() written {
	a, b := w.quantity(w.names[0]), w.quantity(w.names[1])
	switch form := rapid.IntRange(0, 4).Draw(w.t, "form"); form {
	case 0:
		l := w.linear(2)
		return written{"|" + l.text + "|", func(q map[string]float64) float64 { return math.Abs(l.at(q)) }}
	case 1:
		n, m := w.factor(), w.factor()
		return written{n.text + "*" + a.text + " / (" + b.text + "*" + m.text + ")",
			func(q map[string]float64) float64 { return n.at(q) * a.at(q) / (b.at(q) * m.at(q)) }}
	case 2, 3:
		c, word, pick := w.quantity("c c"), "max", math.Max
		if form == 3 {
			word, pick = "min", math.Min
		}
		return written{fmt.Sprintf("%s - %s(%s, %s)", a.text, word, b.text, c.text),
			func(q map[string]float64) float64 { return a.at(q) - pick(b.at(q), c.at(q)) }}
	}
	return w.linear(4)
}

// quantityAt is what a claim's left side comes to, by the meaning of its Form.
func (c *Claim) quantityAt(q map[string]float64) float64 {
	at := func(i int) float64 { return c.Terms[i].Weight * q[c.Processes[c.Terms[i].Process]] }
	total, largest, smallest := 0.0, math.Inf(-1), math.Inf(1)
	for i := range c.Terms {
		total += at(i)
		if i > 0 {
			largest, smallest = math.Max(largest, at(i)), math.Min(smallest, at(i))
		}
	}
	switch c.Form {
	case Absolute:
		return math.Abs(total)
	case Ratio:
		return at(0) / at(1)
	case Largest:
		return at(0) - largest
	case Smallest:
		return at(0) - smallest
	}
	return total
}

// margin is how far inside (above 0) or outside (below 0) of its bounds a quantity is.
func margin(test Test, x, bound, low, high float64) float64 {
	switch test {
	case Above:
		return x - bound
	case Below:
		return bound - x
	}
	return math.Min(x-low, high-x)
}

// A claim holds of given quantities exactly where its text, worked out directly, does; and Parse
// of its canonical form is the same claim.
func TestParseKeepsTheMeaning(t *testing.T) {
	accepted := 0
	rapid.Check(t, func(t *rapid.T) {
		w := writer{t, rapid.SampledFrom([]Kind{Mean, SD, Median, Proportion, Rate, Bias}).Draw(t, "kind"), []string{"a.L1", "b \"\\.2"}}
		left, right := w.side(), w.number()
		other := right.at(nil) + rapid.Float64Range(0.5, 50).Draw(t, "width")
		test := Test(rapid.IntRange(0, 2).Draw(t, "test"))
		var text string
		switch {
		case test == Within:
			text = fmt.Sprintf("%s within %s .. %v", left.text, right.text, other)
		case rapid.Bool().Draw(t, "turned"):
			text = fmt.Sprintf("%s %s %s", right.text, [...]string{"<", ">"}[test], left.text)
		default:
			text = fmt.Sprintf("%s %s %s", left.text, [...]string{">", "<"}[test], right.text)
		}
		c, err := Parse(text)
		if err != nil {
			if err.(*Error).Column > len([]rune(text))+1 {
				t.Fatalf("%q: %v", text, err)
			}
			return
		}
		accepted++
		sameAgain(t, c)
		for range 20 {
			q := map[string]float64{}
			for _, name := range append([]string{"c c"}, w.names...) {
				q[name] = rapid.Float64Range(0.01, 50).Draw(t, name) // every kind may be above 0
			}
			x := left.at(q)
			wrote := margin(test, x, right.at(q), right.at(q), other)
			read := margin(c.Test, c.quantityAt(q), c.Bound, c.Low, c.High)
			if math.Abs(wrote) > 1e-6*(1+math.Abs(x)) && (wrote > 0) != (read > 0) {
				t.Fatalf("%q reads as %q, of which %v says otherwise: %v and %v", text, c, q, wrote, read)
			}
		}
	})
	if accepted < 20 {
		t.Errorf("only %d random claims were accepted", accepted)
	}
}

// Whatever the bytes, Parse does not panic, points into the text, and reads what it prints.
func FuzzParse(f *testing.F) {
	for _, s := range []string{
		"mean(a) - mean(b) > 0.4", "|mean(a)-mean(b)|<1", "next(a) within limits", `rate("x y")/rate(b)>1`, "((((", "max(mean(a)",
		"mean(a) within 1 .. 2", "rate(a) - max(rate(b), rate(c)) < -1e-3", "sd(a) > 2*sd(b)", "|mean(a) - 3| < 1", "mean(this) > mean(others)/3",
		"mean(a)*1e300*1e-300 > 1", "outside(a)<.1", "mean(ä.1) > 1",
	} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, text string) {
		c, err := Parse(text)
		if err != nil {
			if e := err.(*Error); e.Column < 1 || e.Column > len([]rune(text))+1 || e.Read == "" || e.Expected == "" {
				t.Fatalf("%q: %+v", text, e)
			}
			return
		}
		sameAgain(t, c)
		if c.IsSpread() {
			if s, err := c.Spread("x", "L1", []string{"L1", "L2", "L3"}); err == nil {
				sameAgain(t, s)
			}
		}
	})
}

func BenchmarkParse(b *testing.B) {
	b.ReportAllocs()
	for b.Loop() {
		if _, err := Parse("mean(head.L4) - mean(head.L1) > 0.4"); err != nil {
			b.Fatal(err)
		}
	}
}
