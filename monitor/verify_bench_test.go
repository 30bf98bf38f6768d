package monitor

import (
	"errors"
	"flag"
	"fmt"
	"os"
	"strings"
	"testing"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
	"steelyard/store"
)

var verifyRows = flag.Int("verify-rows", 400_000, "measured rows that BenchmarkVerify verifies")

// BenchmarkVerify verifies journals of files of some rows, with a look at one rule for each, as far as possible in
// volumes, and prints how long ten million measured rows would take, and the memory at its highest.
func BenchmarkVerify(b *testing.B) {
	for _, rowsEach := range []int{12, 200, 1000} {
		b.Run(fmt.Sprintf("%d rows a file", rowsEach), func(b *testing.B) {
			folder := b.TempDir()
			all := max(*verifyRows, 1000*rowsEach)
			written(b, folder, all/rowsEach, rowsEach)
			b.ResetTimer()
			for b.Loop() {
				found, err := Verify(Verification{Folder: folder})
				if err != nil || found.Rows != all/rowsEach*rowsEach {
					b.Fatal(found, err)
				}
			}
			b.ReportMetric(b.Elapsed().Seconds()/float64(b.N)*1e7/float64(all), "s/10M-rows")
			b.ReportMetric(highestMiB(b), "MiB-high")
		})
	}
}

// highestMiB is the most memory that the process has had (Linux).
func highestMiB(b *testing.B) (mib float64) {
	text, err := os.ReadFile("/proc/self/status")
	if err != nil {
		return 0
	}
	for line := range strings.Lines(string(text)) {
		var kb float64
		if n, _ := fmt.Sscanf(line, "VmHWM: %f kB", &kb); n == 1 {
			mib = kb / 1024
		}
	}
	return mib
}

// written is a journal of so many files of two lines, each looked at, in a store whose older records are in volumes.
func written(b *testing.B, folder string, files, rowsEach int) {
	cfg, err := config.Parse("config.toml", []byte(growingSource), folder)
	if err != nil {
		b.Fatal(err)
	}
	s, err := store.Open(folder, store.Options{})
	if err != nil {
		b.Fatal(err)
	}
	engine := rules.NewState()
	engine.Consult(&history{store: s})
	at := time.Date(2026, 3, 2, 6, 0, 0, 0, time.UTC)
	step := store.Step{}
	commit := func(e rules.Event, last bool) {
		e.Index, e.At = s.Next()+uint64(len(step.Entries)), at
		at = at.Add(time.Second)
		out, err := engine.Apply(&e)
		if err != nil {
			b.Fatal(err)
		}
		step.Entries = append(step.Entries, store.Entry{Event: e, Outcomes: out})
		if len(step.Entries) < 500 && !last {
			return
		}
		if step.Pieces, err = engine.Pieces(); err == nil {
			err = s.Commit(step)
		}
		if err != nil {
			b.Fatal(err)
		}
		step = store.Step{}
	}
	commit(rules.Event{Adopted: &rules.Adopted{Plan: cfg.Plan, File: "config.toml"}}, true)
	for i := range files {
		batch := &rules.Batch{Source: "rig", File: fmt.Sprintf("r%07d.csv", i), SHA256: fmt.Sprintf("%064x", i*7919), To: int64(40 * rowsEach), Written: at,
			Series: []rules.Series{{Process: []string{"head.L1", "head.L4"}[i%2]}}}
		for j := range rowsEach {
			n := i*rowsEach + j
			batch.Rows.Line = append(batch.Rows.Line, j+2)
			batch.Rows.Time = append(batch.Rows.Time, at.UnixNano()+int64(j)*7e9)
			batch.Rows.Serial = append(batch.Rows.Serial, fmt.Sprintf("S-%08d", n))
			batch.Series[0].Row = append(batch.Series[0].Row, j)
			batch.Series[0].Value = append(batch.Series[0].Value, 33+float64((n*7919)%1000)/1000)
		}
		commit(rules.Event{Batch: batch}, i == files-1)
	}
	for {
		v, err := s.WriteVolume(s.Next() - 1)
		if err != nil {
			b.Fatal(err)
		}
		if v == nil || v.To-v.From < 100 {
			break
		}
		step.Sealed = v
		commit(rules.Event{Sealed: &rules.Sealed{From: v.From, To: v.To, File: v.File, SHA256: v.SHA256}}, true)
	}
	if _, err := s.Checkpoint(); err != nil {
		b.Fatal(err)
	}
	if err := errors.Join(nil, s.Close()); err != nil {
		b.Fatal(err)
	}
}
