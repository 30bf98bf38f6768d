package main

import (
	"fmt"
	"strings"

	"steelyard/monitor"
)

type markVerb struct {
	Line           string `help:"Every process of this line." placeholder:"NAME" xor:"about"`
	Characteristic string `help:"This characteristic on every line." placeholder:"NAME" xor:"about"`
	Process        string `help:"One process: head.L4." placeholder:"NAME" xor:"about"`
	Source         string `help:"Every process that this rig feeds." placeholder:"NAME" xor:"about"`
	At             string `help:"When it was; what was measured before then no longer counts. Without it, from now on by arrival." placeholder:"TIME"`
	Note           string `required:"" help:"What was changed: new boring insert." placeholder:"TEXT"`
	By             string `help:"Who marks; the account of the operating system where not given." placeholder:"NAME"`
}

// Run starts a segment.
func (v *markVerb) Run(d *desk) error {
	c, running, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	m := monitor.Mark{Line: v.Line, Characteristic: v.Characteristic, Process: v.Process, Source: v.Source, Note: v.Note}
	m.By, m.How = whoever(v.By)
	if m.At, err = moment(v.At, cfg.Site.Zone); err != nil {
		return err
	}
	a, err := c.Mark(m)
	if err != nil {
		return err
	}
	if d.JSON {
		return d.object(a)
	}
	fmt.Fprintf(d.out, "A new segment since %s for %s (record %d), marked by %s: %s\n",
		clock(a.Since, cfg.Site.Zone), strings.Join(a.Processes, ", "), a.Record, a.By, a.Note)
	for _, s := range a.Changes {
		fmt.Fprintf(d.out, "  %s\n", s.Text)
	}
	d.notWatching(running)
	return nil
}
