package monitor

import (
	"context"
	"encoding/hex"
	"errors"
	"fmt"
	"iter"
	"net/http"
	"os"
	"path/filepath"
	"sync"
	"time"

	"steelyard/monitor/config"
	"steelyard/monitor/daylog"
	"steelyard/monitor/feed"
	"steelyard/monitor/intake"
	"steelyard/rules"
	"steelyard/store"
)

// What one transaction may carry at most.
const (
	mostTogether  = 64
	bytesTogether = 32 << 20
)

// aliveEvery is how often a daemon notes that it is watching, and so how exactly a stretch
// without watching is known after a kill.
const aliveEvery = 5 * time.Second

// Run watches the sources until the context ends, and then ends in order. It returns the
// first storage error, after which nothing was counted; ready, where it is not nil, is closed
// once the start is in the journal and the sources are being looked through.
func (d *Desk) Run(ctx context.Context, ready chan<- struct{}) error {
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	began := d.instant()
	if err := d.begin(); err != nil {
		return err
	}
	known, err := d.remembered()
	if err != nil {
		return err
	}
	grown := map[string][]*intake.Progress{}
	for i := range d.cfg.Sources {
		if src := &d.cfg.Sources[i]; growing(src) {
			if grown[src.Name], err = d.grown(src.Name); err != nil {
				return err
			}
		}
	}
	control, gone, err := listen(d.cfg.Site.State)
	if err != nil {
		return fmt.Errorf("open the socket on which the verbs reach the daemon: %w", err)
	}
	server := &http.Server{Handler: d.handler(), ReadHeaderTimeout: 10 * time.Second}
	var helpers sync.WaitGroup
	helpers.Go(func() { _ = server.Serve(control) }) // ends with ErrServerClosed
	helpers.Go(func() { d.keepTime(ctx) })
	helpers.Go(func() { d.minutes(ctx, began) })
	for i := range d.cfg.Feeds {
		helpers.Go(func() { d.deliver(ctx, i) })
	}
	arrivals := make(chan intake.Arrival)
	gathered := make(chan []intake.Arrival)
	helpers.Go(func() { gather(ctx, arrivals, gathered) })
	for i := range d.cfg.Sources {
		src := &d.cfg.Sources[i]
		if growing(src) {
			helpers.Go(func() { intake.Follow(ctx, src, &d.cfg.Plan, grown[src.Name], arrivals) })
			continue
		}
		helpers.Go(func() { intake.Watch(ctx, src, &d.cfg.Plan, known.of(src.Name), arrivals) })
	}
	for _, src := range watchMarks(d.cfg) {
		helpers.Go(func() { intake.Watch(ctx, src, &d.cfg.Plan, known.of(src.Name), arrivals) })
	}
	if ready != nil {
		close(ready)
	}
	err = d.write(ctx, gathered, known)
	if err != nil {
		d.announce(countingStopped, "nothing is counted any more", "Storage failed, and the program has stopped: "+err.Error())
	}
	stop()
	err = errors.Join(err, server.Close())
	helpers.Wait()
	return errors.Join(err, d.end(err), gone())
}

// begin notes the start and puts the plan in force.
func (d *Desk) begin() error {
	host, err := os.Hostname()
	if err != nil {
		host = "unknown"
	}
	last, clean := d.store.LastAlive()
	if _, err := d.commitOne(rules.Event{Started: &rules.Started{Program: Program(), Host: host, LastAlive: last, Clean: clean}}); err != nil {
		return err
	}
	if now := d.now(); last.After(now.Add(leastStep)) {
		if err := d.stepped(rules.Stepped{Was: last, Is: now}); err != nil {
			return err
		}
	}
	if err := d.store.Alive(d.now()); err != nil {
		return err
	}
	if err := d.Adopt(); err != nil {
		return err
	}
	d.missVolumes()
	if err := d.WriteMissedDayLogs(); errors.Is(err, store.ErrVolume) {
		d.log.Error().Err(err).Msg("the day logs that were not written at their day's end can't be written now")
	} else if err != nil {
		return err
	}
	return nil
}

// end notes an end in order, and tells the feeds what is left once more.
func (d *Desk) end(failed error) error {
	if failed != nil {
		return nil
	}
	_, err := d.commitOne(rules.Event{Stopped: &rules.Stopped{Why: "told to stop"}})
	if err != nil {
		return err
	}
	ctx, cancel := context.WithTimeout(context.Background(), 5*time.Second)
	defer cancel()
	for i := range d.cfg.Feeds {
		d.deliverOnce(ctx, i)
	}
	if _, err := d.store.Checkpoint(); err != nil {
		return err
	}
	return d.store.Ended(d.now())
}

// knownFiles is what has been dealt with, for the watchers, which ask of every file they see.
type knownFiles struct {
	mu    sync.Mutex
	files map[string]map[string]knownFile // source, file
}

