package monitor

import (
	"bytes"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"steelyard/monitor/config"
	"steelyard/rules/posterior"
)

const growingSource = `
[site]
name = "Tessmoor Pumpworks"
[characteristic.head]
lines = ["L1", "L4"]
[source.rig]
folder = "drop"
arrives = "growing"
settle = "0s"
scan = "100ms"
columns = { line = "Line", serial = "Serial", head = "Head kPa" }
[[rule]]
name = "head: L4 over L1"
claim = "mean(head.L4) - mean(head.L1) > 0.4"
tell = ["leads"]
[feed.leads]
kind = "file"
path = "leads.jsonl"
`

const growingHead = "Line,Serial,Head kPa\n"

// growingRow is row i of whatever file it stands in: no two are alike.
func growingRow(i int) string {
	return fmt.Sprintf("%s,S-%06d,%.3f\n", []string{"L1", "L4"}[i%2], i, 33+float64((i*7919)%1000)/1000)
}

func growingRows(from, to int) string {
	var b strings.Builder
	for i := from; i < to; i++ {
		b.WriteString(growingRow(i))
	}
	return b.String()
}

// onePass is what the rows come to when they are counted one after the other.
func onePass(t testing.TB, accepted ...int) map[string]posterior.Sums {
	memory := map[string]*posterior.Memory{}
	for _, line := range []string{"L1", "L4"} {
		memory["head."+line] = posterior.NewMemory(posterior.NormalFamily, posterior.Remember{Segment: true})
	}
	for _, i := range accepted {
		var line string
		var serial int
		var value float64
		if _, err := fmt.Sscanf(strings.ReplaceAll(growingRow(i), ",", " "), "%s S-%d %g", &line, &serial, &value); err != nil {
			t.Fatal(err)
		}
		memory["head."+line].AddBatch([]float64{value}, nil, []int64{0})
	}
	sums := map[string]posterior.Sums{}
	for name, m := range memory {
		sums[name] = m.Sums()
	}
	return sums
}

func upTo(n int) (all []int) {
	for i := range n {
		all = append(all, i)
	}
	return all
}

// countedIs waits until as many rows are counted, and compares the posteriors.
func (d *daemon) countedIs(accepted ...int) {
	d.t.Helper()
	want := onePass(d.t, accepted...)
	sums := func(name string) posterior.Sums {
		d.mu.Lock()
		defer d.mu.Unlock()
		s, err := d.state.Sums(name)
		if err != nil {
			d.t.Fatal(err)
		}
		return s
	}
	d.until(fmt.Sprintf("%d rows are counted", len(accepted)), func(*Status) bool {
		return sums("head.L1").N+sums("head.L4").N >= float64(len(accepted))
	})
	for name, w := range want {
		if got := sums(name); got.N != w.N || !close12(got.Mean, w.Mean) || !close12(got.SS, w.SS) {
			d.t.Errorf("%s: %+v, want %+v", name, got, w)
		}
	}
}

func close12(a, b float64) bool { return a == b || a > b*(1-1e-12) && a < b*(1+1e-12) }

func appendTo(t testing.TB, path, text string) {
	f, err := os.OpenFile(path, os.O_CREATE|os.O_APPEND|os.O_WRONLY, 0o644)
	if err == nil {
		_, err = f.WriteString(text)
	}
	if err == nil {
		err = f.Close()
	}
	if err != nil {
		t.Fatal(err)
	}
}

