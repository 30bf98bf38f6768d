package main

import (
	"fmt"
	"strconv"
	"strings"
	"time"

	"steelyard/monitor"
	"steelyard/monitor/config"
)

type heldVerb struct {
	List     heldListVerb `cmd:"" default:"1" help:"List what waits for a decision."`
	Show     heldShowVerb `cmd:"" help:"Show one held file, or the held rows of one file, whole."`
	Take     heldTakeVerb `cmd:"" help:"Count something held after all, read anew as its source is configured today."`
	SetAside setAsideVerb `cmd:"" help:"Decide that something held is not counted, for good. It is kept."`
}

type heldListVerb struct {
	Source string `help:"Only of this source." placeholder:"NAME"`
}

// Run lists what waits; the exit status says whether anything does.
func (v *heldListVerb) Run(d *desk) error {
	c, _, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	items, err := c.Held()
	if err != nil {
		return err
	}
	shown := 0
	for i := range items {
		if v.Source != "" && items[i].Source != v.Source {
			continue
		}
		shown++
		if err := d.heldItem(&items[i], cfg, false); err != nil {
			return err
		}
	}
	switch {
	case shown > 0 && !d.JSON:
		d.line("\n%d wait for a decision: steelyard held take NUMBER, or held set-aside NUMBER, each with --reason.", shown)
	case shown == 0 && !d.JSON:
		d.line("Nothing that is held waits for a decision.")
	}
	if shown > 0 {
		return outcome(exitHeld)
	}
	return nil
}

func (d *desk) heldItem(i *monitor.HeldItem, cfg *config.Config, whole bool) error {
	if d.JSON {
		return d.object(i)
	}
	d.line("%-8s %s  %s %s", i.Held, clock(i.At, cfg.Site.Zone), i.Source, i.Reason)
	if !whole {
		return nil
	}
	if i.Text != "" {
		d.line("         it reads: %s", i.Text)
	}
	for _, r := range i.Rows {
		d.line("         line %d: %s\n           it reads: %s", r.Line, r.Reason, r.Text)
	}
	if i.Kept != "" {
		d.line("         the copy of the file: %s", i.Kept)
	}
	if i.Decided {
		d.line("         decided on; the day log of the decision says how")
	}
	return nil
}

type heldShowVerb struct {
	Number string `arg:"" help:"12 for a file or all rows of one, 12:5 for the row of line 5."`
}

// Run shows one.
func (v *heldShowVerb) Run(d *desk) error {
	ref, err := heldRef(v.Number)
	if err != nil {
		return err
	}
	c, _, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	items, err := c.ShowHeld(ref)
	for i := range items {
		if err := d.heldItem(&items[i], cfg, true); err != nil {
			return err
		}
	}
	return err
}

// heldRef reads 12 or 12:5.
func heldRef(text string) (ref monitor.HeldRef, err error) {
	record, line, isRow := strings.Cut(text, ":")
	ref.Record, err = strconv.ParseUint(record, 10, 64)
	if err == nil && isRow {
		ref.Line, err = strconv.Atoi(line)
	}
	if err != nil || isRow && ref.Line < 1 {
		return ref, fmt.Errorf("%q: a number such as 12, or 12:5 for the row of line 5, is expected; steelyard held lists them", text)
	}
	return ref, nil
}

type heldTakeVerb struct {
	Number  string `arg:"" help:"12 for a file or all rows of one, 12:5 for the row of line 5."`
	Reason  string `required:"" help:"What was found." placeholder:"TEXT"`
	By      string `help:"Who decides; the account of the operating system where not given." placeholder:"NAME"`
	Replace bool   `help:"In the place of what a file of this name brought before."`
}

// Run counts something held.
func (v *heldTakeVerb) Run(d *desk) error {
	return d.decide(v.Number, monitor.Decision{Take: true, Replace: v.Replace, Reason: v.Reason}, v.By)
}

type setAsideVerb struct {
	Number string `arg:"" help:"12 for a file or all rows of one, 12:5 for the row of line 5."`
	Reason string `required:"" help:"Why it is not counted." placeholder:"TEXT"`
	By     string `help:"Who decides; the account of the operating system where not given." placeholder:"NAME"`
}

// Run sets something held aside.
func (v *setAsideVerb) Run(d *desk) error {
	return d.decide(v.Number, monitor.Decision{Reason: v.Reason}, v.By)
}

func (d *desk) decide(number string, q monitor.Decision, by string) (err error) {
	if q.HeldRef, err = heldRef(number); err != nil {
		return err
	}
	c, running, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	q.By, q.How = whoever(by)
	a, err := c.Decide(q)
	if err != nil {
		return err
	}
	switch {
	case d.JSON:
		err = d.object(a)
	default:
		d.decided(a, cfg.Site.Zone)
		d.notWatching(running)
	}
	if err == nil && a.StillHeld > 0 {
		return outcome(exitHeld)
	}
	return err
}

func (d *desk) decided(a *monitor.HeldDecided, zone *time.Location) {
	what := a.File
	if len(a.Lines) > 0 {
		what = fmt.Sprintf("%d held rows of %s", len(a.Lines), a.File)
	}
	if !a.Take {
		d.line("%s of %s: set aside for good by %s at %s (record %d): %s", what, a.Source, a.By, clock(a.At, zone), a.Record, a.Reason)
		return
	}
	d.line("%s of %s: taken after all by %s at %s (record %d); %d rows count: %s", what, a.Source, a.By, clock(a.At, zone), a.Record, a.Rows, a.Reason)
	if a.StillHeld > 0 {
		d.line("  %d of its rows are held in turn; steelyard held show %d shows them", a.StillHeld, a.Record)
	}
	for _, s := range a.Changes {
		d.line("  %s", s.Text)
	}
	d.line("\n%s", a.Caution)
}
