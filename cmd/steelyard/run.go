package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor"
	"steelyard/monitor/config"
	"steelyard/rules"
)

type runVerb struct {
	NewOrigin string `placeholder:"WHY" help:"Go on under a new origin and key, where the store is not what was signed: a copy was restored, or the key is lost. It is noted for good, with the reason."`
}

// Run watches until a signal ends it: the first ends in order, the second at once. SIGHUP reads
// the configuration again; one with faults leaves the old one in force.
func (v *runVerb) Run(d *desk) error {
	cfg, err := d.configuration()
	if err != nil {
		return err
	}
	log := d.daemonLog()
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	context.AfterFunc(ctx, stop) // a second signal ends the program at once
	defer stop()
	reload := make(chan os.Signal, 1)
	signal.Notify(reload, syscall.SIGHUP)
	defer signal.Stop(reload)
	if v.NewOrigin != "" {
		if err := monitor.BeginOrigin(cfg, v.NewOrigin); err != nil {
			return err
		}
		log.Warn().Str("why", v.NewOrigin).Msg("the record goes on under a new origin and key")
	}
	for {
		next, err := d.watch(ctx, cfg, reload, log)
		if err != nil || next == nil {
			return err
		}
		cfg = next
	}
}

// watch runs the daemon under one configuration, until the context ends or another, sound one is
// to take its place.
func (d *desk) watch(ctx context.Context, cfg *config.Config, reload <-chan os.Signal, log zerolog.Logger) (next *config.Config, err error) {
	m, err := monitor.Open(cfg, monitor.Options{Log: log})
	if err != nil {
		return nil, err
	}
	log.Info().Str("program", monitor.Program()).Str("configuration", cfg.File).Str("state", cfg.Site.State).
		Int("sources", len(cfg.Sources)).Int("rules", len(cfg.Plan.Rules)).Msg("watching begins; " + rules.ReleaseNote)
	for _, s := range cfg.Sources {
		log.Info().Str("source", s.Name).Str("folder", s.Folder).Str("files", s.Files).Msg("source")
	}
	running, end := context.WithCancel(ctx)
	defer end()
	ready, done := make(chan struct{}), make(chan error, 1)
	go func() { done <- m.Run(running, ready) }()
	for waiting := true; waiting; {
		select {
		case <-ready:
			log.Info().Msg("ready")
			ready = nil
		case <-reload:
			if next, err = config.Load(cfg.File); err != nil {
				next = nil
				log.Error().Err(err).Msg("the new configuration is NOT in force; the old one stays")
				continue
			}
			log.Info().Msg("a new configuration takes the place of the old one")
			end()
		case err = <-done:
			waiting = false
		}
	}
	if err != nil {
		log.Error().Err(err).Msg("STOPPED: nothing is counted any more")
	} else {
		log.Info().Msg("ended in order")
	}
	return next, errors.Join(err, m.Close())
}

// daemonLog writes for people on a terminal, and JSON otherwise.
func (d *desk) daemonLog() zerolog.Logger {
	zerolog.TimeFieldFormat = time.RFC3339Nano
	return zerolog.New(d.logWriter()).With().Timestamp().Logger()
}

// quietLog is for the verbs that only ask: warnings and worse.
func (d *desk) quietLog() zerolog.Logger { return d.daemonLog().Level(zerolog.WarnLevel) }

func (d *desk) logWriter() io.Writer {
	if f, ok := d.err.(*os.File); ok && isTerminal(f) && !d.JSON {
		return zerolog.ConsoleWriter{Out: d.err, TimeFormat: "15:04:05"}
	}
	return d.err
}

func isTerminal(f *os.File) bool {
	info, err := f.Stat()
	return err == nil && info.Mode()&os.ModeCharDevice != 0
}

// line prints one line for people.
func (d *desk) line(format string, args ...any) { fmt.Fprintf(d.out, format+"\n", args...) }