type knownFile struct{ size, written int64 }

func (d *Desk) remembered() (*knownFiles, error) {
	k := &knownFiles{files: map[string]map[string]knownFile{}}
	names := []string{config.MarksName}
	for _, src := range d.cfg.Sources {
		names = append(names, src.Name)
	}
	for _, name := range names {
		files := map[string]knownFile{}
		if err := d.store.Files(name, func(f store.FileMemory) { files[f.File] = knownFile{f.Size, f.Written} }); err != nil {
			return nil, err
		}
		k.files[name] = files
	}
	return k, nil
}

func (k *knownFiles) of(source string) intake.Known {
	return func(file string, size int64, written time.Time) bool {
		k.mu.Lock()
		defer k.mu.Unlock()
		f, ok := k.files[source][file]
		return ok && f == knownFile{size, written.UnixNano()}
	}
}

func (k *knownFiles) note(f store.FileMemory) {
	k.mu.Lock()
	defer k.mu.Unlock()
	k.files[f.Source][f.File] = knownFile{f.Size, f.Written}
}

// write is the one writer: it commits what arrives, as much as waits in one transaction.
func (d *Desk) write(ctx context.Context, gathered <-chan []intake.Arrival, known *knownFiles) error {
	for {
		select {
		case <-ctx.Done():
			return nil
		case err := <-d.broken:
			return err
		case list := <-gathered:
			for part := range apart(list) {
				if err := d.takePart(part, known); err != nil {
					return err
				}
			}
		}
	}
}

// takePart commits what can be committed together.
func (d *Desk) takePart(part []intake.Arrival, known *knownFiles) error {
	d.counts.Lock()
	defer d.counts.Unlock()
	if part[0].Source == config.MarksName && part[0].File != "" {
		return d.takeMarks(&part[0], known)
	}
	return d.take(part, known)
}

// apart cuts what arrived into parts that can each be committed together: no file name stands
// twice in one, so that the second is compared with what was committed of the first, and a file
// of marks stands alone.
func apart(list []intake.Arrival) iter.Seq[[]intake.Arrival] {
	return func(yield func([]intake.Arrival) bool) {
		from := 0
		names := map[[2]string]bool{}
		for i := range list {
			a := &list[i]
			name := [2]string{a.Source, a.File}
			isMark := a.Source == config.MarksName && a.File != ""
			if i > from && (isMark || names[name] && a.File != "" || list[i-1].Source == config.MarksName && list[i-1].File != "") {
				if !yield(list[from:i]) {
					return
				}
				from = i
				clear(names)
			}
			names[name] = true
		}
		yield(list[from:])
	}
}

// gather collects what arrives while the writer is at work, and hands it over at once: so many files as come
// while the disk is waited for go into the next transaction. Each holds its content, so what waits is bounded.
func gather(ctx context.Context, arrivals <-chan intake.Arrival, gathered chan<- []intake.Arrival) {
	var list []intake.Arrival
	size := 0
	for {
		from, to := arrivals, gathered
		if len(list) == 0 {
			to = nil
		}
		if len(list) >= mostTogether || size >= bytesTogether {
			from = nil
		}
		select {
		case <-ctx.Done():
			return
		case a := <-from:
			list, size = append(list, a), size+weight(&a)
		case to <- list:
			list, size = nil, 0
		}
	}
}

// weight is about how many bytes of its file an arrival holds.
func weight(a *intake.Arrival) int {
	w := len(a.Content)
	if a.Reading != nil && a.Reading.Batch != nil {
		w = max(w, int(a.Reading.Batch.To-a.Reading.Batch.From))
	}
	return w
}

// take turns arrivals into events and commits them.
func (d *Desk) take(list []intake.Arrival, known *knownFiles) error {
	var events []happening
	fresh := map[[32]byte]string{} // contents that this transaction will take
	for i := range list {
		h, err := d.happening(&list[i], fresh)
		if err != nil {
			return err
		}
		events = append(events, h)
	}
	outcomes, refused, err := d.commit(events)
	if err != nil {
		return err
	}
	var again []intake.Arrival
	for i := range events {
		if refused[i] != nil {
			// The engine would not have the batch: it is held, with the engine's sentence.
			a := list[i]
			a.Reading = &intake.Reading{SHA256: a.Reading.SHA256, Held: heldOf(&a, refused[i].Error())}
			again = append(again, a)
			continue
		}
		for _, f := range events[i].files {
			known.note(f)
		}
		d.report(&events[i].event, &outcomes[i])
	}
	if len(again) > 0 {
		return d.take(again, known)
	}
	return nil
}

func heldOf(a *intake.Arrival, reason string) *rules.Held {
	h := &rules.Held{Source: a.Source, File: a.File, Size: a.Size, Reason: reason}
	if a.Reading.Batch != nil {
		h.SHA256 = a.Reading.Batch.SHA256
	}
	return h
}

