package daylog

import (
	"bytes"
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"

	"steelyard/rules"
)

// LeftOut is how many rows of a source were left out for one declared reason.
type LeftOut struct {
	Source string `json:"source"`
	Kind   string `json:"kind"` // "fault code", "variant"
	Text   string `json:"text"`
	Rows   int    `json:"rows"`
}

// rows counts what a batch brought beside its measurements, and what had to be decided to read it.
func (c *Collector) rows(e *rules.Event, s *Source) {
	b := e.Batch
	for _, series := range b.Series {
		if _, ok := c.plan.OffsetNamed(series.Process); ok {
			s.Parts += len(series.Value)
			continue
		}
		s.Measurements += len(series.Value)
		s.Beyond += len(series.Beyond)
	}
	for _, a := range b.Aside {
		i := slices.IndexFunc(c.log.LeftOut, func(l LeftOut) bool { return l.Source == b.Source && l.Kind == a.Kind && l.Text == a.Text })
		if i < 0 {
			i = len(c.log.LeftOut)
			c.log.LeftOut = append(c.log.LeftOut, LeftOut{Source: b.Source, Kind: a.Kind, Text: a.Text})
		}
		c.log.LeftOut[i].Rows += a.Rows
	}
	for _, name := range b.Ignored {
		if !slices.Contains(s.Ignored, name) {
			s.Ignored = append(s.Ignored, name)
		}
	}
	for _, r := range b.Remarks {
		c.remark(e.At, "Source %s: %s.", b.Source, strings.TrimSuffix(r, "."))
	}
}

// stepped notes that the clock on the wall did not go on as time did. Whether it was set forward or
// the machine slept can't be told: so nothing may have been watching in between.
func (c *Collector) stepped(e *rules.Event) {
	was, is := e.Stepped.Was, e.Stepped.Is
	by := is.Sub(was)
	if by > 0 {
		c.remark(e.At, "The clock on the wall went forward by %s: it was set, or the machine slept.", round(by))
		c.log.Gaps = append(c.log.Gaps, Gap{From: was, To: is, What: "everything", Why: "the clock was set forward, or the machine slept"})
		return
	}
	c.remark(e.At, "The clock on the wall was set back by %s; times before and after this record overlap.", round(-by))
}

// round keeps of a time what matters.
func round(d time.Duration) time.Duration {
	if d >= time.Minute {
		return d.Round(time.Second)
	}
	return d.Round(100 * time.Millisecond)
}

func (l *Log) leftOut(w *bytes.Buffer) {
	var beside []string
	for _, s := range l.Sources {
		if s.Beyond > 0 {
			beside = append(beside, fmt.Sprintf("%s: %d readings beyond a gauge's limits, which are counted and are no values", text(s.Name), s.Beyond))
		}
		if s.Parts > 0 {
			beside = append(beside, fmt.Sprintf("%s: %d readings of reference parts, which go to the rig's offset", text(s.Name), s.Parts))
		}
		if len(s.Ignored) > 0 {
			beside = append(beside, fmt.Sprintf("%s: columns that nothing is mapped to: %s", text(s.Name), text(strings.Join(s.Ignored, ", "))))
		}
	}
	section(w, "What was left out as declared", len(l.LeftOut)+len(beside) == 0, "Nothing.")
	for _, a := range l.LeftOut {
		fmt.Fprintf(w, "- %s: %d rows with the %s %s\n", text(a.Source), a.Rows, text(a.Kind), quote(a.Text))
	}
	for _, line := range beside {
		fmt.Fprintf(w, "- %s\n", line)
	}
}

// notes are what to bear in mind with the processes' figures.
func (l *Log) notes(w *bytes.Buffer) {
	first := true
	for i := range l.Processes {
		for _, note := range l.Processes[i].Notes() {
			if first {
				fmt.Fprintln(w)
			}
			first = false
			fmt.Fprintf(w, "- %s\n", text(note))
		}
	}
}

// rigs are the rigs' offsets, from reference parts, with the age of the last reading.
func (l *Log) rigs(w *bytes.Buffer, zone *time.Location) {
	none := !slices.ContainsFunc(l.Processes, func(s rules.Standing) bool { return s.IsOffset() })
	if none {
		return
	}
	section(w, "Where each rig stands, by reference parts", false, "")
	fmt.Fprintln(w, "| rig | of | readings | offset | 95 % between | unit | last reading | reference parts |")
	fmt.Fprintln(w, "|---|---|--:|---|---|---|---|---|")
	for i := range l.Processes {
		p := &l.Processes[i]
		if !p.IsOffset() {
			continue
		}
		offset, between := "-", p.Why
		if p.Estimate != nil {
			m, lo, hi := figures(p.Estimate)
			offset, between = m, lo+" and "+hi
		}
		last := "never"
		if !p.LastMeasured.IsZero() {
			last = fmt.Sprintf("%s, %s before", stamp(p.LastMeasured, zone), round(max(l.To.Sub(p.LastMeasured), 0)))
		}
		fmt.Fprintf(w, "| %s | %s | %s | %s | %s | %s | %s | %s |\n", cell(p.Line), cell(p.Label),
			strconv.FormatFloat(p.Units, 'f', -1, 64), cell(offset), cell(between), cell(p.Unit), last, cell(p.PartsText()))
	}
	fmt.Fprintln(w, "\nAn offset is what was read of a reference part minus what it is certified to be. How well the parts themselves are known is stated and not weighed.")
}
