package main

import (
	"fmt"
	"os"
	"path/filepath"

	"github.com/mattn/go-isatty"

	"steelyard/monitor"
)

type verifyVerb struct {
	Folder  string   `arg:"" optional:"" help:"A copy of the store, such as a backup. The configuration's state folder where not given."`
	Key     string   `placeholder:"FILE" help:"The key to verify with, as its holder has it (a .pub file). The store's own where not given."`
	Against []string `placeholder:"FILE" help:"Day logs, feed files or checkpoints that left the machine; may be given several times."`
}

// Run counts the record anew and drives the engine over it.
func (v *verifyVerb) Run(d *desk) error {
	q := monitor.Verification{Folder: v.Folder, Key: v.Key, Against: v.Against}
	if q.Folder == "" {
		cfg, err := d.configuration()
		if err != nil {
			return err
		}
		q.Folder = cfg.Site.State
	}
	if f, ok := d.err.(*os.File); ok && isatty.IsTerminal(f.Fd()) {
		q.Progress = func(done, all uint64) {
			fmt.Fprintf(d.err, "\r%d of %d records", done, all)
			if done == all {
				fmt.Fprintln(d.err)
			}
		}
	}
	found, err := monitor.Verify(q)
	if err != nil {
		return err
	}
	if d.JSON {
		return d.object(found)
	}
	fmt.Fprintf(d.out, "The record in %s holds: %d records, %d batches of %d rows, %d looks, %d alarm changes.\n",
		found.Folder, found.Records, found.Batches, found.Rows, found.Looks, found.Changes)
	fmt.Fprintf(d.out, "Driven again, the engine gives every outcome and the present state, to the last bit (%.1f s).\n", found.TookSeconds)
	fmt.Fprintf(d.out, "Log %s, root %s.\nKey %s", found.Origin, found.Root, found.Key)
	if found.KeyHandedIn {
		fmt.Fprint(d.out, ", as handed in")
	}
	fmt.Fprintf(d.out, ".\nCompared with %d checkpoints handed in, and one of %d records beside the store.\n", found.Checkpoints, found.Signed)
	for _, o := range found.NewOrigins {
		fmt.Fprintf(d.out, "It goes on under a new origin %s.\n", o)
	}
	if found.NotCompared != "" {
		fmt.Fprintf(d.out, "Not shown: %s.\n", found.NotCompared)
	}
	_, err = fmt.Fprintln(d.out, found.Caution)
	return err
}

type backupVerb struct {
	Folder string `arg:"" help:"A folder that does not exist yet."`
}

// Run copies the store while the daemon goes on.
func (v *backupVerb) Run(d *desk) error {
	c, _, _, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	folder, err := filepath.Abs(v.Folder) // the daemon may run in another folder
	if err != nil {
		return err
	}
	b, err := c.Backup(folder)
	if err != nil {
		return err
	}
	if d.JSON {
		return d.object(b)
	}
	_, err = fmt.Fprintf(d.out, "The store with %d records is in %s, synced and read through. Verify it, there or on another machine:\n"+
		"  steelyard verify %s\nThe key to sign with is not in it.\n", b.Records, b.Folder, b.Folder)
	return err
}
