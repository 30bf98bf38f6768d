package config

import (
	"cmp"
	"math"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"steelyard/rules"
	"steelyard/rules/claim"
	"steelyard/rules/posterior"
)

// FaultCodes say by which code a rig reports that it, and not the unit, was at fault. Such a row is
// left out, and numbered.
type FaultCodes struct {
	Column string // "" where there is none
	Codes  []string
}

// Variants say what becomes of rows about one variant of the product or another.
type Variants struct {
	Column   string   // that names the variant; "" where there is none
	Count    []string // their rows go to the characteristics as the columns have it
	PassOver []string // their rows are left out, and numbered
	Own      []string // their rows go to characteristics of their own: Measured.Variant
	Others   string   // what becomes of all others: "hold" or "pass over"
}

type rawFaults struct {
	Column string   `toml:"column"`
	Codes  []string `toml:"codes"`
}

type rawVariants struct {
	Column   string                       `toml:"column"`
	Count    []string                     `toml:"count"`
	PassOver []string                     `toml:"pass_over"`
	Own      map[string]map[string]string `toml:"own"`
	Others   string                       `toml:"others"`
}

// longestBehind is the longest time before its arrival that a row may be declared to be measured.
const longestBehind = 100 * 366 * 24 * time.Hour

// rowForm reads what a source says of its rows beside the columns of its measurements.
func (c *checker) rowForm(key string, r *rawSource, s *Source, raw *rawFile) {
	s.Ahead = c.duration(key+".ahead", r.Ahead, time.Hour, time.Millisecond, longestBehind)
	s.Behind = c.duration(key+".behind", r.Behind, 0, time.Second, longestBehind)
	if s.Present = r.Present; r.Present != "" && (r.Present != filepath.Base(r.Present) || !filepath.IsLocal(r.Present)) {
		c.fault(key+".present", "", `the name of a file in the folder, such as ".here"`, "read %q", r.Present)
	}
	if c.has(key + ".faults") {
		s.Faults = FaultCodes{r.Faults.Column, r.Faults.Codes}
		if r.Faults.Column == "" || len(r.Faults.Codes) == 0 {
			c.fault(key+".faults", "", `a column and its codes: { column = "Code", codes = ["E17"] }`, "one of the two is missing")
		}
	}
	if c.has(key + ".variants") {
		c.variants(key+".variants", &r.Variants, s, raw)
	}
}

func (c *checker) variants(key string, r *rawVariants, s *Source, raw *rawFile) {
	v := &s.Variants
	*v = Variants{Column: r.Column, Count: r.Count, PassOver: r.PassOver, Others: cmp.Or(r.Others, "hold")}
	if r.Column == "" {
		c.fault(key+".column", "", "the name of a column", "the variants have no column")
	}
	if ways := []string{"hold", "pass over"}; !slices.Contains(ways, v.Others) {
		c.fault(key+".others", claim.Nearest(v.Others, ways), `"hold" or "pass over"`, "read %q", v.Others)
	}
	for variant := range r.Own {
		v.Own = append(v.Own, variant)
	}
	slices.SortFunc(v.Own, func(a, b string) int { return strings.Compare(a, b) })
	all := slices.Concat(v.Count, v.PassOver, v.Own)
	for i, variant := range all {
		if slices.Contains(all[:i], variant) {
			c.fault(key, "", "each variant once, in count, pass_over or own", "the variant %q stands twice", variant)
		}
	}
	for _, variant := range v.Own {
		c.own(key+".own."+variant, variant, r.Own[variant], s, raw)
	}
}

