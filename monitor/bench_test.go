package monitor

import (
	"fmt"
	"testing"

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
