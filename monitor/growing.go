package monitor

import (
	"encoding/json"
	"fmt"

	"steelyard/monitor/config"
	"steelyard/monitor/intake"
	"steelyard/rules"
	"steelyard/store"
)

// grown is the progress of the growing files of a source, as it was committed.
func (d *Desk) grown(source string) (list []*intake.Progress, err error) {
	var unread error
	err = d.store.Files(source, func(f store.FileMemory) {
		if f.Progress == nil || unread != nil {
			return
		}
		p := &intake.Progress{}
		if unread = json.Unmarshal(f.Progress, p); unread != nil {
			unread = fmt.Errorf("how far %q of %s was read can't be told: %w", f.File, source, unread)
			return
		}
		list = append(list, p)
	})
	if err == nil {
		err = unread
	}
	return list, err
}

// stretch decides what a stretch of a growing file means. What it is is decided by intake, which
// compares all that was dealt with before it; so its content is not looked up, and progress goes
// into the transaction that takes its rows.
func (d *Desk) stretch(a *intake.Arrival, old store.FileMemory, memory store.FileMemory) (happening, error) {
	var err error
	if memory.Progress, err = json.Marshal(a.Progress); err != nil {
		return happening{}, fmt.Errorf("source %s, file %s: how far it was read: %w", a.Source, a.File, err)
	}
	if a.Reading.Batch == nil {
		return d.hold(a, a.Reading.Held, memory)
	}
	if old.Counted && old.Progress == nil {
		reason := fmt.Sprintf("%s: this file was counted whole (record %d) before its source was declared as growing, and counting it again "+
			"could count a row twice; move it away, and have the rig begin a new file", a.File, old.Index)
		return d.hold(a, heldOf(a, reason), memory)
	}
	memory.Counted = true
	return happening{event: rules.Event{Batch: a.Reading.Batch}, files: []store.FileMemory{memory}}, nil
}

// growing says whether a source's files grow.
func growing(src *config.Source) bool { return src.Arrives == "growing" }