// own reads the characteristics of a variant: each takes the column of the one it stands for.
func (c *checker) own(key, variant string, table map[string]string, s *Source, raw *rawFile) {
	var plain []string
	for _, m := range s.Columns.Measured {
		if m.Variant == "" {
			plain = append(plain, m.Characteristic)
		}
	}
	var names []string
	for name := range table {
		names = append(names, name)
	}
	slices.Sort(names)
	for _, name := range names {
		i := slices.Index(plain, name)
		if i < 0 {
			c.fault(key, claim.Nearest(name, plain), "a characteristic of the source's columns", "the source measures no %q", name)
			continue
		}
		of, target := c.cfg.Plan.Characteristic(table[name])
		from, _ := c.cfg.Plan.Characteristic(name)
		switch {
		case !target:
			c.fault(key+"."+name, claim.Nearest(table[name], c.characteristicNames()), "a characteristic", "there is no characteristic %q", table[name])
			continue
		case slices.Contains(plain, table[name]) || of.Family != from.Family:
			c.fault(key+"."+name, "", "another characteristic of the same family, to which no column of the source is mapped", "read %q", table[name])
			continue
		}
		m := s.Columns.Measured[i]
		m.Characteristic, m.Variant = table[name], variant
		m.Lower, m.Upper = plausible(raw.Characteristic[table[name]].Plausible)
		s.Columns.Measured = append(s.Columns.Measured, m)
	}
	if len(names) == 0 {
		c.fault(key, "", `its own characteristics: { head = "head_k8" }`, "the variant %q has none", variant)
	}
}

// gauge reads what a characteristic asks of its gauge. Whether readings beyond its limits are
// declared is known once the sources are: censored.
func (c *checker) gauge(key string, r *rawCharacteristic, f posterior.Family) (g rules.Gauge) {
	for name, set := range map[string]bool{"censored_at_most": r.CensoredAtMost != nil, "stuck": r.Stuck != nil, "far": r.Far != nil} {
		if set && f != posterior.NormalFamily && f != posterior.LognormalFamily {
			c.fault(key+"."+name, "", "a normal or lognormal characteristic", "the family is %s", f)
			return rules.Gauge{}
		}
	}
	if p := r.CensoredAtMost; p != nil {
		if !(*p >= 0 && *p < 1) {
			c.fault(key+".censored_at_most", "", "a share from 0 up to but not including 1", "read %v", *p)
		} else {
			g.CensoredAtMost = *p
		}
	}
	if p := r.Far; p != nil {
		if !(*p > 0) || math.IsInf(*p, 0) {
			c.fault(key+".far", "", "a number of standard deviations above 0", "read %v", *p)
		} else {
			g.Far = *p
		}
	}
	g.Stuck, g.StuckHeld = c.stuck(key+".stuck", r.Stuck)
	return g
}

// stuck reads a number of values, or a table that says what is done.
func (c *checker) stuck(key string, v any) (values int, held bool) {
	expected := `a number of values from 2 on, such as 40, or { values = 40, then = "hold" }`
	n, ok := v.(int64)
	if table, isTable := v.(map[string]any); isTable {
		n, ok = table["values"].(int64)
		then, isText := table["then"].(string)
		held = then == "hold"
		ok = ok && len(table) == 2 && isText && (held || then == "remark")
	}
	if v == nil {
		return 0, false
	}
	if !ok || n < 2 || n > 1e6 {
		c.fault(key, "", expected+` (or then = "remark")`, "read %v", v)
		return 0, false
	}
	return int(n), held
}

// censored notes of which characteristics readings may lie beyond the gauge's limits.
func (c *checker) censored(raw *rawFile) {
	for _, s := range c.cfg.Sources {
		for _, m := range s.Columns.Measured {
			if ch, ok := c.cfg.Plan.Characteristic(m.Characteristic); ok && m.Beyond {
				ch.Gauge.Censored = true
			}
		}
	}
	for i := range c.cfg.Plan.Characteristics {
		ch := &c.cfg.Plan.Characteristics[i]
		if raw.Characteristic[ch.Name].CensoredAtMost != nil && !ch.Gauge.Censored {
			c.fault("characteristic."+ch.Name+".censored_at_most", "", "beyond = true for a column of the characteristic in some source",
				"no source reads values beyond a gauge's limit of %q", ch.Name)
		}
	}
}

func (c *checker) boolean(key string, v any) bool {
	b, ok := v.(bool)
	if !ok {
		c.fault(key, "", "true or false", "read %v", v)
	}
	return b
}
