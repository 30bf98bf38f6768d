package monitor

import (
	"context"
	"fmt"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// minuteEvery is how often the clock is looked at for quiet rules and for steps of its own.
const minuteEvery = time.Second

// leastStep is how far the clock on the wall must part from time itself to be told of.
const leastStep = time.Second

// longestBacklog is how long after a start quiet rules wait at most, while files that came in the
// meantime are still being counted.
const longestBacklog = 10 * time.Minute

// instant is one moment by two clocks.
type instant struct {
	wall   time.Time // without the monotonic clock
	passed time.Time // differences of these are of the monotonic clock
}

func (d *Desk) instant() instant { return instant{d.now().Round(0), time.Now()} }

// minutes watches the clock: it raises quiet rules whose time is reached, and notes when the clock on
// the wall does not go on as time does. Both become events, so that a replay needs no clock.
func (d *Desk) minutes(ctx context.Context, last instant) {
	tick := time.NewTicker(minuteEvery)
	defer tick.Stop()
	begun, settled := last.passed, false
	for {
		select {
		case <-ctx.Done():
			return
		case <-tick.C:
		}
		now := d.instant()
		expected := last.wall.Add(now.passed.Sub(last.passed))
		if off := now.wall.Sub(expected); off > leastStep || off < -leastStep {
			d.noteError(d.stepped(rules.Stepped{Was: expected.UTC(), Is: now.wall.UTC()}), "note that the clock stepped")
		}
		last = now
		if settled = settled || d.caughtUp(begun); settled {
			d.noteError(d.quiet(now.wall), "raise a quiet rule")
		}
	}
}

func (d *Desk) noteError(err error, doing string) {
	if err != nil {
		d.log.Error().Err(err).Msg(doing)
	}
}

// caughtUp says that what came in before the start has been counted: nothing more has been for as
// long as a file may take to settle.
func (d *Desk) caughtUp(begun time.Time) bool {
	patience := 2 * time.Second
	for _, src := range d.cfg.Sources {
		patience = max(patience, src.Settle+2*time.Second)
	}
	d.mu.Lock()
	last := d.lastCounted
	d.mu.Unlock()
	if last.Before(begun) {
		last = begun
	}
	return time.Since(last) > patience || time.Since(begun) > longestBacklog
}

// stepped puts a step of the clock into the journal.
func (d *Desk) stepped(s rules.Stepped) error {
	if _, err := d.commitOne(rules.Event{Stepped: &s}); err != nil {
		return err
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	d.clock = &s
	d.log.Warn().Time("was", s.Was).Time("is", s.Is).Msg("the clock on the wall stepped: it was set, or the machine slept")
	return nil
}

// quiet raises the quiet rules whose time is reached.
func (d *Desk) quiet(now time.Time) error {
	d.mu.Lock()
	standings := d.state.RuleStandings()
	d.mu.Unlock()
	for _, r := range standings {
		if r.Quiet == nil || r.State == rules.Unacknowledged || r.State == rules.Acked {
			continue
		}
		if d.rhythm(r.Quiet).Running(r.Counted, now, d.cfg.Site.Zone) < r.Quiet.For {
			continue
		}
		outcomes, refused, err := d.commit([]happening{{event: rules.Event{Moment: &rules.Moment{Rule: r.Rule, Since: r.Counted}}}})
		if err != nil {
			return fmt.Errorf("rule %q: %w", r.Rule, err)
		}
		if refused[0] != nil {
			continue // something was counted in the meantime
		}
		d.mu.Lock()
		plan := d.state.Plan()
		d.mu.Unlock()
		d.log.Warn().Str("rule", r.Rule).Msg(plan.Tell(&outcomes[0].Changes[0], d.cfg.Site.Zone)[0])
	}
	return nil
}

// rhythm is when what a quiet rule listens to runs: a line, that of a process, or the one that a
// source is about; else always.
func (d *Desk) rhythm(q *rules.Quiet) config.Rhythm {
	line := q.Line
	for _, src := range d.cfg.Sources {
		if q.Source == src.Name {
			line = src.Columns.LineIs
		}
	}
	for _, c := range d.cfg.Plan.Characteristics {
		for _, l := range c.Lines {
			if rules.ProcessName(c.Name, l) == q.Process {
				line = l
			}
		}
	}
	return d.cfg.Runs[line]
}
