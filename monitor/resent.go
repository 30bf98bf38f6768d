package monitor

import (
	"fmt"
	"slices"

	"steelyard/monitor/config"
	"steelyard/monitor/intake"
)

// resent decides on other content under a name that was counted, as its source declares: it
// replaces what the name brought before, it is added, or a sentence says why it is held. Where
// nothing of the name counts any more, it is counted as a new file is.
func (d *Desk) resent(a *intake.Arrival) (reason string, err error) {
	counting, err := d.counting(a.Source, a.File)
	if err != nil || len(counting) == 0 {
		return "", err
	}
	switch d.source(a.Source).Resent {
	case "add":
	case "replace":
		a.Reading.Batch.Replaces = counting
	default:
		reason = fmt.Sprintf("%s: a file of this name was counted before with other content (record %d), and counting both could count a row twice; "+
			"drop what is new under a new name, decide with `steelyard held`, or declare what \"resent\" means for the source",
			a.File, counting[len(counting)-1])
	}
	return reason, nil
}

// counting are the records of the batches of a file name that have not been withdrawn, in order.
func (d *Desk) counting(source, file string) ([]uint64, error) {
	indexes, err := d.store.Batches(source, file)
	return slices.DeleteFunc(indexes, d.isWithdrawn), err
}

// source is the configuration of a source; nil where it has none.
func (d *Desk) source(name string) *config.Source {
	for i := range d.cfg.Sources {
		if d.cfg.Sources[i].Name == name {
			return &d.cfg.Sources[i]
		}
	}
	return nil
}
