// Package monitor is the daemon: it wires the parts, owns the one writer and every goroutine.
//
//	drop folder ─► intake ─► reading ─► Desk.commit ─► store
//	                               (rules.State.Apply)
//	                     after the commit: feeds, day log, status
//
// A Desk holds the store and the engine's state. Whatever changes what the program believes
// passes through its commit, which applies events to the state and writes events, outcomes,
// changed state, what intake must remember and the messages to be told in one transaction.
// After the first storage error a Desk commits nothing more.
//
// Run watches the sources until its context ends. The verbs that ask or answer (status,
// acknowledge, explain, daylog) go to the running daemon over a socket in the state folder
// or, when none runs, open a Desk of their own: Reach decides which.
package monitor

import (
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"os/user"
	"path/filepath"
	"reflect"
	"runtime/debug"
	"sync"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
	"steelyard/monitor/feed"
	"steelyard/rules"
	"steelyard/store"
)

// Desk is the one place where events are applied and committed. Its methods may be called
// from any goroutine.
type Desk struct {
	cfg   *config.Config
	log   zerolog.Logger
	now   func() time.Time
	store *store.Store

	counts sync.Mutex // held from looking at what was counted until what follows is committed; before mu

	mu      sync.Mutex // held for one apply and commit, or one copy out of the state
	state   *rules.State
	sources map[string]*SourceStatus
	coming  []store.Entry     // of the commit at hand
	failed  error             // the first storage error; nothing is committed after it
	trouble map[string]string // of each feed: why its last delivery failed

	lastCounted time.Time      // when a batch was last counted, on the monotonic clock
	clock       *rules.Stepped // the last step of the clock on the wall since the start

	told   map[string]chan struct{} // a feed has messages; capacity 1
	broken chan error               // the store failed away from the writer; capacity 1
	disk   DiskStatus
}

// Options are what a Desk is opened with; the zero value serves.
type Options struct {
	Log zerolog.Logger
	Now func() time.Time // the wall clock; time.Now where nil
}

// Open opens the store of a configuration and the engine's state in it. It is store.ErrHeld
// where another process has the store.
func Open(cfg *config.Config, o Options) (*Desk, error) {
	if o.Now == nil {
		o.Now = time.Now
	}
	s, err := store.Open(cfg.Site.State, store.Options{})
	if err != nil {
		return nil, err
	}
	d := &Desk{
		cfg: cfg, log: o.Log, now: o.Now, store: s,
		sources: map[string]*SourceStatus{}, told: map[string]chan struct{}{}, broken: make(chan error, 1), disk: DiskStatus{Free: -1}, trouble: map[string]string{},
	}
	for _, src := range cfg.Sources {
		d.sources[src.Name] = &SourceStatus{Name: src.Name, Folder: src.Folder, Able: true}
	}
	for _, src := range watchMarks(cfg) {
		d.sources[src.Name] = &SourceStatus{Name: src.Name, Folder: src.Folder, Able: true}
	}
	for _, f := range cfg.Feeds {
		d.told[f.Name] = make(chan struct{}, 1)
	}
	if recovered := s.Recovered(); recovered != "" {
		d.log.Warn().Msg(recovered)
	}
	if d.state, err = d.restore(); err != nil {
		return nil, errors.Join(err, s.Close())
	}
	d.state.Consult(&history{store: s, coming: &d.coming})
	return d, nil
}

func (d *Desk) restore() (*rules.State, error) {
	pieces, err := d.store.Pieces()
	if err != nil {
		return nil, err
	}
	return rules.Restore(pieces)
}

// Close ends the use of the store.
func (d *Desk) Close() error { return d.store.Close() }

// happening is an event on its way to the journal, with what intake must remember of it.
type happening struct {
	event  rules.Event
	files  []store.FileMemory
	sealed *store.Volume // whose records leave the store's file with it
}

