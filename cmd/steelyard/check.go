package main

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/monitor/intake"
)

type checkVerb struct {
	Files  []string `arg:"" optional:"" help:"Sample files, to be read as a source would read them."`
	Source string   `help:"The source that reads them; the one whose folder a file is in, or the only one, where not given." placeholder:"NAME"`
	Rows   bool     `help:"Show what each row becomes, not only those that are held."`
}

// Run reads the configuration, and shows how sample files would be read. Nothing is counted.
func (v *checkVerb) Run(d *desk) error {
	cfg, err := d.configuration()
	if err != nil {
		return err
	}
	if !d.JSON {
		d.line("%s is sound: %d characteristics, %d sources, %d rules, %d feeds.", cfg.File,
			len(cfg.Plan.Characteristics), len(cfg.Sources), len(cfg.Plan.Rules), len(cfg.Feeds))
		for _, r := range cfg.Plan.Rules {
			d.line("  rule %q: %s", r.Name, cfg.Plan.Says(r.Name))
		}
		for _, s := range cfg.Sources {
			if _, err := os.Stat(s.Folder); err != nil {
				d.line("  source %s: its folder %s is not there yet", s.Name, s.Folder)
			}
		}
	}
	held := false
	for _, name := range v.Files {
		anyHeld, err := v.file(d, cfg, name)
		if err != nil {
			return err
		}
		held = held || anyHeld
	}
	if held {
		return outcome(exitHeld)
	}
	return nil
}

// file reads one sample file and says what would become of it.
func (v *checkVerb) file(d *desk, cfg *config.Config, name string) (held bool, err error) {
	src, err := v.source(cfg, name)
	if err != nil {
		return false, err
	}
	info, err := os.Stat(name)
	if err != nil {
		return false, err
	}
	if !info.Mode().IsRegular() {
		return false, fmt.Errorf("%s is not a plain file", name)
	}
	content, err := os.ReadFile(name)
	if err != nil {
		return false, err
	}
	reader := intake.NewReader(src, &cfg.Plan)
	reader.Arriving(time.Now) // as if it were dropped now
	r := readSample(cfg, src, name, reader.Read(filepath.Base(name), info.ModTime(), content))
	if d.JSON {
		if !v.Rows {
			r.Rows = nil
		}
		return r.anyHeld(), d.object(r)
	}
	r.print(d, v.Rows)
	return r.anyHeld(), nil
}

// source finds the source that reads a sample file.
func (v *checkVerb) source(cfg *config.Config, name string) (*config.Source, error) {
	var names []string
	full, err := filepath.Abs(name)
	if err != nil {
		return nil, err
	}
	for i := range cfg.Sources {
		s := &cfg.Sources[i]
		if s.Name == v.Source || v.Source == "" && (filepath.Dir(full) == s.Folder || len(cfg.Sources) == 1) {
			return s, nil
		}
		names = append(names, s.Name)
	}
	if v.Source != "" {
		return nil, fmt.Errorf("there is no source %q; there are %s", v.Source, strings.Join(names, ", "))
	}
	return nil, fmt.Errorf("%s is in the folder of no source; say with --source which of %s reads it", name, strings.Join(names, ", "))
}
