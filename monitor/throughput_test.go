package monitor

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/csv"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
)

const throughputSource = `
[site]
name = "Tessmoor Pumpworks"
[characteristic.head]
lines = ["L1"]
remember = { units = 400 }
[source.rig]
folder = "drop"
arrives = "%s"
settle = "0s"
scan = "200ms"
largest = "1GB"
columns = { time = "Time", line = { fixed = "L1" }, serial = "Serial", head = "Head kPa" }
`

// rigRows is what a rig writes: time, serial, one value.
func rigRows(first, n int) []byte {
	var b bytes.Buffer
	b.WriteString("Time,Serial,Head kPa\n")
	begin := time.Date(2026, 3, 2, 6, 0, 0, 0, time.UTC)
	for i := first; i < first+n; i++ {
		fmt.Fprintf(&b, "%s,S-%08d,%.3f\n", begin.Add(time.Duration(i)*7*time.Second).Format(time.RFC3339), i, 33+float64((i*7919)%1000)/1000)
	}
	return b.Bytes()
}

// plain reads, hashes and parses the files of a folder, and does no more: the naive way beside the daemon.
func plain(b *testing.B, folder string) (rows int, sum float64) {
	names, err := os.ReadDir(folder)
	if err != nil {
		b.Fatal(err)
	}
	for _, name := range names {
		text, err := os.ReadFile(filepath.Join(folder, name.Name()))
		if err != nil {
			b.Fatal(err)
		}
		_ = sha256.Sum256(text)
		r := csv.NewReader(bytes.NewReader(text))
		r.ReuseRecord = true
		if _, err := r.Read(); err != nil {
			b.Fatal(err)
		}
		for {
			record, err := r.Read()
			if err == io.EOF {
				break
			}
			if err != nil {
				b.Fatal(err)
			}
			at, err := time.Parse(time.RFC3339, record[0])
			if err != nil {
				b.Fatal(err)
			}
			v, err := strconv.ParseFloat(record[2], 64)
			if err != nil {
				b.Fatal(err)
			}
			rows, sum = rows+1, sum+v+float64(at.Nanosecond())
		}
	}
	return rows, sum
}

// counts runs the daemon on a folder of files until all rows are committed.
func counts(b *testing.B, arrives, drop string, all int) {
	folder := b.TempDir()
	text := strings.Replace(fmt.Sprintf(throughputSource, arrives), `"drop"`, strconv.Quote(drop), 1)
	cfg, err := config.Parse("config.toml", []byte(text), folder)
	if err != nil {
		b.Fatal(err)
	}
	b.StartTimer()
	desk, err := Open(cfg, Options{Log: zerolog.Nop()})
	if err != nil {
		b.Fatal(err)
	}
	ctx, end := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- desk.Run(ctx, nil) }()
	for {
		desk.mu.Lock()
		n := int64(0)
		for _, st := range desk.state.Standings() {
			n += st.Taken
		}
		desk.mu.Unlock()
		if n == int64(all) {
			break
		}
		time.Sleep(500 * time.Microsecond)
	}
	b.StopTimer()
	end()
	if err := <-done; err != nil {
		b.Fatal(err)
	}
	if err := desk.Close(); err != nil {
		b.Fatal(err)
	}
}

// BenchmarkThroughput counts, journals and commits files that lie in a folder, and does beside it what a plain
// program does that only reads, hashes and parses them. It prints rows a second and their ratio.
func BenchmarkThroughput(b *testing.B) {
	for _, c := range []struct {
		name, arrives string
		files, rows   int
	}{{"1000 files of 1000 rows", "whole", 1000, 1000}, {"one growing file of 1000000 rows", "growing", 1, 1000000}, {"5000 files of 12 rows", "whole", 5000, 12}} {
		b.Run(c.name, func(b *testing.B) {
			drop := b.TempDir()
			for i := range c.files {
				if err := os.WriteFile(filepath.Join(drop, fmt.Sprintf("%05d.csv", i)), rigRows(i*c.rows, c.rows), 0o644); err != nil {
					b.Fatal(err)
				}
			}
			all := c.files * c.rows
			var bare time.Duration
			b.ResetTimer()
			b.StopTimer()
			for range b.N {
				begun := time.Now()
				if rows, _ := plain(b, drop); rows != all {
					b.Fatalf("the plain program read %d rows", rows)
				}
				bare += time.Since(begun)
				counts(b, c.arrives, drop, all)
			}
			perSecond := float64(all*b.N) / b.Elapsed().Seconds()
			b.ReportMetric(perSecond, "rows/s")
			b.ReportMetric(float64(all*b.N)/bare.Seconds(), "plain-rows/s")
			b.ReportMetric(bare.Seconds()/b.Elapsed().Seconds(), "of-plain")
		})
	}
}

// running is a daemon for the length of a benchmark.
func running(b *testing.B, cfg *config.Config) *Desk {
	desk, err := Open(cfg, Options{Log: zerolog.Nop()})
	if err != nil {
		b.Fatal(err)
	}
	ctx, end := context.WithCancel(context.Background())
	ready, done := make(chan struct{}), make(chan error, 1)
	go func() { done <- desk.Run(ctx, ready) }()
	<-ready
	b.Cleanup(func() {
		end()
		if err := <-done; err != nil {
			b.Error(err)
		}
		if err := desk.Close(); err != nil {
			b.Error(err)
		}
	})
	return desk
}
