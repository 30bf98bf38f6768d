package claim

import (
	"errors"
	"math"
	"reflect"
	"strings"
	"testing"

	"steelyard/rules/posterior"
)

func TestCanonicalForms(t *testing.T) {
	for text, want := range map[string]string{
		"mean(head.L4) - mean(head.L1) > 0.4":               "mean(head.L4) - mean(head.L1) > 0.4",
		"mean(a) > mean(b) + 0.4":                           "mean(a) - mean(b) > 0.4",
		"mean(a) > mean(b) + 0.1 + 0.2":                     "mean(a) - mean(b) > 0.3",
		"0.4 < mean(a) - mean(b)":                           "mean(a) - mean(b) > 0.4",
		"0.4 < 2*mean(a) - mean(b)":                         "2 * mean(a) - mean(b) > 0.4",
		"1 + 2 > mean(a)":                                   "mean(a) < 3",
		"mean(b) - mean(a) < -0.4":                          "mean(b) - mean(a) < -0.4",
		"2*mean(a) > 8":                                     "mean(a) > 4",
		"-mean(a) > 8e0":                                    "mean(a) < -8",
		"(mean(a) - mean(b))/2 > 1":                         "0.5 * mean(a) - 0.5 * mean(b) > 1",
		"mean(a) - mean(b)/3 > 1E-3":                        "mean(a) - 0.3333333333333333 * mean(b) > 0.001",
		"-(mean(a) - mean(b)) > 1":                          "mean(a) - mean(b) < -1",
		"mean(a) - (mean(a) - mean(b))*2 > 1":               "-mean(a) + 2 * mean(b) > 1",
		"0.1*mean(a)+0.2*mean(a)-0.3*mean(a)+mean(b) > 0":   "mean(b) > 0",
		"mean(a)*1e300*1e300/1e300/1e300 > 1":               "mean(a) > 1",
		"|mean(a) - mean(b)| < .4":                          "|mean(a) - mean(b)| < 0.4",
		"|2*mean(b) - 3*mean(a)| * 2 > 4":                   "|2 * mean(b) - 3 * mean(a)| > 2",
		"|mean(b) * -2| > 4":                                "|mean(b)| > 2",
		"|mean(a) - 33.4| < 0.4":                            "mean(a) within 33 .. 33.8",
		"3 - |mean(a) - 1| > |-1|":                          "mean(a) within -1 .. 3",
		"mean(bore.L1) within 8.008 .. 8.014":               "mean(bore.L1) within 8.008 .. 8.014",
		"mean(bore.L1)within 8..9":                          "mean(bore.L1) within 8 .. 9",
		"-2*mean(a) + 1 within -1 .. 3":                     "mean(a) within -1 .. 1",
		"sd(head.L2) / sd(head.L1) > 1.5":                   "sd(head.L2) / sd(head.L1) > 1.5",
		"2*sd(a)/sd(b) - 1 > 2":                             "sd(a) / sd(b) > 1.5",
		"sd(a) > 1.5*sd(b)":                                 "sd(a) / sd(b) > 1.5",
		"sd(b)*2 < sd(a) + sd(c) - sd(c)":                   "sd(b) / sd(a) < 0.5",
		"median(a) < median(b)":                             "median(a) / median(b) < 1",
		"-rate(a)/rate(b) within -2 .. -1":                  "rate(a) / rate(b) within 1 .. 2",
		"next(bore.L1) within limits":                       "next(bore.L1) within limits",
		"outside(bore.L1) < 0.001":                          "outside(bore.L1) < 0.001",
		"capability(bore.L1) > 1.33":                        "capability(bore.L1) > 1.33",
		"median(leak.L2) / median(leak.L1) > 1.25":          "median(leak.L2) / median(leak.L1) > 1.25",
		"proportion(i.L4) - proportion(i.L1) > 0.006":       "proportion(i.L4) - proportion(i.L1) > 0.006",
		"proportion(a) > max(proportion(b), proportion(c))": "proportion(a) - max(proportion(b), proportion(c)) > 0",
		"min(rate(b), rate(c)) - rate(a) > 1":               "rate(a) - min(rate(b), rate(c)) < -1",
		"2*rate(a) - 2*max(rate(b), rate(c)) + 1 > 3":       "rate(a) - max(rate(b), rate(c)) > 1",
		"rate(a) > max(rate(b), rate(b), rate(c))":          "rate(a) - max(rate(b), rate(c)) > 0",
		"mean(a) > max(mean(b), mean(b))":                   "mean(a) - mean(b) > 0",
		"max(mean(a)) > 3":                                  "mean(a) > 3",
		"rate(pores.L2) / rate(pores.L1) > 1.5":             "rate(pores.L2) / rate(pores.L1) > 1.5",
		`mean("two words.L1") > 1`:                          `mean("two words.L1") > 1`,
		`mean("a \"b\\.L1") > 1`:                            `mean("a \"b\\.L1") > 1`,
		`mean("head.L1") > 1`:                               `mean(head.L1) > 1`,
		"mean(Förderhöhe.2a) > 1":                           "mean(Förderhöhe.2a) > 1",
		"mean(this) - mean(others) > 0.8":                   "mean(this) - mean(others) > 0.8",
		"mean(this) > max(mean(others))":                    "mean(this) - max(mean(others)) > 0",
		"+mean(a) - -1 > 3":                                 "mean(a) > 2",
		"mean(a) > -0":                                      "mean(a) > 0",
		"mean(a) > 0e99999":                                 "mean(a) > 0",
	} {
		c, err := Parse(text)
		if err != nil {
			t.Errorf("%s: %v", text, err)
			continue
		}
		if c.String() != want {
			t.Errorf("%s: %s, want %s", text, c, want)
		}
		sameAgain(t, c)
	}
}

