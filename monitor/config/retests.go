package config

import (
	"slices"
	"strings"

	"steelyard/rules"
	"steelyard/rules/claim"
)

// knownUnits is how many units' serials are known where that is not declared.
const knownUnits = 10000

// retests reads which test of a serial counts, and for how long serials are known.
func (c *checker) retests(key string, count string, serials any) rules.Retests {
	ways := []string{rules.EveryTest, rules.FirstTest, rules.LastTest}
	if count != "" && !slices.Contains(ways, count) {
		c.fault(key+".retests", claim.Nearest(count, ways), `"all", "first" or "last"`, "read %q", count)
		return rules.Retests{}
	}
	every := count == "" || count == rules.EveryTest
	if every && serials == nil {
		return rules.Retests{} // nothing needs to be known
	}
	r := rules.Retests{Count: count, Units: knownUnits}
	if every {
		r.Count = rules.EveryTest
	}
	if serials == nil {
		return r
	}
	const expected = "{ units = 10000 } or { days = 30 }"
	table, ok := serials.(map[string]any)
	if !ok {
		c.fault(key+".serials", "", expected, "read %v", serials)
		return rules.Retests{}
	}
	n := c.numbers(key+".serials", table, "units", "days")
	r.Units, r.Days = int(n["units"]), n["days"]
	if float64(r.Units) != n["units"] {
		c.fault(key+".serials", "", "a whole number of units", "read %v", n["units"])
		return rules.Retests{}
	}
	if err := r.Check(); err != nil {
		c.fault(key+".serials", "", expected, "%s", strings.TrimPrefix(err.Error(), "serials: "))
		return rules.Retests{}
	}
	return r
}

// retestsHaveSerials refuses to tell tests of a serial apart where no source brings serials.
func (c *checker) retestsHaveSerials() {
	for _, ch := range c.cfg.Plan.Characteristics {
		if ch.Retests == (rules.Retests{}) {
			continue
		}
		brings := func(s Source) bool {
			return s.Columns.Serial != "" && slices.ContainsFunc(s.Columns.Measured, func(m Measured) bool { return m.Characteristic == ch.Name })
		}
		if !slices.ContainsFunc(c.cfg.Sources, brings) {
			c.fault("characteristic."+ch.Name+".retests", "", "a column `serial` in a source that measures it",
				"the tests of a serial can't be told apart: no source brings serials of %q", ch.Name)
		}
	}
}
