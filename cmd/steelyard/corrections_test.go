package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor"
	"steelyard/monitor/config"
)

const benches = `
[site]
name = "Tessmoor Pumpworks"
[characteristic.head]
unit = "kPa"
lines = ["L1", "L4"]
plausible = { lower = 0, upper = 100 }
[source.rig]
folder = "drop"
settle = "0s"
columns = { line = "Line", serial = "Serial", head = "Head kPa" }
[[rule]]
name = "head: L4 over L1"
claim = "mean(head.L4) - mean(head.L1) > 0.4"
tell = []
`

// People correct what was counted, with the words that the verbs print: with a daemon, and then
// without one.
func TestCorrectionVerbs(t *testing.T) {
	folder := t.TempDir()
	path := filepath.Join(folder, "config.toml")
	put := func(name, text string) {
		t.Helper()
		hidden, name := filepath.Join(folder, ".new"), filepath.Join(folder, name)
		if err := errors.Join(os.WriteFile(hidden, []byte(text), 0o644), os.Rename(hidden, name)); err != nil {
			t.Fatal(err)
		}
	}
	put("config.toml", benches)
	if err := os.Mkdir(filepath.Join(folder, "drop"), 0o755); err != nil {
		t.Fatal(err)
	}
	cfg, err := config.Load(path)
	if err != nil {
		t.Fatal(err)
	}
	desk, err := monitor.Open(cfg, monitor.Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	ready, done, end := make(chan struct{}), make(chan error, 1), make(chan struct{})
	ctx := t.Context()
	go func() {
		c, cancel := contextUntil(ctx, end)
		defer cancel()
		done <- desk.Run(c, ready)
	}()
	<-ready
	file := func(line string, mean float64) string {
		text := "Line,Serial,Head kPa\n"
		for i := range 12 {
			text += fmt.Sprintf("%s,s%d,%.2f\n", line, i, mean+0.1*float64(i%5))
		}
		return text
	}
	try := func(want int, says string, args ...string) {
		t.Helper()
		status, out, errOut := verb(t, folder, args...)
		if status != want || !strings.Contains(out+errOut, says) {
			t.Errorf("%q: status %d, want %d and %q: %s%s", args, status, want, says, out, errOut)
		}
	}
	put("drop/a.csv", file("L1", 33))
	counted := func(n int) {
		t.Helper()
		for deadline := time.Now().Add(10 * time.Second); ; time.Sleep(5 * time.Millisecond) {
			st, err := desk.Status()
			if err != nil || time.Now().After(deadline) {
				t.Fatalf("%+v, %v", st, err)
			}
			if st.Sources[0].Counted == n {
				return
			}
		}
	}
	counted(1)
	put("drop/b.csv", file("L4", 35)+"L4,s99,833\nL4,s98,x\n")
	counted(2)
	try(exitHeld, `3:14`, "held")
	try(exitHeld, `"held":"3:14"`, "--json", "held", "list", "--source", "rig")
	try(exitDone, "Nothing that is held", "held", "list", "--source", "other")
	try(exitDone, "it reads: L4,s99,833", "held", "show", "3:14")
	try(exitDone, "taken after all by the engineer", "held", "take", "3:14", "--reason", "a real one", "--by", "the engineer")
	try(exitFailed, "decided on before", "held", "take", "3:14", "--reason", "again")
	try(exitDone, "files 0, rows of others 1", "status")
	try(exitDone, "set aside for good", "held", "set-aside", "3", "--reason", "scribble")
	try(exitDone, "Nothing that is held", "held")
	try(exitDone, "NOTHING IS CHANGED", "withdraw", "3", "4", "--reason", "weights off", "--try")
	try(exitDone, "A1 would not have been raised", "withdraw", "3", "4", "--reason", "weights off", "--by", "the engineer")
	try(exitFailed, "was withdrawn before", "withdraw", "3", "--reason", "weights off")
	try(exitUsage, "--reason", "withdraw", "3")
	try(exitFailed, "a date with a time", "withdraw", "--source", "rig", "--from", "today", "--to", "2026-03-02", "--reason", "r")
	try(exitDone, "Without them A1 would not have been raised", "explain", "A1")
	try(exitDone, "A new segment since", "mark", "--line", "L1", "--note", "new impeller")
	try(exitUsage, "can't be used together", "mark", "--line", "L1", "--source", "rig", "--note", "n")
	try(exitFailed, `did you mean "rig"`, "mark", "--source", "rgi", "--note", "n")
	close(end)
	if err := <-done; err != nil {
		t.Fatal(err)
	}
	if err := desk.Close(); err != nil {
		t.Fatal(err)
	}
	try(exitDone, "No daemon runs", "mark", "--process", "head.L4", "--note", "n")
	status, out, errOut := verb(t, folder, "--json", "withdraw", "2", "--reason", "r")
	var a monitor.Withdrawn
	if status != 0 || json.Unmarshal([]byte(out), &a) != nil || a.Type != "withdrawn" || len(a.Batches) != 1 || a.Caution == "" {
		t.Errorf("status %d: %s%s", status, out, errOut)
	}
	try(exitDone, "Withdrawn by the engineer", "daylog", "--print")
}
