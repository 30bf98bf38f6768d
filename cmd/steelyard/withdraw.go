package main

import (
	"fmt"
	"io"
	"slices"
	"strings"
	"time"

	"steelyard/monitor"
)

type withdrawVerb struct {
	Batches []uint64 `arg:"" optional:"" help:"Records that counted the batches: 12. Explain and the log of the daemon name them."`
	Source  string   `help:"Every batch of this source, with --from and --to." placeholder:"NAME"`
	From    string   `help:"That has a measurement made at or after this time." placeholder:"TIME"`
	To      string   `help:"And before this one." placeholder:"TIME"`
	Reason  string   `required:"" help:"What was found: rig1 out of calibration, certificate 4711." placeholder:"TEXT"`
	By      string   `help:"Who withdraws; the account of the operating system where not given." placeholder:"NAME"`
	Try     bool     `help:"Say what would be withdrawn, and which alarms of the past rest on it; change nothing."`
}

// Run takes batches out of what counts.
func (v *withdrawVerb) Run(d *desk) error {
	c, running, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	w := monitor.Withdrawal{Batches: v.Batches, Source: v.Source, Reason: v.Reason, Try: v.Try}
	w.By, w.How = whoever(v.By)
	if w.From, err = moment(v.From, cfg.Site.Zone); err != nil {
		return err
	}
	if w.To, err = moment(v.To, cfg.Site.Zone); err != nil {
		return err
	}
	a, err := c.Withdraw(w)
	if err != nil {
		return err
	}
	if d.JSON {
		return d.object(a)
	}
	printWithdrawn(d.out, a, cfg.Site.Zone)
	d.notWatching(running)
	return nil
}

// whoever is who acts through a verb, and how that was established.
func whoever(typed string) (by, how string) {
	account := monitor.Whoever()
	if typed == "" {
		return account, "account of the operating system"
	}
	return typed, "as typed, by account " + account
}

// notWatching says that the feeds will be told later, where no daemon runs.
func (d *desk) notWatching(running bool) {
	if !running {
		fmt.Fprintln(d.out, "No daemon runs; the feeds are told at the next start.")
	}
}

// moment reads a time: with an offset, or by the clock of the site.
func moment(text string, zone *time.Location) (time.Time, error) {
	if text == "" {
		return time.Time{}, nil
	}
	if t, err := time.Parse(time.RFC3339, text); err == nil {
		return t, nil
	}
	for _, layout := range []string{"2006-01-02T15:04:05", "2006-01-02T15:04", "2006-01-02 15:04:05", "2006-01-02 15:04", time.DateOnly} {
		if t, err := time.ParseInLocation(layout, text, zone); err == nil {
			return t, nil
		}
	}
	return time.Time{}, fmt.Errorf("time %q: a date with a time such as 2026-03-02T14:00 is expected, by the clock of %s where it has no offset", text, zone)
}

// mostLines is how many batches are listed one by one.
const mostLines = 40

func printWithdrawn(w io.Writer, a *monitor.Withdrawn, zone *time.Location) {
	verb := fmt.Sprintf("Withdrawn at %s (record %d)", clock(a.At, zone), a.Record)
	if a.Tried {
		verb = "NOTHING IS CHANGED. What would be withdrawn"
	}
	fmt.Fprintf(w, "%s, by %s (%s): %s\n\nBatches\n", verb, a.By, a.How, a.Reason)
	for _, b := range a.Batches[:min(len(a.Batches), mostLines)] {
		fmt.Fprintf(w, "  record %d, %s: %s of %s, %s%s\n", b.Record, clock(b.At, zone), b.File, b.Source, counts(b.Values), beyond(b.Beyond))
	}
	if more := len(a.Batches) - mostLines; more > 0 {
		fmt.Fprintf(w, "  and %d more\n", more)
	}
	if !a.Tried {
		fmt.Fprintln(w, "\nWhat followed")
		for _, s := range a.Changes {
			fmt.Fprintf(w, "  %s\n", s.Text)
		}
		if len(a.Changes) == 0 {
			fmt.Fprintln(w, "  no alarm changed")
		}
	}
	fmt.Fprintf(w, "\nWithout these batches, in the %d records before\n", a.Before)
	for _, p := range a.NotThen {
		fmt.Fprintf(w, "  %s would not have been raised at %s (record %d)%s: %s\n", p.Alarm, clock(p.At, zone), p.Record, instead(&p, zone), p.Says)
	}
	for _, p := range a.Then {
		fmt.Fprintf(w, "  rule %q would have been raised at %s (record %d): %s\n", p.Rule, clock(p.At, zone), p.Record, p.Says)
	}
	if len(a.NotThen)+len(a.Then) == 0 {
		fmt.Fprintln(w, "  the same alarms would have been raised, at the same records")
	}
	fmt.Fprintln(w, "\n"+a.Caution)
}

func instead(p *monitor.PastRaise, zone *time.Location) string {
	if p.Instead == nil {
		return ""
	}
	return fmt.Sprintf(" but at %s (record %d)", clock(*p.InsteadAt, zone), *p.Instead)
}

func beyond(rows int) string {
	if rows == 0 {
		return ""
	}
	return fmt.Sprintf("; %d of its rows lie outside the two times, and go with it", rows)
}

// counts are numbers of measurements by process.
func counts(values map[string]int) string {
	var parts []string
	for process, n := range values {
		parts = append(parts, fmt.Sprintf("%d of %s", n, process))
	}
	slices.Sort(parts)
	return strings.Join(parts, ", ")
}
