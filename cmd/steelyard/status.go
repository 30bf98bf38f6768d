package main

import (
	"fmt"
	"io"
	"math"
	"strconv"
	"text/tabwriter"
	"time"

	"steelyard/monitor"
	"steelyard/rules"
)

type statusVerb struct {
	AlarmExit bool `help:"End with status 11 while an alarm stands."`
}

// Run says where everything stands.
func (v *statusVerb) Run(d *desk) error {
	c, running, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	st, err := c.Status()
	if err != nil {
		return err
	}
	st.Watching = running
	if d.JSON {
		err = d.object(st)
	} else {
		err = printStatus(d.out, st, cfg.Site.Zone)
	}
	if err == nil && v.AlarmExit && len(st.Alarms) > 0 {
		return outcome(exitAlarm)
	}
	return err
}

func printStatus(w io.Writer, st *monitor.Status, zone *time.Location) error {
	if st.Watching {
		fmt.Fprintf(w, "%s: watching, at %s. %d records in the journal.\n", st.Site, clock(st.Now, zone), st.Records)
	} else {
		fmt.Fprintf(w, "%s: NOT WATCHING; no daemon runs%s. %d records in the journal.\n",
			st.Site, lastAlive(st.LastAlive, zone), st.Records)
	}
	if st.Disk.Low {
		fmt.Fprintf(w, "THE DISK IS NEARLY FULL: %.2f GB are left; when there is no room the program stops counting.\n", float64(st.Disk.Free)/1e9)
	}
	fmt.Fprintln(w, "\nAlarms")
	if len(st.Alarms) == 0 {
		fmt.Fprintln(w, "  none stands")
	}
	for _, a := range st.Alarms {
		fmt.Fprintf(w, "  A%d  %s, %s priority, since %s: %s\n", a.Alarm, a.State, a.Priority, clock(a.Since, zone), a.Says)
	}
	t := tabwriter.NewWriter(w, 0, 4, 2, ' ', 0)
	fmt.Fprintln(t, "\nRules\tprobability\todds\traise\tclear\tstate\tlast look")
	for _, r := range st.Rules {
		if r.Quiet != nil {
			fmt.Fprintf(t, "  %s\t-\twaits %s\t-\t-\t%s\tlast counted %s\n", r.Rule, r.Quiet.For, r.State, clock(r.Counted, zone))
			continue
		}
		p, odds, at := lookCells(&r, zone)
		fmt.Fprintf(t, "  %s\t%s\t%s\t%v\t%v\t%s\t%s\n", r.Rule, p, odds, r.Raise, r.Clear, r.State, at)
	}
	fmt.Fprintln(t, "\nProcesses\tunits\testimate\t95 % between\tunit\tlast measured")
	for _, p := range st.Processes {
		if p.IsOffset() {
			continue // printRigs
		}
		fmt.Fprintf(t, "  %s\t%s\t%s\t%s\n", p.Process, units(p.Units), estimateCells(&p), measuredCell(&p, zone))
	}
	printRigs(t, st, zone)
	if st.Watching {
		fmt.Fprintln(t, "\nSources\tfiles counted\twith something held\tcame again\tlast file\t")
		for _, s := range st.Sources {
			fmt.Fprintf(t, "  %s\t%d\t%d\t%d\t%s\t%s\n", s.Name, s.Counted, s.Held, s.Again, s.LastFile, sourceNote(&s))
		}
	}
	for _, f := range st.Feeds {
		if f.Waiting > 0 || f.Trouble != "" {
			fmt.Fprintf(t, "\nFeed %s: %d messages wait to be delivered. %s\n", f.Name, f.Waiting, f.Trouble)
		}
	}
	if err := t.Flush(); err != nil {
		return err
	}
	if h := st.Waiting; h.Files+h.Rows > 0 {
		fmt.Fprintf(w, "\nHeld, and waiting for a decision: files %d, rows of others %d. steelyard held lists them.\n", h.Files, h.Rows)
	}
	printNotes(w, st, zone)
	_, err := fmt.Fprintln(w, "\n"+st.Caution)
	return err
}

func lookCells(r *rules.RuleStanding, zone *time.Location) (p, odds, at string) {
	switch {
	case r.Look == nil:
		return "-", "not looked at yet", "-"
	case r.Look.Withheld != "":
		return "-", r.Look.Withheld, clock(r.LookAt, zone)
	}
	o := r.Look.Odds()
	return rules.ProbabilityText(o), rules.OddsText(o), clock(r.LookAt, zone)
}

func estimateCells(p *rules.Standing) string {
	if p.Estimate == nil {
		return "-\t" + p.Why + "\t" + withTests(p)
	}
	f := func(x float64) string { return strconv.FormatFloat(x, 'f', rules.Decimals(*p.Estimate), 64) }
	return fmt.Sprintf("%s %s\t%s and %s\t%s", p.Quantity, f(p.Estimate.Median), f(p.Estimate.Lower), f(p.Estimate.Upper), withTests(p))
}

// withTests is the unit, with which test of a serial counts.
func withTests(p *rules.Standing) string {
	if p.Tests == "" {
		return p.Unit
	}
	return p.Unit + " (" + p.Tests + ")"
}

func measuredCell(p *rules.Standing, zone *time.Location) string {
	if p.LastMeasured.IsZero() {
		return "never"
	}
	return clock(p.LastMeasured, zone)
}

func sourceNote(s *monitor.SourceStatus) string {
	switch {
	case !s.Able:
		return "NOT LOOKING: " + s.Why
	case s.Remark != "":
		return s.Remark
	}
	return ""
}

func lastAlive(t time.Time, zone *time.Location) string {
	if t.IsZero() {
		return ""
	}
	return ", and the last one was there until " + clock(t, zone)
}

func units(n float64) string { return strconv.FormatFloat(math.Round(n*10)/10, 'f', -1, 64) }

func clock(t time.Time, zone *time.Location) string { return t.In(zone).Format("2006-01-02 15:04:05") }
