package main

import (
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/monitor/intake"
	"steelyard/rules"
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
	reading := intake.NewReader(src, &cfg.Plan).Read(filepath.Base(name), info.ModTime(), content)
	if d.JSON {
		return reading.Held != nil || len(reading.Batch.Held) > 0, d.object(struct {
			Type   string       `json:"type"`
			File   string       `json:"file"`
			Source string       `json:"source"`
			Batch  *rules.Batch `json:"batch,omitempty"`
			Held   *rules.Held  `json:"held,omitempty"`
		}{"reading", name, src.Name, reading.Batch, reading.Held})
	}
	rows := []rules.HeldRow(nil)
	if reading.Held != nil {
		d.line("\n%s, as source %s reads it: HELD WHOLE\n  %s", name, src.Name, reading.Held.Reason)
		rows = reading.Held.Rows
	} else {
		v.counted(d, cfg, src, name, reading.Batch)
		rows = reading.Batch.Held
	}
	for _, r := range rows {
		d.line("  line %d HELD: %s\n    it reads: %s", r.Line, r.Reason, r.Text)
	}
	return reading.Held != nil || len(rows) > 0, nil
}

func (v *checkVerb) counted(d *desk, cfg *config.Config, src *config.Source, name string, b *rules.Batch) {
	d.line("\n%s, as source %s reads it: %d rows counted, %d held", name, src.Name, len(b.Rows.Line), len(b.Held))
	for _, s := range b.Series {
		low, high := slices.Min(s.Value), slices.Max(s.Value)
		d.line("  %s: %d values from %v to %v %s", s.Process, len(s.Value), low, high, unitOf(cfg, s.Process))
	}
	if !v.Rows {
		return
	}
	for i, line := range b.Rows.Line {
		text := fmt.Sprintf("  line %d:", line)
		if b.Rows.Time != nil {
			text += " " + time.Unix(0, b.Rows.Time[i]).In(src.Form.Zone).Format(time.RFC3339)
		}
		if b.Rows.Serial != nil {
			text += " " + b.Rows.Serial[i]
		}
		for _, s := range b.Series {
			if j, ok := slices.BinarySearch(s.Row, i); ok {
				text += fmt.Sprintf(" %s = %v", s.Process, s.Value[j])
			}
		}
		d.line("%s", text)
	}
}

func unitOf(cfg *config.Config, process string) string {
	for _, c := range cfg.Plan.Characteristics {
		if strings.HasPrefix(process, c.Name+".") {
			return c.Unit
		}
	}
	return ""
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
