package store

import (
	"slices"

	"steelyard/rules"
)

// rowsVersion is the version of records that speak of readings beyond a gauge's limits, of rigs'
// offsets and of quiet rules: what the engine makes of them is unknown to older programs.
const rowsVersion = 4

// saysMore says whether an event is one of those that came with rowsVersion.
func saysMore(e *rules.Event) bool {
	return e.Batch != nil && slices.ContainsFunc(e.Batch.Series, func(s rules.Series) bool { return s.Beyond != nil }) ||
		e.Adopted != nil && asksMore(&e.Adopted.Plan) || e.Moment != nil || e.Stepped != nil
}

// asksMore says whether a plan asks of the engine what came with rowsVersion.
func asksMore(p *rules.Plan) bool {
	return len(p.Offsets) > 0 ||
		slices.ContainsFunc(p.Characteristics, func(c rules.Characteristic) bool { return c.Gauge != rules.Gauge{} }) ||
		slices.ContainsFunc(p.Rules, func(r rules.Rule) bool { return r.Quiet != nil })
}

// appendBeyond writes readings beyond a gauge's limits column by column.
func appendBeyond(b []byte, beyond []rules.Bound) []byte {
	if beyond == nil {
		return appendCount(b, 0, true)
	}
	row, limit, above := make([]int, len(beyond)), make([]float64, len(beyond)), make([]int, len(beyond))
	for i, r := range beyond {
		row[i], limit[i] = r.Row, r.Limit
		if r.Above {
			above[i] = 1
		}
	}
	return appendInts(appendFloats(appendInts(b, row), limit), above)
}

func readBeyond(c *columns) []rules.Bound {
	row := c.ints()
	if row == nil {
		return nil
	}
	limit, above := c.floats(), c.ints()
	if c.err == nil && (len(limit) != len(row) || len(above) != len(row)) {
		c.fail("its readings beyond the gauge's limits have columns of different lengths")
	}
	if c.err != nil {
		return nil
	}
	beyond := make([]rules.Bound, len(row))
	for i := range beyond {
		if above[i] != 0 && above[i] != 1 {
			c.fail("a reading lies on side %d of its limit", above[i])
			return nil
		}
		beyond[i] = rules.Bound{Row: row[i], Limit: limit[i], Above: above[i] == 1}
	}
	return beyond
}
