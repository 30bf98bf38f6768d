package monitor

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
	"steelyard/monitor/feed"
)

// plant is a configuration in a folder of its own, with its drop folders made.
func plant(t *testing.T, text string) *config.Config {
	t.Helper()
	folder := t.TempDir()
	cfg, err := config.Parse("config.toml", []byte(text), folder)
	if err != nil {
		t.Fatal(err)
	}
	for _, s := range cfg.Sources {
		if err := os.MkdirAll(s.Folder, 0o755); err != nil {
			t.Fatal(err)
		}
	}
	return cfg
}

// daemon runs a configuration until the test, or stop, ends it.
type daemon struct {
	*Desk
	t    *testing.T
	end  context.CancelFunc
	done chan error
}

func start(t *testing.T, cfg *config.Config) *daemon {
	t.Helper()
	desk, err := Open(cfg, Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	ctx, end := context.WithCancel(context.Background())
	d := &daemon{Desk: desk, t: t, end: end, done: make(chan error, 1)}
	ready := make(chan struct{})
	go func() { d.done <- desk.Run(ctx, ready) }()
	select {
	case <-ready:
	case err := <-d.done:
		t.Fatal(err)
	}
	t.Cleanup(func() { d.stop() })
	return d
}

func (d *daemon) stop() {
	if d.end == nil {
		return
	}
	d.end()
	d.end = nil
	if err := <-d.done; err != nil {
		d.t.Error(err)
	}
	if err := d.Close(); err != nil {
		d.t.Error(err)
	}
}

// until waits for something to become true of the status.
func (d *daemon) until(what string, true func(*Status) bool) *Status {
	d.t.Helper()
	deadline := time.Now().Add(20 * time.Second)
	for {
		st, err := d.Status()
		if err != nil {
			d.t.Fatal(err)
		}
		if true(st) {
			return st
		}
		if time.Now().After(deadline) {
			d.t.Fatalf("waited in vain until %s: %+v", what, st.Sources)
		}
		time.Sleep(5 * time.Millisecond)
	}
}

// drop puts a file into a folder as a well-behaved rig does.
func drop(t *testing.T, folder, name, content string) {
	t.Helper()
	hidden := filepath.Join(folder, "."+name+".part")
	if err := os.WriteFile(hidden, []byte(content), 0o644); err != nil {
		t.Fatal(err)
	}
	if err := os.Rename(hidden, filepath.Join(folder, name)); err != nil {
		t.Fatal(err)
	}
}

// messages reads a feed file.
func messages(t *testing.T, path string) (all []feed.Message) {
	t.Helper()
	text, err := os.ReadFile(path)
	if os.IsNotExist(err) {
		return nil
	}
	if err != nil {
		t.Fatal(err)
	}
	for _, line := range strings.Split(strings.TrimSpace(string(text)), "\n") {
		var m feed.Message
		if err := json.Unmarshal([]byte(line), &m); err != nil {
			t.Fatalf("%q: %v", line, err)
		}
		all = append(all, m)
	}
	return all
}

const twoLines = `
[site]
name = "Tessmoor Pumpworks"
[characteristic.head]
title = "delivery head"
unit = "kPa"
lines = ["L1", "L4"]
plausible = { lower = 0, upper = 100 }
[source.rig]
folder = "drop"
settle = "0s"
scan = "200ms"
[source.rig.columns]
line = "Line"
serial = "Serial"
head = "Head kPa"
[[rule]]
name = "head: L4 over L1"
claim = "mean(head.L4) - mean(head.L1) > 0.4"
tell = ["leads"]
[feed.leads]
kind = "file"
path = "leads.jsonl"
`

// rows is the content of a file of one line: values around a mean, n of them from serial first.
func rows(line string, first, n int, mean float64) string {
	text := "Line,Serial,Head kPa\n"
	for i := first; i < first+n; i++ {
		text += fmt.Sprintf("%s,%s-%04d,%.3f\n", line, line, i, mean+0.3*float64((i*7)%5-2)/2)
	}
	return text
}

// A newcomer's way: files are dropped, an alarm comes, is explained, answered, and all of it is
// still there after a stop and a start.
func TestFromDroppedFileToAnswer(t *testing.T) {
	cfg := plant(t, twoLines)
	folder := cfg.Sources[0].Folder
	d := start(t, cfg)
	drop(t, folder, "a1.csv", rows("L1", 0, 12, 33.0))
	drop(t, folder, "b1.csv", rows("L4", 0, 12, 34.5))
	d.until("two files are counted", func(s *Status) bool { return s.Sources[0].Counted == 2 })
	st := d.until("the feed is told", func(s *Status) bool { return s.Feeds[0].Waiting == 0 })
	if len(st.Alarms) != 1 || st.Alarms[0].Alarm != 1 || st.Alarms[0].State != "unacknowledged" {
		t.Fatalf("alarms: %+v", st.Alarms)
	}
	told := messages(t, cfg.Feeds[0].Path)
	if len(told) != 1 || told[0].ID != "A1.1" || !strings.Contains(told[0].Data.Text, "L4 is running above L1 by more than 0.4 kPa") ||
		!strings.Contains(told[0].Data.Text, "does not replace") {
		t.Fatalf("told: %+v", told)
	}
	x, err := d.Explain(1)
	if err != nil {
		t.Fatal(err)
	}
	if x.Crossing.File != "b1.csv" || len(x.Batches) != 2 || x.Processes[0].After.Units != 12 {
		t.Errorf("explanation: %+v", x)
	}
	if _, err := d.Acknowledge(1, "the lead", "test", ""); err != nil {
		t.Fatal(err)
	}
	if _, err := d.Acknowledge(1, "the lead", "test", ""); err == nil {
		t.Error("the same alarm was answered twice")
	}
	d.stop()
	d = start(t, cfg)
	st = d.until("the state is back", func(s *Status) bool { return len(s.Alarms) == 1 })
	if st.Alarms[0].State != "acknowledged" || st.Processes[0].Units != 12 {
		t.Errorf("after a new start: %+v", st)
	}
	log, markdown, _, err := d.WriteDayLog("")
	if err != nil {
		t.Fatal(err)
	}
	if len(log.Changes) != 2 || len(log.Gaps) != 1 || log.Sources[0].Files != 2 {
		t.Errorf("day log: %+v", log)
	}
	if text, err := os.ReadFile(markdown); err != nil || !strings.Contains(string(text), "does not replace the site's release procedures") {
		t.Errorf("%s, %v", text, err)
	}
}

// What plants drop that can't be counted: nothing panics, nothing is lost, each gets a sentence.
func TestHostileFiles(t *testing.T) {
	cfg := plant(t, twoLines)
	folder := cfg.Sources[0].Folder
	d := start(t, cfg)
	good := rows("L1", 0, 3, 33)
	for name, content := range map[string]string{
		"empty.csv": "", "header.csv": "Line,Serial,Head kPa\n", "nan.csv": "Line,Serial,Head kPa\nL1,1,NaN\n",
		"inf.csv": "Line,Serial,Head kPa\nL1,1,Inf\n", "huge.csv": "Line,Serial,Head kPa\nL1,1,1e400\n",
		"hex.csv": "Line,Serial,Head kPa\nL1,1,0x1p3\n", "column.csv": "Line,Serial,Haed kPa\nL1,1,3\n",
		"quote.csv": "Line,Serial,Head kPa\nL1,1,\"3\n", "nul.csv": good + "L1,9,\x00\x00\n",
		"group.csv": "Line,Serial,Head kPa\nL1,1,\"1,234\"\n", "gross.csv": "Line,Serial,Head kPa\nL1,1,838.2\n",
		"line.csv": "Line,Serial,Head kPa\nL9,1,33\n", "fields.csv": "Line,Serial,Head kPa\nL1,1,33,4\n",
		"long.csv": "Line,Serial,Head kPa\n" + strings.Repeat("x", 2<<20) + "\n",
	} {
		drop(t, folder, name, content)
	}
	outside := filepath.Join(t.TempDir(), "secret.csv")
	if err := os.WriteFile(outside, []byte(good), 0o644); err != nil {
		t.Fatal(err)
	}
	if err := os.Symlink(outside, filepath.Join(folder, "link.csv")); err != nil {
		t.Fatal(err)
	}
	if err := os.Mkdir(filepath.Join(folder, "folder.csv"), 0o755); err != nil {
		t.Fatal(err)
	}
	pipe(t, filepath.Join(folder, "pipe.csv"))
	giant := filepath.Join(folder, ".giant")
	if err := os.WriteFile(giant, []byte("Line,Serial,Head kPa\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(os.Truncate(giant, 100<<20), os.Rename(giant, filepath.Join(folder, "giant.csv"))); err != nil {
		t.Fatal(err)
	}
	for i := range 20 { // some are gone before, some while they are read
		gone := filepath.Join(folder, fmt.Sprintf("gone%d.csv", i))
		if err := errors.Join(os.WriteFile(gone, nil, 0o644), os.Remove(gone)); err != nil {
			t.Fatal(err)
		}
	}
	drop(t, folder, "mixed.csv", good+"L1,7,33,2\n")
	d.until("all are dealt with", func(s *Status) bool { return s.Sources[0].Held >= 19 && s.Sources[0].Counted == 1 })
	log, err := d.DayLog("")
	if err != nil {
		t.Fatal(err)
	}
	reasons := map[string]string{}
	for _, h := range log.Held {
		reasons[h.File] = h.Reason
	}
	for file, want := range map[string]string{
		"empty.csv": "the file is empty", "header.csv": "no row", "nan.csv": `column 3 ("Head kPa"): read "NaN"`, "inf.csv": `read "Inf"`,
		"huge.csv": "float64", "hex.csv": `read "0x1p3"`, "column.csv": `did you mean "Haed kPa"`, "quote.csv": "not closed", "nul.csv": "zero byte",
		"group.csv": `read "1,234"`, "gross.csv": "plausible", "line.csv": `read the line "L9"`, "fields.csv": "read 4 fields", "long.csv": "more than 1048576 bytes",
		"link.csv": "symbolic link", "folder.csv": "folder", "pipe.csv": "pipe", "mixed.csv": "line 5", "giant.csv": "104857600 bytes",
	} {
		if !strings.Contains(reasons[file], want) || !strings.Contains(reasons[file], file) {
			t.Errorf("%s: %q, want it to say %q", file, reasons[file], want)
		}
	}
	kept, err := os.ReadDir(filepath.Join(cfg.Site.State, "held"))
	if err != nil || len(kept) < 13 {
		t.Errorf("%d held files are kept, %v", len(kept), err)
	}
	st, err := d.Status()
	if err != nil || st.Processes[0].Units != 3 {
		t.Errorf("units: %+v, %v", st.Processes, err)
	}
}

// A drop folder that goes and comes back is told from one in which nothing arrives.
func TestFolderGoesAndComesBack(t *testing.T) {
	cfg := plant(t, strings.Replace(twoLines, `"200ms"`, `"100ms"`, 1))
	folder := cfg.Sources[0].Folder
	d := start(t, cfg)
	drop(t, folder, "a.csv", rows("L1", 0, 3, 33))
	d.until("a file is counted", func(s *Status) bool { return s.Sources[0].Counted == 1 })
	if err := os.RemoveAll(folder); err != nil {
		t.Fatal(err)
	}
	d.until("it is missed", func(s *Status) bool { return !s.Sources[0].Able })
	if err := os.MkdirAll(folder, 0o755); err != nil {
		t.Fatal(err)
	}
	drop(t, folder, "b.csv", rows("L1", 3, 3, 33))
	d.until("it is back", func(s *Status) bool { return s.Sources[0].Able && s.Sources[0].Counted == 2 })
	log, err := d.DayLog("")
	if err != nil || len(log.Gaps) != 1 || log.Gaps[0].What != "source rig" || log.Gaps[0].To.IsZero() {
		t.Errorf("gaps: %+v, %v", log.Gaps, err)
	}
}

// The same content under another name is not counted again; another content under the same
// name is held.
func TestSentAgain(t *testing.T) {
	cfg := plant(t, twoLines)
	folder := cfg.Sources[0].Folder
	d := start(t, cfg)
	drop(t, folder, "a.csv", rows("L1", 0, 5, 33))
	d.until("it is counted", func(s *Status) bool { return s.Sources[0].Counted == 1 })
	drop(t, folder, "copy.csv", rows("L1", 0, 5, 33))
	drop(t, folder, "a.csv", rows("L1", 0, 6, 33))
	d.until("both are seen", func(s *Status) bool { return s.Sources[0].Again == 1 && s.Sources[0].Held == 1 })
	d.stop()
	d = start(t, cfg)
	st := d.until("it is up", func(*Status) bool { return true })
	if st.Processes[0].Units != 5 {
		t.Errorf("units: %v", st.Processes[0].Units)
	}
	// What was held under that name is not taken for counted: under a new name it counts.
	drop(t, folder, "new.csv", rows("L1", 0, 6, 33))
	d.until("it is counted under a new name", func(s *Status) bool { return s.Sources[0].Counted == 1 })
}

// Asking while no daemon runs does not pass for watching: the stretch without a daemon begins
// where the daemon ended, not where somebody asked.
func TestAskingIsNotWatching(t *testing.T) {
	cfg := plant(t, twoLines)
	now := time.Date(2026, 3, 2, 10, 0, 0, 0, time.UTC)
	clock := func() time.Time { return now }
	open := func() *Desk {
		d, err := Open(cfg, Options{Log: zerolog.Nop(), Now: clock})
		if err != nil {
			t.Fatal(err)
		}
		return d
	}
	ends := func(d *Desk, in time.Duration) {
		now = now.Add(in)
		if err := d.Close(); err != nil {
			t.Fatal(err)
		}
	}
	d := open()
	if err := d.begin(); err != nil {
		t.Fatal(err)
	}
	ends(d, time.Hour) // without end(): as a killed daemon, but for the store
	d = open()
	st, err := d.Status()
	if err != nil || st.LastAlive.Hour() != 10 {
		t.Errorf("last alive %v, %v", st.LastAlive, err)
	}
	ends(d, time.Hour)
	d = open()
	if err := d.begin(); err != nil {
		t.Fatal(err)
	}
	log, err := d.DayLog("")
	if err != nil || len(log.Gaps) != 1 || log.Gaps[0].To.Sub(log.Gaps[0].From) != 2*time.Hour || !strings.Contains(log.Gaps[0].Why, "without order") {
		t.Errorf("gaps: %+v, %v", log.Gaps, err)
	}
	ends(d, 0)
}
