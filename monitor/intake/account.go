package intake

import (
	"fmt"
	"iter"
	"slices"
	"strings"
	"time"

	"steelyard/rules"
)

// Row is what one row of a file becomes: the account for a person who tries a source out.
type Row struct {
	Line   int       // in the file, counted from 1
	On     string    // the line it is about
	Time   time.Time // in UTC; zero where the source has no such column
	Serial string
	Values []Value // none where the row holds no value, or is held
	Held   string  // why it is held; "" where it counts
	Aside  string  // why it is left out, as declared: "fault code E17"; "" where it is not
	Text   string  // of a held row, as it was written
}

// Value is one measurement of a row.
type Value struct {
	Characteristic string
	Value          float64 // normal, lognormal: the value; binomial: counted; poisson: count
	Of             float64 // binomial: of how many; poisson: exposure; 1 else
	Process        string  // where it goes: "head.L1", or the rig's offset
	Part           bool    // it is of a reference part: Value is what was read minus what is certified
	Side           int     // 1 where it lies above Value, beyond the gauge's limit; -1 below; else 0
}

// Rows tells what each row of the file became, in the order of the file. Blank rows are left
// out.
func (g *Reading) Rows(plan *rules.Plan) iter.Seq[Row] {
	rows := g.counted(plan)
	var held []rules.HeldRow
	if g.Batch != nil {
		held = g.Batch.Held
	} else if g.Held != nil {
		held = g.Held.Rows
	}
	for _, h := range held {
		rows = append(rows, Row{Line: h.Line, Held: h.Reason, Text: h.Text})
	}
	for _, a := range g.aside {
		rows = append(rows, Row{Line: a.line, Aside: g.why(a)})
	}
	for _, line := range g.NoValue {
		rows = append(rows, Row{Line: line})
	}
	slices.SortStableFunc(rows, func(a, b Row) int { return a.Line - b.Line })
	return slices.Values(rows)
}

// counted are the rows that count.
func (g *Reading) counted(plan *rules.Plan) []Row {
	if g.Batch == nil {
		return nil
	}
	b := g.Batch
	rows := make([]Row, len(b.Rows.Line))
	for i, line := range b.Rows.Line {
		rows[i].Line = line
		if b.Rows.Time != nil {
			rows[i].Time = time.Unix(0, b.Rows.Time[i]).UTC()
		}
		if b.Rows.Serial != nil {
			rows[i].Serial = b.Rows.Serial[i]
		}
	}
	for _, s := range b.Series {
		characteristic, line := divide(plan, s.Process)
		o, part := plan.OffsetNamed(s.Process)
		if part {
			characteristic, line = o.Characteristic, ""
		}
		add := func(i int, value, of float64, side int) {
			rows[i].On = line
			rows[i].Values = append(rows[i].Values, Value{
				Characteristic: characteristic, Value: value, Of: of, Process: s.Process, Part: part, Side: side,
			})
		}
		for k, i := range s.Row {
			of := 1.0
			if s.Of != nil {
				of = s.Of[k]
			}
			add(i, s.Value[k], of, 0)
		}
		for _, r := range s.Beyond {
			side := -1
			if r.Above {
				side = 1
			}
			add(r.Row, r.Limit, 1, side)
		}
	}
	return rows
}

// why says why a row was left out.
func (g *Reading) why(a asideRow) string {
	sums := g.asideSums
	return fmt.Sprintf("%s %s", sums[a.why].Kind, sums[a.why].Text)
}

// divide finds the characteristic and the line in the name of a process.
func divide(plan *rules.Plan, process string) (characteristic, line string) {
	for _, c := range plan.Characteristics {
		if line, ok := strings.CutPrefix(process, c.Name+"."); ok && slices.Contains(c.Lines, line) {
			return c.Name, line
		}
	}
	return process, ""
}
