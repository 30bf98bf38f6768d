package config

import (
	"fmt"
	"slices"
	"strings"

	"steelyard/rules"
	"steelyard/rules/claim"
	"steelyard/rules/posterior"
)

// Part is a reference part that a source may measure. A row about it never enters a process: what
// was read of its characteristic, minus what is certified, goes to the rig's offset.
type Part struct {
	Name           string
	Characteristic string
	Offset         string   // name of the rules.Offset
	Serials        []string // that mark its rows
	Variants       []string
	Certified      float64 // in the characteristic's unit
}

type rawReference struct {
	Characteristic string   `toml:"characteristic"`
	Serials        []string `toml:"serials"`
	Variants       []string `toml:"variants"`
	Certified      *float64 `toml:"certified"`
	Uncertainty    float64  `toml:"uncertainty"`
	Remember       any      `toml:"remember"`
}

// references gives each source the reference parts it may measure, and each rig its offsets.
func (c *checker) references(raw *rawFile) {
	remember := map[string]posterior.Remember{} // of each characteristic
	var parts []Part
	uncertainty := map[string]float64{}
	for _, name := range inOrder(c, "reference.", raw.Reference) {
		r, key := raw.Reference[name], "reference."+name
		c.name(key, name)
		if !c.reference(key, &r) {
			continue
		}
		kept := c.remember(key+".remember", r.Remember)
		if other, ok := remember[r.Characteristic]; ok && other != kept {
			c.fault(key+".remember", "", "the same for all reference parts of one characteristic", "another part of %q has another", r.Characteristic)
		}
		remember[r.Characteristic], uncertainty[name] = kept, r.Uncertainty
		parts = append(parts, Part{
			Name: name, Characteristic: r.Characteristic, Serials: r.Serials, Variants: r.Variants, Certified: *r.Certified,
		})
	}
	used := map[string]bool{}
	for i := range c.cfg.Sources {
		s := &c.cfg.Sources[i]
		for _, p := range parts {
			if p.fits(s) {
				s.Parts = append(s.Parts, p)
				used[p.Name] = true
			}
		}
		c.offsets(s, remember, uncertainty)
	}
	for _, p := range parts {
		if !used[p.Name] {
			c.fault("reference."+p.Name, "", "a source that measures the characteristic and has a column of serials, or of variants",
				"no source can read the reference part %q", p.Name)
		}
	}
}

// reference checks one reference part by itself.
func (c *checker) reference(key string, r *rawReference) bool {
	before := len(c.faults)
	ch, ok := c.cfg.Plan.Characteristic(r.Characteristic)
	switch {
	case !ok:
		c.fault(key+".characteristic", claim.Nearest(r.Characteristic, c.characteristicNames()), "a characteristic", "there is no characteristic %q", r.Characteristic)
	case ch.Family != posterior.NormalFamily:
		c.fault(key+".characteristic", "", "a normal characteristic: an offset is a difference", "the family of %q is %s", r.Characteristic, ch.Family)
	}
	if len(r.Serials)+len(r.Variants) == 0 {
		c.fault(key, "", `serials = ["REF-7"], or variants`, "the reference part has neither serials nor variants")
	}
	if r.Certified == nil {
		c.fault(key+".certified", "", "a number in the unit of the characteristic", "the reference part has no certified value")
	} else {
		c.finite(key+".certified", *r.Certified)
	}
	if c.finite(key+".uncertainty", r.Uncertainty) && r.Uncertainty < 0 {
		c.fault(key+".uncertainty", "", "a standard uncertainty from 0 on", "read %v", r.Uncertainty)
	}
	return len(c.faults) == before
}

// fits says whether a source could read the part.
func (p *Part) fits(s *Source) bool {
	return (len(p.Serials) > 0 && s.Columns.Serial != "" || len(p.Variants) > 0 && s.Variants.Column != "") &&
		slices.ContainsFunc(s.Columns.Measured, func(m Measured) bool { return m.Characteristic == p.Characteristic && m.Variant == "" })
}

// offsets gives a source an offset for each characteristic of which it may measure reference parts.
func (c *checker) offsets(s *Source, remember map[string]posterior.Remember, uncertainty map[string]float64) {
	var of []string
	for _, p := range s.Parts {
		if !slices.Contains(of, p.Characteristic) {
			of = append(of, p.Characteristic)
		}
	}
	for _, characteristic := range of {
		ch, _ := c.cfg.Plan.Characteristic(characteristic)
		o := rules.Offset{
			Name: s.Name, Source: s.Name, Characteristic: characteristic, Title: ch.Title, Unit: ch.Unit, Remember: remember[characteristic],
		}
		if len(of) > 1 {
			o.Name = rules.ProcessName(characteristic, s.Name)
		}
		if slices.Contains(c.cfg.Plan.Processes(), o.Name) {
			c.fault("source."+s.Name, "", "another name", "the rig's offset would be called %s, which is a process", o.Name)
		}
		for i := range s.Parts {
			if p := &s.Parts[i]; p.Characteristic == characteristic {
				p.Offset = o.Name
				o.Parts = append(o.Parts, rules.Reference{Name: p.Name, Certified: p.Certified, Uncertainty: uncertainty[p.Name]})
			}
		}
		c.cfg.Plan.Offsets = append(c.cfg.Plan.Offsets, o)
	}
	c.onePartARow(s)
}