// fataler is a *testing.T or *rapid.T.
type fataler interface{ Fatalf(string, ...any) }

// sameAgain fails where Parse of the canonical form is another claim.
func sameAgain(t fataler, c *Claim) {
	again, err := Parse(c.String())
	if err != nil {
		t.Fatalf("the canonical form %q is refused: %v", c, err)
	}
	one, two := *c, *again
	one.places, two.places = nil, nil
	if !reflect.DeepEqual(one, two) {
		t.Fatalf("%q reads as %+v, want %+v", c, two, one)
	}
}

func TestRefusals(t *testing.T) {
	for _, c := range []struct {
		text   string
		column int
		says   string
	}{
		// what is not of the grammar
		{"", 1, "a quantity"}, {"   ", 4, "a quantity"}, {"mean(a)", 8, "a comparison"}, {"mean(a) > ", 11, "a quantity"},
		{"mean a > 1", 6, `"("`}, {"mean(a > 1", 8, `")"`}, {"mean() > 1", 6, "name of a process"}, {`mean("") > 1`, 6, "name of a process"},
		{"maen(a) > 1", 1, `did you mean "mean"`}, {"Mean(a) > 1", 1, `did you mean "mean"`}, {"mean(a) > 1 1", 13, "the end"},
		{"mean(a) > 1 > 0", 13, "the end"}, {"mean(a) ? 1", 9, "read"}, {"mean(ä) ≥ 1", 9, "≥"}, {`mean("a) > 1`, 6, "closing"},
		{"mean(\"a\tb\") > 1", 8, "control"}, {"(mean(a) > 1", 10, `")"`}, {"|mean(a) > 1", 10, `closing "|"`}, {"max(mean(a) > 1", 13, `","`},
		{"mean(a.) > 1", 7, "'.'"}, {"\xff", 1, "UTF-8"}, {strings.Repeat("(", 100) + "mean(a) > 1", 65, "nesting"},
		{strings.Repeat("-", 100) + "mean(a) > 1", 65, "nesting"}, {"mean(a) > " + strings.Repeat("1", 5000), 1, "at most 4096"},
		// numbers
		{"mean(a) > 1e999", 11, "float64"}, {"mean(a) > 1e-999", 11, "float64"}, {"mean(a) > 1e999999999999", 11, "float64"},
		{"mean(a) / 0 > 1", 9, "not 0"}, {"0*mean(a) > 1", 3, "not 0"}, {"mean(a) > 1e300*1e300", 1, "float64"},
		{"mean(a)*1e300*1e300 - mean(b) > 1", 6, "weight"}, {"mean(a) - mean(b)*1e-300*1e-300 > 1", 16, "weight"},
		{"mean(a) > 1e-300*1e-300", 1, "float64"}, {"mean(a)" + strings.Repeat("*1e300", 100) + " > 1", 1, "float64"},
		{"mean(a) within 3 .. 2", 21, "above 3"}, {"mean(a) within 3 .. 3", 21, "above 3"}, {"mean(a) + 1e30 within 0 .. 1", 1, "tell apart"},
		{"mean(a) within mean(b) .. 2", 16, "a number"}, {"mean(a) within 1 2", 18, `".."`},
		{"mean(a) > NaN", 11, "a quantity"}, {"mean(a) > Inf", 11, "a quantity"}, {"3 > 2", 1, "a quantity"}, {"1 within 0 .. 2", 1, "a quantity"},
		// what has no exact route
		{"mean(a) * mean(b) > 1", 9, "product"}, {"mean(a) / mean(b) > 1", 9, "ratio"}, {"1 / sd(a) > 1", 3, "quotient"},
		{"sd(a) / sd(a) > 1", 7, "itself"}, {"sd(a)/sd(b)/sd(c) > 1", 12, "quotient"}, {"mean(a) - sd(a) > 1", 11, "of one kind"},
		{"mean(a) - mean(a) > 1", 1, "cancel"}, {"mean(a) > mean(a)", 1, "cancel"},
		{"sd(a) - sd(b) > 1", 12, "ratio of two"}, {"sd(a) + sd(b) > 0", 12, "ratio of two"}, {"median(a) - median(b) within 0 .. 1", 20, "ratio of two"},
		{"next(a) - next(b) > 0", 16, "one alone"}, {"outside(a) + outside(b) < 1", 22, "one alone"}, {"capability(a) - capability(b) > 0", 28, "one alone"},
		{"|sd(a)| > 1", 5, "without bars"}, {"|next(a)| > 1", 7, "without bars"},
		{"sd(a) / sd(b) > 0", 4, "above 0"}, {"sd(a) / sd(b) within -1 .. 2", 4, "above 0"}, {"|mean(a)| - 1 < -2", 7, "above 0"},
		{"|mean(a) - 1| > 2", 1, "without bars"}, {"|mean(a) - 1| within 1 .. 2", 1, "without bars"}, {"||mean(a)| - 1| < 1", 1, "between the bars"},
		{"|mean(a)| + |mean(b)| < 1", 13, "alone"},
		{"proportion(a) - proportion(b) - proportion(c) > 0", 44, "at most 2"}, {"rate(a) + rate(b) + rate(c) > 0", 26, "at most 2"},
		{"max(proportion(b), proportion(c)) > 0.1", 1, "one quantity minus"}, {"rate(a) > 2*max(rate(b), rate(c))", 13, "one quantity minus"},
		{"rate(a) + max(rate(b), rate(c)) > 0", 11, "one quantity minus"}, {"rate(a) > max(rate(a), rate(b))", 11, "itself"},
		{"rate(a) > max(rate(b), rate(c)) + min(rate(d), rate(e))", 35, "alone"}, {"rate(a) > max(2*rate(b), rate(c))", 15, "single"},
		{"rate(a) > max(rate(b) + 1, rate(c))", 15, "single"}, {"rate(a) > max(1, rate(c))", 15, "single"},
		{"mean(a) - max(mean(b), sd(c)) > 0", 24, "mean"}, {"mean(a) - max(proportion(b), proportion(c)) > 0", 11, "one kind"},
		{"mean(a) within limits x", 23, "the end"}, {"mean(a) - mean(b) within limits", 26, "limits belong"}, {"sd(a) within limits", 14, "limits belong"},
		{"2*mean(a) within limits", 18, "limits belong"}, {"mean(a) + 1 within limits", 20, "limits belong"},
	} {
		_, err := Parse(c.text)
		var e *Error
		if !errors.As(err, &e) || e.Column != c.column || !strings.Contains(e.Error(), c.says) {
			t.Errorf("%q: %v; want column %d and %q", c.text, err, c.column, c.says)
		}
	}
}