// happening decides what an arrival means: a batch, something held, content that was taken
// before, or a source that can or can't be looked at.
func (d *Desk) happening(a *intake.Arrival, fresh map[[32]byte]string) (happening, error) {
	if a.File == "" {
		return happening{event: rules.Event{Watching: &rules.Watching{Source: a.Source, Able: a.Able, Why: a.Why}}}, nil
	}
	memory := store.FileMemory{Source: a.Source, File: a.File, Size: a.Size, Written: a.Written.UnixNano(), SHA256: a.Reading.SHA256}
	old, _, err := d.store.File(a.Source, a.File)
	if err != nil {
		return happening{}, err
	}
	memory.Counted = old.Counted
	if a.Progress != nil {
		return d.stretch(a, old, memory)
	}
	index, source, file, found, err := d.store.Taken(a.Reading.SHA256)
	if err != nil {
		return happening{}, err
	}
	name := source + " " + file
	withdrawn := found && d.isWithdrawn(index)
	if a.Reading.Batch == nil && (!found || withdrawn) {
		return d.hold(a, a.Reading.Held, memory)
	}
	if !found {
		name, found = fresh[a.Reading.SHA256]
		index = d.store.Next()
	}
	replaces := d.source(a.Source).Resent == "replace" && old.Counted
	switch {
	case withdrawn && !(replaces && source == a.Source && file == a.File):
		reason := fmt.Sprintf("%s: this content was counted before (record %d, %s) and has been withdrawn since, so it is not counted again; "+
			"`steelyard held` takes it after all", a.File, index, name)
		return d.hold(a, heldOf(a, reason), memory)
	case found && !withdrawn:
		e := rules.Event{Again: &rules.Again{Source: a.Source, File: a.File, SHA256: hex.EncodeToString(a.Reading.SHA256[:]), First: index, Name: name}}
		memory.Counted = true
		return happening{event: e, files: []store.FileMemory{memory}}, nil
	}
	if old.Counted {
		reason, err := d.resent(a)
		if err != nil {
			return happening{}, err
		}
		if reason != "" {
			return d.hold(a, heldOf(a, reason), memory)
		}
	}
	if len(a.Reading.Batch.Held) > 0 && a.Content != nil {
		// A person may take its rows after all.
		if _, err := intake.Keep(d.heldFolder(), a.Reading.SHA256, a.Content); err != nil {
			return happening{}, fmt.Errorf("%w: %w", store.ErrStorage, err)
		}
	}
	memory.Counted, memory.Batch = true, true
	fresh[a.Reading.SHA256] = a.Source + " " + a.File
	return happening{event: rules.Event{Batch: a.Reading.Batch}, files: []store.FileMemory{memory}}, nil
}

// hold keeps a copy of what is held and makes the event of it.
func (d *Desk) hold(a *intake.Arrival, held *rules.Held, memory store.FileMemory) (happening, error) {
	if a.Content != nil {
		name, err := intake.Keep(d.heldFolder(), a.Reading.SHA256, a.Content)
		if err != nil {
			return happening{}, fmt.Errorf("%w: %w", store.ErrStorage, err)
		}
		held.Kept = name
	}
	return happening{event: rules.Event{Held: held}, files: []store.FileMemory{memory}}, nil
}

// heldFolder is where copies of what is held are kept.
func (d *Desk) heldFolder() string { return filepath.Join(d.cfg.Site.State, "held") }

