package monitor

import (
	"time"

	"steelyard/rules"
	"steelyard/store"
)

// fewestInVolume is how many records are worth a volume.
const fewestInVolume = 512

// Seal moves records that are older than a moment into volumes, so that the store's file stays small; least is how
// many a volume must have. Reading goes on as before.
func (d *Desk) Seal(before time.Time, least uint64) error {
	to, err := d.store.FirstAt(before)
	if err != nil {
		return err
	}
	for {
		from := uint64(0)
		if list := d.store.Volumes(); len(list) > 0 {
			from = list[len(list)-1].To
		}
		if to < from+least || to == from {
			return nil
		}
		v, err := d.store.WriteVolume(to)
		if err != nil || v == nil {
			return err
		}
		if err := d.commitSealed(v); err != nil {
			return err
		}
	}
}

// commitSealed notes a volume in the journal, in the transaction that takes its records out of the store's file.
func (d *Desk) commitSealed(v *store.Volume) error {
	_, refused, err := d.commit([]happening{{
		event:  rules.Event{Sealed: &rules.Sealed{From: v.From, To: v.To, File: v.File, SHA256: v.SHA256}},
		sealed: v,
	}})
	if err == nil {
		err = refused[0]
	}
	return err
}
