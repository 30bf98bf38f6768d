package monitor

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// BenchmarkBatchOf12 is what one batch of 12 rows costs from its arrival at the writer to the
// disk: applied, weighed, an alarm changed every time, and committed with its message. Beside
// it, the same without an alarm.
func BenchmarkBatchOf12(b *testing.B) {
	for _, alarm := range []bool{true, false} {
		b.Run(fmt.Sprintf("alarm=%v", alarm), func(b *testing.B) {
			cfg, err := config.Parse("config.toml", []byte(twoLines), b.TempDir())
			if err != nil {
				b.Fatal(err)
			}
			cfg.Plan.Characteristics[0].Remember.Segment, cfg.Plan.Characteristics[0].Remember.Units = false, 12
			d, err := Open(cfg, Options{Log: zerolog.Nop()})
			if err != nil {
				b.Fatal(err)
			}
			defer d.Close()
			if err := d.Adopt(); err != nil {
				b.Fatal(err)
			}
			changes, i := 0, 0
			for b.Loop() {
				mean := 33.0
				if alarm && i%4 == 1 {
					mean = 35
				}
				out, err := d.commitOne(rules.Event{Batch: batchOf([]string{"head.L1", "head.L4"}[i%2], mean)})
				if err != nil {
					b.Fatal(err)
				}
				changes += len(out.Changes)
				i++
			}
			b.ReportMetric(float64(changes)/float64(i), "changes/op")
		})
	}
}

func batchOf(process string, mean float64) *rules.Batch {
	b := &rules.Batch{Source: "rig", File: "f.csv", Series: []rules.Series{{Process: process}}}
	for i := range 12 {
		b.Rows.Line = append(b.Rows.Line, i+2)
		b.Rows.Serial = append(b.Rows.Serial, fmt.Sprintf("s%05d", i))
		s := &b.Series[0]
		s.Row, s.Value = append(s.Row, i), append(s.Value, mean+0.1*float64(i%5))
	}
	return b
}

// BenchmarkDropToAlarm is how long it takes from the renaming of a file of 12 rows into a drop
// folder, with nothing left to settle, until it is committed with a changed alarm and the message
// stands in the feed's file; and beside it the bare way: the same file is renamed, and read
// again.
func BenchmarkDropToAlarm(b *testing.B) {
	cfg, err := config.Parse("config.toml", []byte(twoLines), b.TempDir())
	if err != nil {
		b.Fatal(err)
	}
	cfg.Plan.Characteristics[0].Remember.Segment, cfg.Plan.Characteristics[0].Remember.Units = false, 12
	folder := cfg.Sources[0].Folder
	if err := os.MkdirAll(folder, 0o755); err != nil {
		b.Fatal(err)
	}
	d, err := Open(cfg, Options{Log: zerolog.Nop()})
	if err != nil {
		b.Fatal(err)
	}
	ctx, end := context.WithCancel(b.Context())
	done, ready := make(chan error, 1), make(chan struct{})
	go func() { done <- d.Run(ctx, ready) }()
	<-ready
	put := func(folder string, i int) string {
		content := rows([]string{"L1", "L4"}[i%2], 12*i, 12, 33+2*float64((i/2+i)%2))
		name := filepath.Join(folder, fmt.Sprintf("f%07d.csv", i))
		if err := errors.Join(os.WriteFile(filepath.Join(folder, ".new"), []byte(content), 0o644), os.Rename(filepath.Join(folder, ".new"), name)); err != nil {
			b.Fatal(err)
		}
		return name
	}
	b.Run("daemon", func(b *testing.B) {
		for b.Loop() {
			d.mu.Lock()
			counted, i := d.sources["rig"].Counted, d.sources["rig"].Counted
			d.mu.Unlock()
			put(folder, i)
			for now := counted; now == counted; time.Sleep(100 * time.Microsecond) {
				d.mu.Lock()
				now = d.sources["rig"].Counted
				d.mu.Unlock()
			}
			for n := 1; n > 0; {
				if n, err = d.waiting("leads"); err != nil {
					b.Fatal(err)
				}
			}
		}
	})
	b.Run("bare", func(b *testing.B) {
		bare, i := b.TempDir(), 0
		for b.Loop() {
			if _, err := os.ReadFile(put(bare, i)); err != nil {
				b.Fatal(err)
			}
			i++
		}
	})
	end()
	if err := errors.Join(<-done, d.Close()); err != nil {
		b.Fatal(err)
	}
}
