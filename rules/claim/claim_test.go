package claim

import (
	"errors"
	"fmt"
	"math"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"steelyard/rules/posterior"
)

func TestCanonicalForms(t *testing.T) {
	for text, want := range map[string]string{
		"mean(head.L4) - mean(head.L1) > 0.4":               "mean(head.L4) - mean(head.L1) > 0.4",
		"mean(a) > mean(b) + 0.4":                           "mean(a) - mean(b) > 0.4",
		"0.4 < mean(a) - mean(b)":                           "mean(a) - mean(b) > 0.4",
		"mean(b) - mean(a) < -0.4":                          "mean(b) - mean(a) < -0.4",
		"2*mean(a) > 8":                                     "mean(a) > 4",
		"-mean(a) > 8e0":                                    "mean(a) < -8",
		"(mean(a) - mean(b))/2 > 1":                         "0.5 * mean(a) - 0.5 * mean(b) > 1",
		"-(mean(a) - mean(b)) > 1":                          "mean(a) - mean(b) < -1",
		"|mean(a) - mean(b)| < .4":                          "|mean(a) - mean(b)| < 0.4",
		"mean(bore.L1) within 8.008 .. 8.014":               "mean(bore.L1) within 8.008 .. 8.014",
		"mean(bore.L1)within 8..9":                          "mean(bore.L1) within 8 .. 9",
		"sd(head.L2) / sd(head.L1) > 1.5":                   "sd(head.L2) / sd(head.L1) > 1.5",
		"next(bore.L1) within limits":                       "next(bore.L1) within limits",
		"outside(bore.L1) < 0.001":                          "outside(bore.L1) < 0.001",
		"capability(bore.L1) > 1.33":                        "capability(bore.L1) > 1.33",
		"median(leak.L2) / median(leak.L1) > 1.25":          "median(leak.L2) / median(leak.L1) > 1.25",
		"proportion(i.L4) - proportion(i.L1) > 0.006":       "proportion(i.L4) - proportion(i.L1) > 0.006",
		"proportion(a) > max(proportion(b), proportion(c))": "proportion(a) - max(proportion(b), proportion(c)) > 0",
		"rate(pores.L2) / rate(pores.L1) > 1.5":             "rate(pores.L2) / rate(pores.L1) > 1.5",
		`mean("two words.L1") > 1`:                          `mean("two words.L1") > 1`,
		`mean("head.L1") > 1`:                               `mean(head.L1) > 1`,
		"mean(this) - mean(others) > 0.8":                   "mean(this) - mean(others) > 0.8",
		"+mean(a) - -1 > 3":                                 "mean(a) > 2",
	} {
		c, err := Parse(text)
		if err != nil {
			t.Errorf("%s: %v", text, err)
			continue
		}
		if c.String() != want {
			t.Errorf("%s: %s, want %s", text, c, want)
		}
	}
}

func TestRefusals(t *testing.T) {
	for _, c := range []struct {
		text   string
		column int
		says   string
	}{
		{"", 1, "a quantity"}, {"mean(a)", 8, "a comparison"}, {"mean(a) > ", 11, "a quantity"}, {"mean a > 1", 6, `"("`},
		{"maen(a) > 1", 1, `did you mean "mean"`}, {"mean(a) > 1 1", 13, "the end"}, {"mean(a) * mean(b) > 1", 9, "product"},
		{"mean(a) / mean(b) > 1", 9, "ratio"}, {"mean(a) - sd(a) > 1", 11, "of one kind"}, {"3 > 2", 1, "a quantity"},
		{"mean(a) - mean(a) > 1", 1, "cancel"}, {"mean(a) > 1e999", 11, "float64"}, {"mean(a) within 3 .. 2", 21, "above 3"},
		{"mean(a) within limits x", 23, "the end"}, {"mean(a) ? 1", 9, "read"}, {`mean("a) > 1`, 6, "closing"}, {"mean(a) / 0 > 1", 9, "not 0"},
		{"sd(a) - sd(b) > 1", 1, "ratio of two"}, {"sd(a) / sd(b) > 0", 1, "above 0"}, {"|mean(a)| - 1 < -2", 1, "above 0"},
		{strings.Repeat("(", 100) + "mean(a) > 1", 65, "nesting"}, {"|mean(a) - 1| < 2", 1, "without bars"},
		{"proportion(a) - proportion(b) - proportion(c) > 0", 1, "one, or two"}, {"mean(a) - max(mean(b), sd(c)) > 0", 24, "mean"},
	} {
		_, err := Parse(c.text)
		var e *Error
		if !errors.As(err, &e) || e.Column != c.column || !strings.Contains(e.Error(), c.says) {
			t.Errorf("%q: %v; want column %d and %q", c.text, err, c.column, c.says)
		}
	}
}