// onePartARow refuses two parts of one characteristic that a row could both be about.
func (c *checker) onePartARow(s *Source) {
	for i, p := range s.Parts {
		for _, q := range s.Parts[:i] {
			if q.Characteristic == p.Characteristic && (share(p.Serials, q.Serials) || share(p.Variants, q.Variants)) {
				c.fault("reference."+p.Name, "", "serials and variants of its own", "it shares some with the reference part %q of the same characteristic", q.Name)
			}
		}
	}
}

func share(a, b []string) bool {
	return slices.ContainsFunc(a, func(s string) bool { return slices.Contains(b, s) })
}

// lineNames are the lines of all characteristics.
func (c *checker) lineNames() []string {
	var names []string
	for _, ch := range c.cfg.Plan.Characteristics {
		for _, line := range ch.Lines {
			if !slices.Contains(names, line) {
				names = append(names, line)
			}
		}
	}
	return names
}

// quiet reads a rule that waits for something to be counted.
func (c *checker) quiet(key string, out rules.Rule, r *rawRule) []rules.Rule {
	q := &rules.Quiet{Line: r.Line, Source: r.Source, Process: r.Process}
	q.For = c.duration(key+".quiet", r.Quiet, 0, 1e9, longestBehind)
	for _, not := range []string{"claim", "spread", "raise", "clear", "least_units"} {
		if c.has(key + "." + not) {
			c.fault(key+"."+not, "", "quiet, or a claim with its thresholds", "a rule that waits for something to be counted has no %s", not)
		}
	}
	var sources []string
	for _, s := range c.cfg.Sources {
		sources = append(sources, s.Name)
	}
	named := 0
	for _, of := range []struct {
		key, name string
		known     []string
	}{{"line", r.Line, c.lineNames()}, {"source", r.Source, sources}, {"process", r.Process, c.cfg.Plan.Processes()}} {
		if of.name == "" {
			continue
		}
		if named++; !slices.Contains(of.known, of.name) {
			c.fault(key+"."+of.key, claim.Nearest(of.name, of.known), fmt.Sprintf("a %s that is configured", of.key), "there is no %s %q", of.key, of.name)
		}
	}
	if named != 1 {
		c.fault(key+".quiet", "", `one of line = "L2", source = "rig1" and process = "head.L2" beside it`, "the rule names %d of them", named)
	}
	if q.For == 0 {
		return nil // its fault is noted
	}
	out.Quiet, out.Raise, out.Clear, out.LeastUnits = q, 0, 0, 0
	return []rules.Rule{out}
}

// onlyQuiet refuses in a rule with a claim what belongs to one that waits.
func (c *checker) onlyQuiet(key string) {
	for _, name := range []string{"line", "source", "process"} {
		if c.has(key + "." + name) {
			c.fault(key+"."+name, "", `quiet = "4h" beside it, or a claim that names the processes`, "a rule with a claim has no %s", name)
		}
	}
}

// lines reads when lines run.
func (c *checker) lines(raw *rawFile) {
	for _, name := range inOrder(c, "line.", raw.Line) {
		key := "line." + name
		if known := c.lineNames(); !slices.Contains(known, name) {
			c.fault(key, claim.Nearest(name, known), "a line of some characteristic", "there is no line %q", name)
		}
		if len(raw.Line[name].Runs) == 0 {
			c.fault(key+".runs", "", `hours such as ["Mon-Fri 06:00-22:00"]`, "the line has no hours in which it runs")
		}
		var all Rhythm
		for _, text := range raw.Line[name].Runs {
			stretches, ok := parseRuns(text)
			if !ok {
				c.fault(key+".runs", "", `hours such as "Mon-Fri 06:00-22:00", "Sat 06:00-14:00" or "22:00-06:00"`, "read %q", strings.TrimSpace(text))
			}
			all = append(all, stretches...)
		}
		if c.cfg.Runs == nil {
			c.cfg.Runs = map[string]Rhythm{}
		}
		c.cfg.Runs[name] = all
	}
}

type rawLine struct {
	Runs []string `toml:"runs"`
}