// report tells the log and the status what was committed.
func (d *Desk) report(e *rules.Event, out *rules.Outcomes) {
	d.mu.Lock()
	defer d.mu.Unlock()
	note := func(source, file string) *SourceStatus {
		s := d.sources[source]
		s.LastFile, s.LastAt = file, e.At
		return s
	}
	switch {
	case e.Batch != nil:
		d.lastCounted = time.Now()
		s := note(e.Batch.Source, e.Batch.File)
		if s.Counted++; len(e.Batch.Held) > 0 {
			s.Held++
			s.Remark = e.Batch.Held[0].Reason
			d.log.Warn().Str("source", s.Name).Str("file", e.Batch.File).Int("rows", len(e.Batch.Held)).Msg("rows held: " + e.Batch.Held[0].Reason)
		}
		d.log.Info().Uint64("record", e.Index).Str("source", s.Name).Str("file", e.Batch.File).Int("rows", len(e.Batch.Rows.Line)).Msg("counted")
	case e.Held != nil:
		s := note(e.Held.Source, e.Held.File)
		s.Held++
		s.Remark = e.Held.Reason
		d.log.Warn().Uint64("record", e.Index).Str("source", s.Name).Str("file", e.Held.File).Msg("held: " + e.Held.Reason)
	case e.Again != nil:
		s := note(e.Again.Source, e.Again.File)
		s.Again++
		d.log.Info().Uint64("record", e.Index).Str("source", s.Name).Str("file", e.Again.File).Msg("not counted: the same content was taken before as " + e.Again.Name)
	case e.Decided != nil:
		d.log.Info().Uint64("record", e.Index).Uint64("held", e.Decided.Held).Str("by", e.Decided.By).Msg("set aside: " + e.Decided.Reason)
	case e.Segment != nil:
		d.log.Info().Uint64("record", e.Index).Strs("processes", e.Segment.Processes).Str("by", e.Segment.By).Msg("a new segment: " + e.Segment.Note)
	case e.Withdrawn != nil:
		d.log.Warn().Uint64("record", e.Index).Uints64("batches", e.Withdrawn.Batches).Str("by", e.Withdrawn.By).Msg("withdrawn: " + e.Withdrawn.Reason)
	case e.Watching != nil:
		s := d.sources[e.Watching.Source]
		s.Able, s.Why = e.Watching.Able, e.Watching.Why
		if s.Able {
			d.log.Info().Str("source", s.Name).Msg("the source can be looked at again")
		} else {
			d.log.Error().Str("source", s.Name).Msg("NOT LOOKING: " + s.Why)
		}
	}
	plan := d.state.Plan()
	for _, r := range out.Remarks {
		d.log.Warn().Uint64("record", e.Index).Msg(r)
	}
	for i := range out.Changes {
		c := &out.Changes[i]
		d.log.Warn().Uint64("record", e.Index).Str("alarm", feed.ID(c)).Str("cause", string(c.Cause)).Msg(plan.Tell(c, d.cfg.Site.Zone)[0])
	}
}

// keepTime notes that the daemon is watching, and writes the day log when a day ends.
func (d *Desk) keepTime(ctx context.Context) {
	tick := time.NewTicker(aliveEvery)
	defer tick.Stop()
	site := d.cfg.Site
	day, signed := daylog.DayOf(d.now(), site.Zone, site.DayStarts), d.now()
	d.sealOlder(ctx) // a daemon may never run at a day's end
	for {
		select {
		case <-ctx.Done():
			return
		case <-tick.C:
		}
		now := d.now()
		if err := d.store.Failure(); err != nil {
			d.broke(err)
			return
		}
		d.watchDisk()
		if err := d.store.Alive(now); err != nil {
			d.log.Error().Err(err).Msg("note that the daemon is alive")
		}
		if now.Sub(signed) >= signEvery {
			d.sign()
			signed = now
		}
		if now.Before(day.To) {
			continue
		}
		if _, markdown, _, err := d.WriteDayLog(day.Label); err != nil {
			d.log.Error().Err(err).Msg("write the day log")
		} else {
			d.log.Info().Str("file", markdown).Msg("the day log is written")
		}
		d.sealOlder(ctx)
		day = daylog.DayOf(now, site.Zone, site.DayStarts)
	}
}

// deliver keeps one feed served, more slowly while it fails.
func (d *Desk) deliver(ctx context.Context, i int) {
	wake := d.told[d.cfg.Feeds[i].Name]
	pause := time.Duration(0)
	for {
		if d.deliverOnce(ctx, i) {
			pause = 0
		} else {
			pause = min(max(2*pause, time.Second), time.Minute)
		}
		again := time.NewTimer(time.Hour)
		if pause > 0 {
			again.Reset(pause)
		}
		select {
		case <-ctx.Done():
			again.Stop()
			return
		case <-wake:
		case <-again.C:
		}
		again.Stop()
	}
}

// deliverOnce delivers what waits for one feed; it reports whether the feed is served.
func (d *Desk) deliverOnce(ctx context.Context, i int) bool {
	name := d.cfg.Feeds[i].Name
	f, err := feed.Open(d.cfg.Feeds[i])
	for err == nil {
		var messages []store.Message
		if messages, _, err = d.store.Pending(name, mostTogether); err != nil || len(messages) == 0 {
			break
		}
		var signed []byte
		if signed, err = d.store.Checkpoint(); err != nil {
			break
		}
		bodies := make([][]byte, len(messages))
		for i, m := range messages {
			if bodies[i], err = withCheckpoint(m.Body, signed); err != nil {
				break
			}
		}
		if err != nil {
			break
		}
		if err = f.Deliver(ctx, bodies); err == nil {
			err = d.store.Delivered(messages)
		}
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	d.trouble[name] = ""
	if err != nil {
		d.trouble[name] = err.Error()
		d.log.Error().Err(err).Str("feed", name).Msg("the feed could not be told; it is tried again")
	}
	return err == nil
}

// waiting is how many messages of a feed are not delivered.
func (d *Desk) waiting(name string) (int, error) {
	_, all, err := d.store.Pending(name, 0)
	return all, err
}
