package main

import (
	"fmt"
	"os"
	"path/filepath"

	"github.com/mattn/go-isatty"

	"steelyard/monitor"
)

type verifyVerb struct {
	Folder  string   `arg:"" optional:"" help:"A copy of the store, such as a backup, or an exhibit (FILE.html). The configuration's state folder where not given."`
	Key     string   `placeholder:"FILE" help:"The key to verify with, as its holder has it (a .pub file). The store's own where not given."`
	Against []string `placeholder:"FILE" help:"Day logs, feed files or checkpoints that left the machine; may be given several times."`
}

// Run counts the record anew and drives the engine over it.
func (v *verifyVerb) Run(d *desk) error {
	if v.Folder != "" && monitor.IsExhibit(v.Folder) {
		return v.exhibit(d)
	}
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
	fmt.Fprintf(d.out, ".\nCheckpoints handed in and compared: %d; beside the store: one of %d records.\n", found.Checkpoints, found.Signed)
	for _, o := range found.NewOrigins {
		fmt.Fprintf(d.out, "It goes on under a new origin %s.\n", o)
	}
	if found.NotCompared != "" {
		fmt.Fprintf(d.out, "Not shown: %s.\n", found.NotCompared)
	}
	_, err = fmt.Fprintln(d.out, found.Caution)
	return err
}

// exhibit verifies one page by itself.
func (v *verifyVerb) exhibit(d *desk) error {
	found, err := monitor.VerifyExhibit(v.Folder, v.Key)
	if err != nil {
		return err
	}
	if d.JSON {
		return d.object(found)
	}
	fmt.Fprintf(d.out, "The exhibit of %s holds: its %d records are in the journal under a checkpoint of %d records, signed by %s.\n",
		found.Alarm, found.Records, found.Under, found.Origin)
	if found.Driven {
		fmt.Fprintf(d.out, "The probability at the crossing follows from its %d rows, and the page is the one that the records make.\n", found.Rows)
	} else {
		fmt.Fprintf(d.out, "The page is the one that the records make; older batches are not in it, so that the probability can't be computed from it alone.\n")
	}
	if !found.KeyHandedIn {
		fmt.Fprintf(d.out, "Not shown: that the key %s is the site's; hand it in with --key.\n", found.Key)
	}
	_, err = fmt.Fprintf(d.out, "%s\n%s\n", found.Says, found.Caution)
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
