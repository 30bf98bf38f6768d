package config

import (
	"fmt"
	"slices"
	"strings"

	"steelyard/rules"
	"steelyard/rules/claim"
	"steelyard/rules/posterior"
)

var families = []string{"normal", "lognormal", "binomial", "poisson"}

func (c *checker) characteristics(raw *rawFile) {
	for _, name := range inOrder(c, "characteristic.", raw.Characteristic) {
		r, key := raw.Characteristic[name], "characteristic."+name
		c.name(key, name)
		ch := rules.Characteristic{Name: name, Title: r.Title, Unit: r.Unit, Lines: r.Lines, Lower: r.Limits.Lower, Upper: r.Limits.Upper}
		if r.Family == "" {
			r.Family = "normal"
		}
		if !slices.Contains(families, r.Family) {
			c.fault(key+".family", claim.Nearest(r.Family, families), strings.Join(families, ", "), "there is no family %q", r.Family)
			r.Family = "normal"
		}
		ch.Family = posterior.Family(r.Family)
		if len(r.Lines) == 0 {
			c.fault(key+".lines", "", `names of lines such as ["L1", "L2"]`, "the characteristic has no lines")
		}
		for i, line := range r.Lines {
			c.name(key+".lines", line)
			if slices.Contains(r.Lines[:i], line) {
				c.fault(key+".lines", "", "each line once", "the line %q stands twice", line)
			}
		}
		c.limits(key+".limits", r.Limits)
		c.limits(key+".plausible", r.Plausible)
		ch.Remember = c.remember(key+".remember", r.Remember)
		ch.Prior = c.prior(key+".prior", r.Prior, ch.Family)
		ch.Retests = c.retests(key, r.Retests, r.Serials)
		ch.Gauge = c.gauge(key, &r, ch.Family)
		c.cfg.Plan.Characteristics = append(c.cfg.Plan.Characteristics, ch)
	}
	if len(raw.Characteristic) == 0 {
		c.fault("characteristic", "", "a table such as [characteristic.head]", "no characteristic is configured")
	}
}

func (c *checker) limits(key string, l rawLimits) {
	ok := true
	if l.Lower != nil {
		ok = c.finite(key+".lower", *l.Lower)
	}
	if l.Upper != nil {
		ok = c.finite(key+".upper", *l.Upper) && ok
	}
	if ok && l.Lower != nil && l.Upper != nil && !(*l.Lower < *l.Upper) {
		c.fault(key, "", "lower below upper", "lower is %v and upper %v", *l.Lower, *l.Upper)
	}
}

// numbers reads a table of numbers with known keys.
func (c *checker) numbers(key string, table map[string]any, known ...string) map[string]float64 {
	out := map[string]float64{}
	for name, v := range table {
		if !slices.Contains(known, name) {
			c.fault(key+"."+name, claim.Nearest(name, known), "one of "+strings.Join(known, ", "), "the key %q is not known", name)
			continue
		}
		switch x := v.(type) {
		case int64:
			out[name] = float64(x)
		case float64:
			if c.finite(key+"."+name, x) {
				out[name] = x
			}
		default:
			c.fault(key+"."+name, "", "a number", "read %v", v)
		}
	}
	return out
}

func (c *checker) remember(key string, v any) posterior.Remember {
	whole := posterior.Remember{Segment: true}
	expected := `"segment", { units = 400 }, { hours = 24 } or { discount = 0.99 }`
	switch v := v.(type) {
	case nil:
		return whole
	case string:
		if v == "segment" {
			return whole
		}
	case map[string]any:
		n := c.numbers(key, v, "units", "hours", "discount")
		r := posterior.Remember{Units: int(n["units"]), Hours: n["hours"], Discount: n["discount"]}
		if float64(r.Units) != n["units"] {
			c.fault(key, "", "a whole number of units", "read %v", n["units"])
			return whole
		}
		if err := r.Check(); err != nil {
			c.fault(key, "", expected, "%s", strings.TrimPrefix(err.Error(), "remember: "))
			return whole
		}
		return r
	}
	c.fault(key, "", expected, "read %v", v)
	return whole
}

func (c *checker) prior(key string, v any, f posterior.Family) posterior.Prior {
	reference := posterior.Prior{Reference: true}
	var known []string
	expected := `"reference", or `
	switch f {
	case posterior.BinomialFamily:
		known, expected = []string{"a", "b"}, expected+"{ a = 0.5, b = 0.5 }"
	case posterior.PoissonFamily:
		known, expected = []string{"shape", "rate"}, expected+"{ shape = 0.5, rate = 0 }"
	default:
		known, expected = []string{"mean", "mean_worth", "sd", "sd_worth"}, expected+"{ mean = 33.4, mean_worth = 5, sd = 0.6, sd_worth = 5 }"
	}
	switch v := v.(type) {
	case nil:
		return reference
	case string:
		if v == "reference" {
			return reference
		}
	case map[string]any:
		n := c.numbers(key, v, known...)
		for _, k := range known {
			if _, ok := n[k]; !ok {
				c.fault(key, "", expected, "the prior does not say %s", k)
				return reference
			}
		}
		p := posterior.Prior{
			Mean: n["mean"], MeanWorth: n["mean_worth"], SD: n["sd"], SDWorth: n["sd_worth"],
			A: n["a"], B: n["b"], Shape: n["shape"], Rate: n["rate"],
		}
		if err := p.Check(f); err != nil {
			c.fault(key, "", expected, "%v", err)
			return reference
		}
		return p
	}
	c.fault(key, "", expected, "read %v", fmt.Sprint(v))
	return reference
}
