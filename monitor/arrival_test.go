package monitor

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"steelyard/monitor/config"
)

// Whatever the order in which files arrive, however often one is sent again, under its name or another, and whenever the
// daemon is stopped between, the posterior is that of one pass over the rows.
func TestAnyOrderOfArrival(t *testing.T) {
	rapid.Check(t, func(r *rapid.T) {
		if testing.Short() {
			r.Skip("starts daemons")
		}
		cfg := plant(t, strings.Replace(growingSource, `"growing"`, `"whole"`, 1))
		folder := cfg.Sources[0].Folder
		sizes := rapid.SliceOfN(rapid.IntRange(1, 12), 1, 8).Draw(r, "rows of each file")
		order := rapid.Permutation(indexes(len(sizes))).Draw(r, "order")
		text, first := make([]string, len(sizes)), 0
		for i, n := range sizes {
			text[i] = growingHead + growingRows(first, first+n)
			first += n
		}
		d := start(t, cfg)
		again := 0
		for _, i := range order {
			drop(t, folder, fmt.Sprintf("f%d.csv", i), text[i])
			switch rapid.IntRange(0, 5).Draw(r, "then") {
			case 0:
				d.stop()
				d = start(t, cfg)
			case 1:
				again++
				drop(t, folder, fmt.Sprintf("again%d.csv", again), text[i])
			case 2:
				drop(t, folder, fmt.Sprintf("f%d.csv", i), text[i])
			}
		}
		d.countedIs(upTo(first)...)
		d.stop()
	})
}

func indexes(n int) (all []int) {
	for i := range n {
		all = append(all, i)
	}
	return all
}

// BenchmarkLatency drops a file into one of 20 sources that are all active, and waits until it is committed; settle is 0.
// It prints the median and the 95th percentile, from the rename on.
func BenchmarkLatency(b *testing.B) {
	text := "[site]\nname = \"Tessmoor Pumpworks\"\n[characteristic.head]\nlines = [\"L1\"]\n"
	for i := range 20 {
		text += fmt.Sprintf("[source.rig%d]\nfolder = \"drop/%d\"\nsettle = \"0s\"\ncolumns = { line = \"Line\", serial = \"Serial\", head = \"Head kPa\" }\n", i, i)
	}
	cfg, err := config.Parse("config.toml", []byte(text), b.TempDir())
	if err != nil {
		b.Fatal(err)
	}
	for _, s := range cfg.Sources {
		if err := os.MkdirAll(s.Folder, 0o755); err != nil {
			b.Fatal(err)
		}
	}
	d := running(b, cfg)
	taken := func() int64 {
		d.mu.Lock()
		defer d.mu.Unlock()
		return d.state.Standings()[0].Taken
	}
	var took []float64
	n := 0
	put := func(source int) {
		n++
		hidden := filepath.Join(cfg.Sources[source].Folder, ".x")
		if err := os.WriteFile(hidden, []byte(rows("L1", 12*n, 12, 33)), 0o644); err != nil {
			b.Fatal(err)
		}
		if err := os.Rename(hidden, filepath.Join(cfg.Sources[source].Folder, fmt.Sprintf("%d.csv", n))); err != nil {
			b.Fatal(err)
		}
	}
	for b.Loop() {
		for s := 1; s < 20; s++ {
			put(s)
		}
		begun := time.Now()
		put(0)
		want := int64(12 * n)
		for taken() < want {
			time.Sleep(100 * time.Microsecond)
		}
		took = append(took, float64(time.Since(begun).Microseconds())/1000)
	}
	slices.Sort(took)
	b.ReportMetric(took[len(took)/2], "ms-median")
	b.ReportMetric(took[int(math.Ceil(0.95*float64(len(took))))-1], "ms-95%")
}