// commit applies events and writes what followed in one transaction. An event that the
// engine refuses is left out and its refusal returned in its place; the others stand. The
// last error is a storage error: then it is unknown whether the transaction is in the store.
func (d *Desk) commit(list []happening) (outcomes []rules.Outcomes, refused []error, err error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	if d.failed != nil {
		return nil, nil, d.failed
	}
	var step store.Step
	next := d.store.Next()
	at := d.now().UTC()
	outcomes, refused = make([]rules.Outcomes, len(list)), make([]error, len(list))
	for i := range list {
		e := &list[i].event
		e.Index, e.At = next+uint64(len(step.Entries)), at
		before := d.state.Plan()
		d.coming = step.Entries
		outcomes[i], refused[i] = d.state.Apply(e)
		if errors.Is(refused[i], store.ErrStorage) {
			d.failed = refused[i]
			return nil, nil, d.failed
		}
		if refused[i] != nil {
			continue
		}
		step.Entries = append(step.Entries, store.Entry{Event: *e, Outcomes: outcomes[i]})
		for _, f := range list[i].files {
			f.Index = e.Index
			step.Files = append(step.Files, f)
		}
		if list[i].sealed != nil {
			step.Sealed = list[i].sealed
		}
		if step.Outbox, err = d.tell(step.Outbox, &before, e, &outcomes[i]); err != nil {
			return nil, nil, err
		}
	}
	if len(step.Entries) == 0 {
		return outcomes, refused, nil
	}
	if step.Pieces, err = d.state.Pieces(); err == nil {
		err = d.store.Commit(step)
	}
	if err != nil {
		d.failed = err
		return nil, nil, err
	}
	d.afterCommit(step.Outbox)
	return outcomes, refused, nil
}

// tell adds the messages of an event's alarm changes, one for each feed the rule names.
func (d *Desk) tell(box []store.Message, before *rules.Plan, e *rules.Event, out *rules.Outcomes) ([]store.Message, error) {
	now := d.state.Plan()
	for i := range out.Changes {
		c := &out.Changes[i]
		plan := &now
		if _, ok := now.Rule(c.Rule); !ok || c.Cause == rules.PlanChanged {
			plan = before
		}
		rule, ok := plan.Rule(c.Rule)
		if !ok {
			continue
		}
		body, err := feed.Compose(plan, c, e.Index, d.store.Origin(), d.cfg.Site.Zone)
		if err != nil {
			return nil, fmt.Errorf("message of alarm %s: %w", feed.ID(c), err)
		}
		for _, name := range rule.Tell {
			box = append(box, store.Message{Feed: name, ID: feed.ID(c), Body: body, At: e.At})
		}
	}
	return box, nil
}

// afterCommit wakes the feeds that have something to deliver.
func (d *Desk) afterCommit(box []store.Message) {
	for _, m := range box {
		if wake, ok := d.told[m.Feed]; ok {
			select {
			case wake <- struct{}{}:
			default:
			}
		}
	}
}

// commitOne commits one event and returns its refusal, if any, as the error.
func (d *Desk) commitOne(e rules.Event) (rules.Outcomes, error) {
	outcomes, refused, err := d.commit([]happening{{event: e}})
	if err != nil {
		return rules.Outcomes{}, err
	}
	return outcomes[0], refused[0]
}

// Adopt puts the configuration's plan in force, where it is not already.
func (d *Desk) Adopt() error {
	d.mu.Lock()
	same := reflect.DeepEqual(normalised(d.state.Plan()), normalised(d.cfg.Plan))
	d.mu.Unlock()
	if same {
		return nil
	}
	_, err := d.commitOne(rules.Event{Adopted: &rules.Adopted{
		Plan: d.cfg.Plan, Digest: d.cfg.Digest, File: filepath.Base(d.cfg.File), By: Whoever(),
	}})
	return err
}

// normalised is a plan as it comes back from the journal, so that two can be compared.
func normalised(p rules.Plan) (q rules.Plan) {
	text, err := json.Marshal(p)
	if err == nil {
		err = json.Unmarshal(text, &q)
	}
	if err != nil {
		return p
	}
	return q
}

// Whoever is the account that runs the program, as the operating system names it.
func Whoever() string {
	if u, err := user.Current(); err == nil {
		return u.Username
	}
	return fmt.Sprintf("user %d", os.Getuid())
}

// Program is the version of this program with the revision it was built from.
func Program() string {
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return "steelyard (no build information)"
	}
	revision, modified := "", ""
	for _, s := range info.Settings {
		switch {
		case s.Key == "vcs.revision":
			revision = " " + s.Value[:min(12, len(s.Value))]
		case s.Key == "vcs.modified" && s.Value == "true":
			modified = " with local changes"
		}
	}
	return "steelyard " + info.Main.Version + revision + modified + ", " + info.GoVersion
}
