package daylog

import (
	"bytes"
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"

	"steelyard/rules"
	"steelyard/rules/evidence"
)

// Markdown is the log for people. Times are given by the clock of zone.
func (l *Log) Markdown(zone *time.Location) []byte {
	var w bytes.Buffer
	fmt.Fprintf(&w, "# %s, %s: day log\n\n", text(l.Site), l.Day)
	state := "The day was over when this was written"
	if !l.Whole {
		state = "The day was still going on when this was written"
	}
	fmt.Fprintf(&w, "From %s to %s. %s, at %s. Journal records %d up to %d.\n\n%s\n",
		stamp(l.From, zone), stamp(l.To, zone), state, stamp(l.Written, zone), l.Records[0], l.Records[1], l.Caution)
	l.alarms(&w, zone)
	l.crossed(&w, zone)
	l.cameIn(&w)
	l.leftOut(&w)
	l.held(&w, zone)
	l.gaps(&w, zone)
	l.processes(&w, zone)
	l.rigs(&w, zone)
	section(&w, "Remarks", len(l.Remarks) == 0, "None.")
	for _, r := range l.Remarks {
		fmt.Fprintf(&w, "- %s\n", text(r))
	}
	if l.Checkpoint != "" {
		section(&w, "The journal up to here", false, "")
		fmt.Fprintf(&w, "Keep a copy of this log elsewhere: `steelyard verify --against` this file shows whether the journal was changed since.\n"+
			"The key to verify with: `%s`\n\n```\n%s```\n", l.Verifying, l.Checkpoint)
	}
	return w.Bytes()
}

func section(w *bytes.Buffer, title string, empty bool, none string) {
	fmt.Fprintf(w, "\n## %s\n\n", title)
	if empty {
		fmt.Fprintln(w, none)
	}
}

func (l *Log) alarms(w *bytes.Buffer, zone *time.Location) {
	section(w, "Alarms that stand", len(l.Alarms) == 0, "None.")
	for _, a := range l.Alarms {
		fmt.Fprintf(w, "- **%s** %s since %s: %s\n", a.Alarm, a.State, stamp(a.Since, zone), text(a.Says))
	}
}

func (l *Log) crossed(w *bytes.Buffer, zone *time.Location) {
	section(w, "What crossed, and who answered", len(l.Changes) == 0, "Nothing.")
	for _, c := range l.Changes {
		fmt.Fprintf(w, "- %s **%s** %s (rule %s, record %d): %s\n",
			clock(c.At, zone), c.Alarm, c.Cause, quote(c.Rule), c.Record, text(c.Text))
	}
}

func (l *Log) cameIn(w *bytes.Buffer) {
	section(w, "What came in", len(l.Sources) == 0, "Nothing.")
	if len(l.Sources) == 0 {
		return
	}
	fmt.Fprintln(w, "| source | files counted | rows | measurements | files held | rows held | came again |")
	fmt.Fprintln(w, "|---|--:|--:|--:|--:|--:|--:|")
	for _, s := range l.Sources {
		fmt.Fprintf(w, "| %s | %d | %d | %d | %d | %d | %d |\n",
			cell(s.Name), s.Files, s.Rows, s.Measurements, s.HeldFiles, s.HeldRows, s.Again)
	}
}

func (l *Log) held(w *bytes.Buffer, zone *time.Location) {
	section(w, "What was held, and why", len(l.Held) == 0, "Nothing.")
	for _, h := range l.Held {
		fmt.Fprintf(w, "- %s %s: %s\n", clock(h.At, zone), text(h.Source), text(h.Reason))
	}
}

func (l *Log) gaps(w *bytes.Buffer, zone *time.Location) {
	section(w, "When nothing was watching", len(l.Gaps) == 0, "Everything was watched throughout.")
	for _, g := range l.Gaps {
		until := "had not ended"
		if !g.To.IsZero() {
			until = fmt.Sprintf("%s, %s", clock(g.To, zone), g.To.Sub(g.From).Round(time.Second))
		}
		fmt.Fprintf(w, "- %s, from %s to %s: %s\n", text(g.What), clock(g.From, zone), until, text(g.Why))
	}
}

func (l *Log) processes(w *bytes.Buffer, zone *time.Location) {
	section(w, "Where each process stands", len(l.Processes) == 0, "No process is configured.")
	if len(l.Processes) == 0 {
		return
	}
	fmt.Fprintln(w, "| process | units | estimate | 95 % between | unit | last measured |")
	fmt.Fprintln(w, "|---|--:|---|---|---|---|")
	for _, p := range l.Processes {
		if p.IsOffset() {
			continue // rigs
		}
		estimate, between := "-", p.Why
		if p.Estimate != nil {
			m, lo, hi := figures(p.Estimate)
			estimate, between = p.Quantity+" "+m, lo+" and "+hi
		}
		if p.Tests != "" {
			estimate += "; " + p.Tests
		}
		last := "never"
		if !p.LastMeasured.IsZero() {
			last = stamp(p.LastMeasured, zone)
		}
		fmt.Fprintf(w, "| %s | %s | %s | %s | %s | %s |\n", cell(p.Process),
			strconv.FormatFloat(math.Round(p.Units*10)/10, 'f', -1, 64), cell(estimate), cell(between), cell(p.Unit), last)
	}
	l.notes(w)
}

// figures writes an interval with the digits its width deserves.
func figures(q *evidence.Interval) (median, lower, upper string) {
	d := rules.Decimals(*q)
	f := func(x float64) string { return strconv.FormatFloat(x, 'f', d, 64) }
	return f(q.Median), f(q.Lower), f(q.Upper)
}

func stamp(t time.Time, zone *time.Location) string {
	return t.In(zone).Format("2006-01-02 15:04:05 -07:00")
}

func clock(t time.Time, zone *time.Location) string { return t.In(zone).Format("15:04:05") }

// text keeps what came from a rig or a person from being taken for Markdown.
func text(s string) string {
	var b strings.Builder
	for _, r := range s {
		switch {
		case r < ' ' || r == 0x7f:
			fmt.Fprintf(&b, "\\x%02x", r)
		case strings.ContainsRune("\\`*_[]<>|#", r):
			b.WriteByte('\\')
			b.WriteRune(r)
		default:
			b.WriteRune(r)
		}
	}
	return b.String()
}

func cell(s string) string { return text(s) }

func quote(s string) string { return "“" + text(s) + "”" }
