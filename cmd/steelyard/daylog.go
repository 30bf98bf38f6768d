package main

import "fmt"

type daylogVerb struct {
	Day   string `arg:"" optional:"" help:"The date on which the production day started: 2026-03-02. Today's where not given."`
	Print bool   `help:"Print the log as well."`
}

// Run writes the log of a production day.
func (v *daylogVerb) Run(d *desk) error {
	c, _, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	log, markdown, machine, err := c.WriteDayLog(v.Day)
	if err != nil {
		return err
	}
	if d.JSON {
		return d.object(log)
	}
	if v.Print {
		fmt.Fprintf(d.out, "%s\n", log.Markdown(cfg.Site.Zone))
	}
	_, err = fmt.Fprintf(d.out, "The log of %s is in %s and, for machines, %s.\n", log.Day, markdown, machine)
	return err
}
