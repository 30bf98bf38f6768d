package monitor

import (
	"context"
	"time"

	"steelyard/monitor/daylog"
	"steelyard/rules"
	"steelyard/store"
)

// fewestInVolume is how many records are worth a volume.
const fewestInVolume = 512

// Seal moves records that are older than a moment into volumes, so that the store's file stays small; least is how
// many a volume must have. Reading goes on as before. It stops between two volumes where the context ends.
func (d *Desk) Seal(ctx context.Context, before time.Time, least uint64) error {
	to, err := d.store.FirstAt(before)
	if err != nil {
		return err
	}
	for ctx.Err() == nil {
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
		d.log.Info().Str("volume", v.File).Int64("bytes", v.Size).Msg("older records were moved into a volume")
	}
	return nil
}

// sealOlder moves what is older than the last whole day.
func (d *Desk) sealOlder(ctx context.Context) {
	site := d.cfg.Site
	today := daylog.DayOf(d.now(), site.Zone, site.DayStarts)
	last := daylog.DayOf(today.From.Add(-time.Second), site.Zone, site.DayStarts)
	if err := d.Seal(ctx, last.From, fewestInVolume); err != nil {
		d.log.Error().Err(err).Msg("move older records into a volume; they stay where they are")
	}
}

// missVolumes tells of volumes that are not where they were put.
func (d *Desk) missVolumes() {
	for _, fault := range d.store.MissingVolumes() {
		d.log.Error().Msg(fault.Error())
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