// Up to 64 processes stand in a contest.
func TestMostProcesses(t *testing.T) {
	others := func(n int) string {
		var all []string
		for i := range n {
			all = append(all, "rate(p.L"+string(rune('a'+i/26))+string(rune('a'+i%26))+")")
		}
		return "rate(x) > max(" + strings.Join(all, ", ") + ")"
	}
	if _, err := Parse(others(63)); err != nil {
		t.Error(err)
	}
	if _, err := Parse(others(64)); err == nil || !strings.Contains(err.Error(), "at most 64") {
		t.Errorf("65 processes: %v", err)
	}
}

func TestBind(t *testing.T) {
	known := func(name string) (Known, bool) {
		switch name {
		case "head.L1", "head.L2":
			return Known{Family: posterior.NormalFamily, Lower: 31, Upper: math.Inf(1)}, true
		case "leak.L1":
			return Known{Family: posterior.LognormalFamily, Lower: math.Inf(-1), Upper: math.Inf(1)}, true
		}
		return Known{}, false
	}
	names := []string{"head.L1", "head.L2", "leak.L1"}
	for _, c := range []struct {
		text   string
		column int
		says   string
	}{
		{"mean(head.L1) > 1", 0, ""}, {"next(head.L1) within limits", 0, ""}, {"mean(haed.L1) > 1", 6, `did you mean "head.L1"`},
		{"3 + mean(head.L1) > mean(haed.L2)", 26, `did you mean "head.L2"`}, {"mean(quite.else) > 1", 6, "not configured, expected a configured process"},
		{"mean(leak.L1) > 1", 6, "family is lognormal"}, {"median(leak.L1) > 1", 0, ""}, {"median(head.L1) > 1", 8, "mean, sd"},
		{"outside(leak.L1) < 0.1", 9, "no limits"}, {"next(leak.L1) within limits", 6, "no limits"},
		{"mean(this) > 1", 6, "spread over the lines"},
	} {
		parsed, err := Parse(c.text)
		if err != nil {
			t.Fatal(err)
		}
		b, err := parsed.Bind(known, names)
		var e *Error
		switch {
		case c.says == "" && err != nil:
			t.Errorf("%s: %v", c.text, err)
		case c.says != "" && (!errors.As(err, &e) || e.Column != c.column || !strings.Contains(e.Error(), c.says)):
			t.Errorf("%s: %v; want column %d and %q", c.text, err, c.column, c.says)
		case err == nil && b.Limits && (b.Low != 31 || !math.IsInf(b.High, 1)):
			t.Errorf("%s: bound to %v .. %v", c.text, b.Low, b.High)
		case err == nil && parsed.Limits && !math.IsInf(parsed.Low, -1):
			t.Errorf("%s: Bind changed the claim that was parsed", c.text)
		}
	}
}

