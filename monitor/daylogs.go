package monitor

import (
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"time"

	"steelyard/monitor/daylog"
	"steelyard/rules"
	"steelyard/store"
)

// DayLog makes the log of a production day, written as 2026-03-02; today's where label is
// empty. The processes stand in it as they did at the day's end.
func (d *Desk) DayLog(label string) (*daylog.Log, error) {
	site := d.cfg.Site
	now := d.now()
	day := daylog.DayOf(now, site.Zone, site.DayStarts)
	if label != "" {
		var err error
		if day, err = daylog.ParseDay(label, site.Zone, site.DayStarts); err != nil {
			return nil, err
		}
	}
	if day.From.After(now) {
		return nil, fmt.Errorf("the day %s has not begun", day.Label)
	}
	return d.dayLog(day, now)
}

// dayLog drives a fresh engine with the journal up to the end of the day, and collects the
// records that fall into it.
func (d *Desk) dayLog(day daylog.Day, now time.Time) (*daylog.Log, error) {
	to, err := d.endOf(day)
	if err != nil {
		return nil, err
	}
	state := d.replaying()
	var collector *daylog.Collector
	err = d.store.Journal(0, to, func(e rules.Event, out rules.Outcomes) error {
		within := !e.At.Before(day.From) && e.At.Before(day.To)
		if within && collector == nil {
			collector = daylog.NewCollector(day, state.Plan(), d.cfg.Site.Zone)
		}
		if _, err := state.Apply(&e); err != nil {
			return fmt.Errorf("record %d: %w", e.Index, err)
		}
		if within {
			collector.Add(&e, &out)
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	if collector == nil {
		collector = daylog.NewCollector(day, state.Plan(), d.cfg.Site.Zone)
	}
	return collector.Finish(state, now), nil
}

// endOf is the index behind the last record that was taken in before the end of a day. Times do not always ascend in the
// journal: a clock may have been set back.
func (d *Desk) endOf(day daylog.Day) (to uint64, err error) {
	if to, err = d.store.FirstAt(day.To); err != nil {
		return 0, err
	}
	return to, d.store.Journal(to, d.store.Next(), func(e rules.Event, _ rules.Outcomes) error {
		if e.At.Before(day.To) {
			to = e.Index + 1
		}
		return nil
	})
}

// WriteDayLog makes the log of a day and writes it into the folder of day logs, as Markdown
// and as JSON; it returns both names.
func (d *Desk) WriteDayLog(label string) (log *daylog.Log, markdown, machine string, err error) {
	log, err = d.DayLog(label)
	if err != nil {
		return nil, "", "", err
	}
	signed, err := d.store.Checkpoint()
	if err != nil {
		return nil, "", "", err
	}
	log.Checkpoint, log.Verifying = string(signed), d.store.Verifying()
	folder := d.cfg.Site.DayLogs
	if err := os.MkdirAll(folder, 0o755); err != nil {
		return nil, "", "", fmt.Errorf("day log: %w", err)
	}
	text, err := json.MarshalIndent(log, "", "  ")
	if err != nil {
		return nil, "", "", fmt.Errorf("day log: %w", err)
	}
	markdown, machine = filepath.Join(folder, log.Day+".md"), filepath.Join(folder, log.Day+".json")
	if err := replaceFile(markdown, log.Markdown(d.cfg.Site.Zone)); err != nil {
		return nil, "", "", err
	}
	return log, markdown, machine, replaceFile(machine, append(text, '\n'))
}

// replaceFile puts a whole file in place of the one of that name, so that a reader sees the
// old one or the new one and a crash leaves no half of it.
func replaceFile(path string, content []byte) (err error) {
	temp, err := os.CreateTemp(filepath.Dir(path), ".steelyard-*")
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(temp.Name()))
		}
	}()
	_, err = temp.Write(content)
	if err == nil {
		err = temp.Chmod(0o644)
	}
	if err == nil {
		err = temp.Sync()
	}
	if err = errors.Join(err, temp.Close()); err != nil {
		return err
	}
	if err = os.Rename(temp.Name(), path); err != nil {
		return err
	}
	return store.SyncFolder(filepath.Dir(path))
}

// lookBack is how far a starting daemon goes back for day logs that were never written.
const lookBack = 31 * 24 * time.Hour

// WriteMissedDayLogs writes the logs of whole days that have records and no log: the daemon
// was not there at their end.
func (d *Desk) WriteMissedDayLogs() error {
	site := d.cfg.Site
	now := d.now()
	today := daylog.DayOf(now, site.Zone, site.DayStarts)
	for t := now.Add(-lookBack); t.Before(today.From); {
		day := daylog.DayOf(t, site.Zone, site.DayStarts)
		t = day.To
		if _, err := os.Stat(filepath.Join(site.DayLogs, day.Label+".json")); err == nil {
			continue
		}
		from, err := d.store.FirstAt(day.From)
		if err != nil {
			return err
		}
		to, err := d.store.FirstAt(day.To)
		if err != nil {
			return err
		}
		if from == to {
			continue
		}
		if _, _, _, err := d.WriteDayLog(day.Label); err != nil {
			return err
		}
	}
	return nil
}
