package main

import (
	"fmt"

	"steelyard/monitor"
)

type exportVerb struct {
	What string `arg:"" enum:"measurements,looks,crossings" help:"measurements, looks or crossings."`
	From string `placeholder:"TIME" help:"Taken in from then on: 2026-03-02, 2026-03-02T06:00 (by the site's clock) or RFC 3339."`
	To   string `placeholder:"TIME" help:"Taken in before then."`
}

// Run writes a stretch of the journal to standard output: CSV or, with --json, JSON lines.
func (v *exportVerb) Run(d *desk) error {
	c, _, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	q := monitor.Export{What: v.What, Form: "csv"}
	if d.JSON {
		q.Form = "jsonl"
	}
	if q.From, err = moment(v.From, cfg.Site.Zone); err != nil {
		return fmt.Errorf("--from: %w", err)
	}
	if q.To, err = moment(v.To, cfg.Site.Zone); err != nil {
		return fmt.Errorf("--to: %w", err)
	}
	return c.Export(q, d.out)
}
