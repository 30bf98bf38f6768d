package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strings"
	"text/tabwriter"
	"time"

	"steelyard/monitor"
	"steelyard/rules"
	"steelyard/rules/evidence"
)

type explainVerb struct {
	Alarm   string `arg:"" help:"The alarm: A7."`
	Exhibit string `placeholder:"FILE.html" help:"Write the page that proves itself, instead of the text."`
}

// Run shows what an alarm rests on.
func (v *explainVerb) Run(d *desk) error {
	number, err := alarmNumber(v.Alarm)
	if err != nil {
		return err
	}
	c, _, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	if v.Exhibit != "" {
		return v.writeExhibit(d, c, number)
	}
	x, err := c.Explain(number)
	if err != nil {
		return err
	}
	if d.JSON {
		return d.object(x)
	}
	return printExplanation(d.out, x, cfg.Site.Zone)
}

// writeExhibit writes the page; a file that is there is left alone.
func (v *explainVerb) writeExhibit(d *desk, c monitor.Counter, alarm int) error {
	page, err := c.Exhibit(alarm)
	if err != nil {
		return err
	}
	file, err := os.OpenFile(v.Exhibit, os.O_CREATE|os.O_EXCL|os.O_WRONLY, 0o644)
	if err != nil {
		return err
	}
	_, err = file.Write(page)
	if err = errors.Join(err, file.Close()); err != nil {
		return err
	}
	if d.JSON {
		return d.object(struct {
			Type string `json:"type"`
			File string `json:"file"`
		}{"exhibit", v.Exhibit})
	}
	_, err = fmt.Fprintf(d.out, "The exhibit of A%d is in %s. It is verified, here or elsewhere, with\n  steelyard verify %s --key FILE.pub\n", alarm, v.Exhibit, v.Exhibit)
	return err
}

func printExplanation(w io.Writer, x *monitor.Explanation, zone *time.Location) error {
	at := func(t time.Time) string { return clock(t, zone) }
	fmt.Fprintf(w, "%s, %s: %s\n\n", x.Site, x.Alarm, x.Says)
	fmt.Fprintf(w, "Rule %q, version %s\n", x.Rule.Name, x.Version)
	if x.Rule.Quiet != nil {
		fmt.Fprintf(w, "  waits for something to be counted, priority %s, told: %s\n", x.Rule.Priority, strings.Join(x.Rule.Tell, ", "))
	} else {
		fmt.Fprintf(w, "  claim %s\n  raise %v, clear %v, least units %d, priority %s, told: %s\n",
			x.Rule.Claim, x.Rule.Raise, x.Rule.Clear, x.Rule.LeastUnits, x.Rule.Priority, strings.Join(x.Rule.Tell, ", "))
	}
	for _, p := range x.Priors {
		fmt.Fprintf(w, "  %s: %s family, prior %s, remembers %s%s\n", p.Characteristic, p.Family, plainJSON(p.Prior), plainJSON(p.Remember), testsText(p.Tests))
	}
	fmt.Fprintf(w, "  in force since %s (record %d): configuration %s, SHA-256 %s, adopted by %s\n",
		at(x.Adopted.At), x.Adopted.Record, x.Adopted.File, x.Adopted.Digest, x.Adopted.By)
	cr := &x.Crossing
	if x.Rule.Quiet != nil {
		fmt.Fprintf(w, "\nIt was raised by the clock at %s (record %d): it rests on no measurement\n", at(cr.At), cr.Record)
	} else {
		fmt.Fprintf(w, "\nIt crossed %v at %s (record %d): probability %.17g, contrary %.17g\n", cr.Raise, at(cr.At), cr.Record, cr.Probability, cr.Contrary)
	}
	if cr.File != "" {
		fmt.Fprintf(w, "  with file %s of %s, %d rows, lines %d to %d, SHA-256 %s\n", cr.File, cr.Source, cr.Rows, cr.FirstLine, cr.LastLine, cr.SHA256)
	}
	t := tabwriter.NewWriter(w, 0, 4, 2, ' ', 0)
	fmt.Fprintln(t, "\nWhat was believed\tunits\testimate\t95 % between\tunit")
	for _, p := range x.Processes {
		fmt.Fprintf(t, "  %s before\t%s\t%s\n", p.Process, units(p.Before.Units), estimateCells(&p.Before))
		fmt.Fprintf(t, "  %s after\t%s\t%s\n", p.Process, units(p.After.Units), estimateCells(&p.After))
	}
	fmt.Fprintln(t, "\nLooks around the crossing\trecord\tprobability\todds\tfile")
	for _, l := range x.Looks {
		p, odds := lookText(&l)
		mark := " "
		if l.Crossed {
			mark = ">"
		}
		fmt.Fprintf(t, "%s %s\t%d\t%s\t%s\t%s\n", mark, at(l.At), l.Record, p, odds, l.File)
	}
	fmt.Fprintln(t, "\nBatches it rests on\trecord\tsource and file\tvalues\tSHA-256")
	if x.Earlier > 0 {
		fmt.Fprintf(t, "  and %d earlier\t\t\t\t\n", x.Earlier)
	}
	for _, b := range x.Batches {
		fmt.Fprintf(t, "  %s\t%d\t%s %s\t%s\t%.16s…\n", at(b.At), b.Record, b.Source, b.File, valuesText(&b), b.SHA256)
	}
	if err := t.Flush(); err != nil {
		return err
	}
	fmt.Fprintln(w, "\nWhat happened to it")
	for _, s := range x.Steps {
		fmt.Fprintf(w, "  %s (record %d) %s: %s\n", at(s.At), s.Record, s.Cause, s.Text)
	}
	printWithdrawnSince(w, x, zone)
	_, err := fmt.Fprintln(w, "\n"+x.Caution)
	return err
}

// printWithdrawnSince says what of the evidence no longer counts.
func printWithdrawnSince(w io.Writer, x *monitor.Explanation, zone *time.Location) {
	if x.Stands == nil {
		return
	}
	fmt.Fprintln(w, "\nWithdrawn since")
	for _, s := range x.Withdrawn {
		by := ""
		if s.By != "" {
			by = " by " + s.By
		}
		fmt.Fprintf(w, "  the batch of record %d, at %s (record %d)%s: %s\n", s.Batch, clock(s.At, zone), s.Record, by, s.Reason)
	}
	if *x.Stands {
		fmt.Fprintf(w, "  Without them %s would have been raised at the same record.\n", x.Alarm)
	} else {
		fmt.Fprintf(w, "  Without them %s would not have been raised at that record.\n", x.Alarm)
	}
}

func testsText(says string) string {
	if says == "" {
		return ""
	}
	return "; " + says
}

func lookText(l *monitor.LookAt) (p, odds string) {
	if l.Probability == nil {
		return "-", l.Withheld
	}
	o := evidence.Odds{LogFor: math.Log(*l.Probability), LogAgainst: math.Log(*l.Contrary)}
	return rules.ProbabilityText(o), rules.OddsText(o)
}

func valuesText(b *monitor.BatchOf) string {
	var parts []string
	for process, n := range b.Values {
		parts = append(parts, fmt.Sprintf("%d of %s", n, process))
	}
	slices.Sort(parts)
	if b.HeldRows > 0 {
		parts = append(parts, fmt.Sprintf("%d rows held", b.HeldRows))
	}
	return strings.Join(parts, ", ")
}

// plainJSON shows a small setting as it stands in the journal.
func plainJSON(v any) string {
	text, err := json.Marshal(v)
	if err != nil {
		return err.Error()
	}
	return string(text)
}