func TestBind(t *testing.T) {
	known := func(name string) (Known, bool) {
		switch name {
		case "head.L1", "head.L2":
			return Known{posterior.NormalFamily, 31, math.Inf(1)}, true
		case "leak.L1":
			return Known{posterior.LognormalFamily, math.Inf(-1), math.Inf(1)}, true
		}
		return Known{}, false
	}
	names := []string{"head.L1", "head.L2", "leak.L1"}
	for text, says := range map[string]string{
		"mean(head.L1) > 1": "", "next(head.L1) within limits": "", "mean(haed.L1) > 1": `did you mean "head.L1"`,
		"mean(leak.L1) > 1": "family is lognormal", "outside(leak.L1) < 0.1": "no limits",
	} {
		c, err := Parse(text)
		if err != nil {
			t.Fatal(err)
		}
		b, err := c.Bind(known, names)
		if (err == nil) != (says == "") || err != nil && !strings.Contains(err.Error(), says) {
			t.Errorf("%s: %v, want %q", text, err, says)
		}
		if err == nil && b.Limits && (b.Low != 31 || !math.IsInf(b.High, 1)) {
			t.Errorf("%s: bound to %v .. %v", text, b.Low, b.High)
		}
	}
}

func TestSpread(t *testing.T) {
	c, err := Parse("proportion(this) - max(proportion(others)) > 0.01")
	if err != nil {
		t.Fatal(err)
	}
	s, err := c.Spread("i", "L2", []string{"L1", "L2", "L3"})
	if err != nil || s.String() != "proportion(i.L2) - max(proportion(i.L1), proportion(i.L3)) > 0.01" {
		t.Errorf("%v, %v", s, err)
	}
	if c, err = Parse("mean(this) - mean(others) > 0.8"); err != nil {
		t.Fatal(err)
	}
	if s, err = c.Spread("head", "L1", []string{"L1", "L2"}); err != nil || s.String() != "mean(head.L1) - mean(head.L2) > 0.8" {
		t.Errorf("%v, %v", s, err)
	}
	if _, err = c.Spread("head", "L1", []string{"L1"}); err == nil {
		t.Error("one line alone has no others")
	}
}

// Print and parse are inverse.
func TestPrintParse(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		number := func(name string) string { return fmt.Sprint(rapid.Float64Range(-1e6, 1e6).Draw(t, name)) }
		name := func(label string) string {
			return quote(rapid.StringMatching(`[a-z]{1,3}(\.L[0-9]| [a-z"\\])?`).Draw(t, label))
		}
		a, b := name("a"), name("b")
		if a == b {
			return
		}
		text := rapid.SampledFrom([]string{
			"mean(" + a + ") * " + number("w") + " - mean(" + b + ") > " + number("x"),
			"mean(" + a + ") < " + number("y"), "|rate(" + a + ") - rate(" + b + ")| > 3",
			"sd(" + a + ") / sd(" + b + ") within 0.5 .. 2", "proportion(" + a + ") - min(proportion(" + b + ")) < " + number("z"),
		}).Draw(t, "claim")
		c, err := Parse(text)
		if err != nil {
			return
		}
		again, err := Parse(c.String())
		if err != nil || again.String() != c.String() {
			t.Fatalf("%q prints as %q, which reads as %v, %v", text, c, again, err)
		}
	})
}

func FuzzParse(f *testing.F) {
	for _, s := range []string{"mean(a) - mean(b) > 0.4", "|mean(a)-mean(b)|<1", "next(a) within limits", `rate("x y")/rate(b)>1`, "((((", "max(mean(a)", "mean(a) within 1 .. 2"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, text string) {
		c, err := Parse(text)
		if err != nil {
			return
		}
		again, err := Parse(c.String())
		if err != nil || again.String() != c.String() {
			t.Fatalf("%q prints as %q, which reads as %v, %v", text, c, again, err)
		}
	})
}
