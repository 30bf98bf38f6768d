package main

import (
	"context"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor"
	"steelyard/rules"
)

type runVerb struct{}

// Run watches until a signal ends it: the first ends in order, the second at once.
func (v *runVerb) Run(d *desk) error {
	cfg, err := d.configuration()
	if err != nil {
		return err
	}
	log := d.daemonLog()
	m, err := monitor.Open(cfg, monitor.Options{Log: log})
	if err != nil {
		return err
	}
	log.Info().Str("program", monitor.Program()).Str("configuration", cfg.File).Str("state", cfg.Site.State).
		Int("sources", len(cfg.Sources)).Int("rules", len(cfg.Plan.Rules)).Msg("watching begins; " + rules.ReleaseNote)
	for _, s := range cfg.Sources {
		log.Info().Str("source", s.Name).Str("folder", s.Folder).Str("files", s.Files).Msg("source")
	}
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	context.AfterFunc(ctx, stop) // a second signal ends the program at once
	defer stop()
	ready := make(chan struct{})
	go func() {
		select {
		case <-ready:
			log.Info().Msg("ready")
		case <-ctx.Done():
		}
	}()
	err = m.Run(ctx, ready)
	if err != nil {
		log.Error().Err(err).Msg("STOPPED: nothing is counted any more")
	} else {
		log.Info().Msg("ended in order")
	}
	if closed := m.Close(); err == nil {
		err = closed
	}
	return err
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
