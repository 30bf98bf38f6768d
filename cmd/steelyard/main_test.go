package main

import (
	"bytes"
	"encoding/json"
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

// verb runs the program in a folder and returns its exit status and what it wrote.
func verb(t *testing.T, folder string, args ...string) (status int, out, errOut string) {
	t.Helper()
	t.Chdir(folder)
	var o, e bytes.Buffer
	status = run(args, &o, &e)
	return status, o.String(), e.String()
}

func TestExampleRunsAsItStands(t *testing.T) {
	text, err := os.ReadFile("../../config.example.toml")
	if err != nil {
		t.Fatal(err)
	}
	folder := t.TempDir()
	if err := os.WriteFile(filepath.Join(folder, "config.toml"), text, 0o644); err != nil {
		t.Fatal(err)
	}
	sample := "Tested at;Line;Serial;Head kPa;Bore in\r\n02.03.2026 10:41:07;L1;s1;33,4;0,31539\r\n02.03.2026 10:42:07;L2;s2;33.4;0,31539\r\n"
	if err := os.WriteFile(filepath.Join(folder, "s.csv"), []byte(sample), 0o644); err != nil {
		t.Fatal(err)
	}
	status, out, errOut := verb(t, folder, "check", "s.csv", "--source", "rig1", "--rows")
	if status != exitHeld || !strings.Contains(out, "1 rows counted, 1 held") || !strings.Contains(out, `line 3: column 4 ("Head kPa"): read "33.4"`) ||
		!strings.Contains(out, "bore.L1 = 8.0109") {
		t.Errorf("status %d, out %s, err %s", status, out, errOut)
	}
}

func TestExitStatuses(t *testing.T) {
	folder := t.TempDir()
	write := func(name, text string) {
		if err := os.WriteFile(filepath.Join(folder, name), []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	write("wrong.toml", "[site]\nnaem = \"x\"\n")
	write("good.toml", string(demoConfiguration))
	for _, c := range []struct {
		args   string
		status int
		says   string
	}{
		{"", exitUsage, "Usage"}, {"--help", exitDone, "Usage"}, {"statsu", exitUsage, `did you mean "status"`},
		{"-c absent.toml status", exitConfiguration, "no file absent.toml"}, {"-c wrong.toml check", exitConfiguration, `did you mean "name"`},
		{"-c good.toml check", exitDone, "is sound"}, {"-c good.toml status", exitFailed, "nothing has run here yet"},
		{"-c good.toml explain seven", exitFailed, "a name such as A7"}, {"--json -c wrong.toml check", exitConfiguration, `"type":"error"`},
	} {
		status, out, errOut := verb(t, folder, strings.Fields(c.args)...)
		if status != c.status || !strings.Contains(out+errOut, c.says) {
			t.Errorf("%q: status %d, want %d and %q; %s%s", c.args, status, c.status, c.says, out, errOut)
		}
	}
	if _, err := os.Stat(filepath.Join(folder, "state")); err == nil {
		t.Error("asking made a state folder")
	}
}

// The verbs work with a daemon and without one, and say which.
func TestVerbsReachTheDaemon(t *testing.T) {
	folder := t.TempDir()
	path := filepath.Join(folder, "config.toml")
	if err := os.WriteFile(path, demoConfiguration, 0o644); err != nil {
		t.Fatal(err)
	}
	cfg, err := config.Load(path)
	if err != nil {
		t.Fatal(err)
	}
	for _, s := range cfg.Sources {
		if err := os.MkdirAll(s.Folder, 0o755); err != nil {
			t.Fatal(err)
		}
	}
	desk, err := monitor.Open(cfg, monitor.Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	ctx := t.Context()
	ready, done := make(chan struct{}), make(chan error, 1)
	end := make(chan struct{})
	go func() {
		c, cancel := contextUntil(ctx, end)
		defer cancel()
		done <- desk.Run(c, ready)
	}()
	<-ready
	shifted := "Tested at,Serial,Bore in,Head kPa\n"
	for i := range 48 {
		shifted += fmt.Sprintf("2026-03-02T10:00:%02dZ,s%d,0.3154,%.2f\n", i, i, 35+0.1*float64(i%5))
	}
	plain := strings.ReplaceAll(strings.Replace(shifted, "Serial,Bore in", "Serial,Line,Bore mm", 1), ",0.3154,3", ",L1,8.011,3")
	plain = strings.ReplaceAll(plain, ",35", ",33")
	for name, text := range map[string]string{"rig3/a.csv": shifted, "rig1/a.csv": plain} {
		if err := os.WriteFile(filepath.Join(folder, "drop", name), []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	var st monitor.Status
	for deadline := time.Now().Add(10 * time.Second); len(st.Alarms) == 0; time.Sleep(10 * time.Millisecond) {
		status, out, errOut := verb(t, folder, "--json", "status")
		if status != 0 || json.Unmarshal([]byte(out), &st) != nil || !st.Watching {
			t.Fatalf("status %d: %s%s", status, out, errOut)
		}
		if time.Now().After(deadline) {
			t.Fatalf("no alarm: %s", out)
		}
	}
	if status, out, _ := verb(t, folder, "status", "--alarm-exit"); status != exitAlarm || !strings.Contains(out, "A1  unacknowledged") {
		t.Errorf("status %d: %s", status, out)
	}
	if status, _, errOut := verb(t, folder, "run"); status != exitStoreTaken || !strings.Contains(errOut, "another process has the store") {
		t.Errorf("a second daemon: status %d: %s", status, errOut)
	}
	if status, out, _ := verb(t, folder, "acknowledge", "A1", "--by", "the lead"); status != 0 || !strings.Contains(out, "A1 is acknowledged") {
		t.Errorf("status %d: %s", status, out)
	}
	close(end)
	if err := <-done; err != nil {
		t.Fatal(err)
	}
	if err := desk.Close(); err != nil {
		t.Fatal(err)
	}
	for args, says := range map[string]string{
		"status": "NOT WATCHING", "explain A1": "Looks around the crossing", "daylog --print": "the lead acknowledged A1",
	} {
		if status, out, errOut := verb(t, folder, strings.Fields(args)...); status != 0 || !strings.Contains(out, says) {
			t.Errorf("%s: status %d, want %q: %s%s", args, status, says, out, errOut)
		}
	}
	if status, _, errOut := verb(t, folder, "acknowledge", "A1"); status != exitFailed || !strings.Contains(errOut, "does not wait for an answer") {
		t.Errorf("answered twice: status %d: %s", status, errOut)
	}
}