// A claim about processes that happen to be called this and others is checked at the latest when
// it is bound.
func TestBindChecksWhatParseLeftToSpread(t *testing.T) {
	c, err := Parse("rate(this) - rate(others) - rate(x) > 0")
	if err != nil {
		t.Fatal(err)
	}
	all := func(string) (Known, bool) { return Known{Family: posterior.PoissonFamily}, true }
	if _, err := c.Bind(all, nil); err == nil || !strings.Contains(err.Error(), "a sum of 3") {
		t.Error(err)
	}
}

func TestSpread(t *testing.T) {
	for _, c := range []struct {
		text  string
		lines string
		want  string // for line L1, or what the refusal says
	}{
		{"mean(this) > 34", "L1 L2 L3", "mean(head.L1) > 34"},
		{"mean(this) - mean(others) > 0.8", "L1 L2", "mean(head.L1) - mean(head.L2) > 0.8"},
		{"0.5*mean(this) - 0.5*mean(others) > 0.8", "L1 L2", "0.5 * mean(head.L1) - 0.5 * mean(head.L2) > 0.8"},
		{"mean(this) > max(mean(others))", "L1 L2", "mean(head.L1) - mean(head.L2) > 0"},
		{"|mean(others) - mean(this)| < 1", "L2 L1", "|mean(head.L2) - mean(head.L1)| < 1"},
		{"rate(this) - max(rate(others)) > 0.01", "L1 L2 L3", "rate(head.L1) - max(rate(head.L2), rate(head.L3)) > 0.01"},
		{"rate(this) < min(rate(others), rate(head.L2), rate(x))", "L1 L2 L3",
			"rate(head.L1) - min(rate(head.L2), rate(head.L3), rate(x)) < 0"},
		{"sd(this) > 1.5*sd(others)", "L1 L2", "sd(head.L1) / sd(head.L2) > 1.5"},
		{"next(this) within limits", "L1 L2", "next(head.L1) within limits"},
		{"mean(this) within 33 .. 34", "L1 L2", "mean(head.L1) within 33 .. 34"},
		// what can't be
		{"mean(this) - mean(others) > 0.8", "L1", "column 19: read others, expected a characteristic with more than one line"},
		{"sd(this) / sd(others) > 2", "L1 L2 L3", "column 15: read others"},
		{"mean(this) - mean(head.L1) > 0", "L1 L2", "cancel out"},
		{"rate(this) > max(rate(head.L1), rate(x))", "L1 L2", "itself among"},
		{"rate(others) - max(rate(this), rate(x)) > 0", "L1 L2 L3", "column 6: read others"},
		{"rate(this) - rate(others) > 0", "L1 L2 L3", "column 19: read a sum of 3 quantities rate, expected at most 2"},
	} {
		parsed, err := Parse(c.text)
		if err != nil {
			t.Fatalf("%s: %v", c.text, err)
		}
		if !parsed.IsSpread() {
			t.Errorf("%s is a spread claim", c.text)
		}
		s, err := parsed.Spread("head", "L1", strings.Fields(c.lines))
		if err != nil {
			if !strings.Contains(err.Error(), c.want) {
				t.Errorf("%s over %s: %v, want %s", c.text, c.lines, err, c.want)
			}
			continue
		}
		if s.String() != c.want {
			t.Errorf("%s over %s: %s, want %s", c.text, c.lines, s, c.want)
		}
		sameAgain(t, s)
	}
}