// A rig appends all day; the file is rotated, copied and truncated, begun anew with the same header; the daemon is
// stopped and started between. Each row counts once.
func TestGrowingFiles(t *testing.T) {
	cfg := plant(t, growingSource)
	folder := cfg.Sources[0].Folder
	path := filepath.Join(folder, "today.csv")
	d := start(t, cfg)
	again := func() {
		d.stop()
		d = start(t, cfg)
	}
	text := growingHead + growingRows(0, 10)
	appendTo(t, path, text[:len(text)-9]) // the last row is half there
	d.countedIs(upTo(9)...)
	again()
	appendTo(t, path, text[len(text)-9:]+growingRows(10, 30))
	d.countedIs(upTo(30)...)
	// A tail of zero bytes, as after a power cut, is no data until it has turned into text.
	appendTo(t, path, strings.Repeat("\x00", 100))
	d.until("it is held", func(s *Status) bool { return s.Sources[0].Held == 1 })
	if err := os.Truncate(path, int64(len(growingHead+growingRows(0, 30)))); err != nil {
		t.Fatal(err)
	}
	appendTo(t, path, growingRows(30, 40))
	d.countedIs(upTo(40)...)
	// Rotated: what was today's is yesterday's, and goes on a little under its new name.
	if err := os.Rename(path, filepath.Join(folder, "yesterday.csv")); err != nil {
		t.Fatal(err)
	}
	appendTo(t, filepath.Join(folder, "yesterday.csv"), growingRows(40, 44))
	appendTo(t, path, growingHead+growingRows(44, 50))
	d.countedIs(upTo(50)...)
	again()
	// Copied and truncated.
	whole, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(folder, "saved.csv"), whole, 0o644); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(path, []byte(growingHead+growingRows(50, 60)), 0o644); err != nil {
		t.Fatal(err)
	}
	d.countedIs(upTo(60)...)
	again()
	d.countedIs(upTo(60)...)
	// A row within is changed: nothing more is taken of it, and that is said.
	changed := bytes.Replace([]byte(growingHead+growingRows(50, 62)), []byte("S-000052"), []byte("S-999952"), 1)
	if err := os.WriteFile(path, changed, 0o644); err != nil {
		t.Fatal(err)
	}
	d.until("it is held", func(s *Status) bool { return s.Sources[0].Held == 1 }) // since the start
	d.countedIs(upTo(60)...)
	state := replayed(t, d.Desk)
	for _, name := range []string{"head.L1", "head.L4"} {
		d.mu.Lock()
		live, err := d.state.Sums(name)
		d.mu.Unlock()
		replay, err2 := state.Sums(name)
		if err != nil || err2 != nil || live != replay {
			t.Errorf("%s: %+v live, %+v replayed", name, live, replay)
		}
	}
}

// The daemon is killed at any moment while a file grows.
func TestKilledWhileAFileGrows(t *testing.T) {
	rng := rand.New(rand.NewPCG(*killSeed, 1))
	t.Logf("seed %d; repeat with -killseed", *killSeed)
	folder := t.TempDir()
	if err := os.WriteFile(filepath.Join(folder, "config.toml"), []byte(growingSource), 0o644); err != nil {
		t.Fatal(err)
	}
	if err := os.Mkdir(filepath.Join(folder, "drop"), 0o755); err != nil {
		t.Fatal(err)
	}
	const all = 4000
	path := filepath.Join(folder, "drop", "today.csv")
	wrote := make(chan struct{})
	pieces := rand.New(rand.NewPCG(*killSeed, 2))
	go func() {
		defer close(wrote)
		text := growingHead + growingRows(0, all)
		for len(text) > 0 {
			n := min(1+pieces.IntN(len(text)/100+200), len(text))
			appendTo(t, path, text[:n])
			text = text[n:]
			time.Sleep(time.Duration(*kills) * 150 * time.Millisecond / 200)
		}
	}()
	for range *kills {
		cmd := child(t, folder)
		time.Sleep(time.Duration(rng.IntN(250000)) * time.Microsecond)
		if err := cmd.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		_ = cmd.Wait() // it was killed
	}
	<-wrote
	cfg, err := config.Load(filepath.Join(folder, "config.toml"))
	if err != nil {
		t.Fatal(err)
	}
	start(t, cfg).countedIs(upTo(all)...)
}

// However a file is split into appends, and whenever the daemon is stopped between, the posterior is that of
// one pass.
func TestAnySplitOfAGrowingFile(t *testing.T) {
	rapid.Check(t, func(r *rapid.T) {
		if testing.Short() {
			r.Skip("starts daemons")
		}
		cfg := plant(t, growingSource)
		path := filepath.Join(cfg.Sources[0].Folder, "today.csv")
		n := rapid.IntRange(1, 60).Draw(r, "rows")
		text := growingHead + growingRows(0, n)
		d := start(t, cfg)
		for len(text) > 0 {
			piece := rapid.IntRange(1, len(text)).Draw(r, "piece")
			appendTo(t, path, text[:piece])
			text = text[piece:]
			switch rapid.IntRange(0, 4).Draw(r, "then") {
			case 0:
				d.stop()
				d = start(t, cfg)
			case 1:
				time.Sleep(5 * time.Millisecond)
			}
		}
		d.countedIs(upTo(n)...)
		d.stop()
	})
}
