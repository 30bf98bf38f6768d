package monitor

import (
	"bufio"
	"context"
	"encoding/json"
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
	"steelyard/rules"
	"steelyard/rules/posterior"
	"steelyard/store"
)

var (
	kills    = flag.Int("kills", 12, "how often TestKilledAtAnyMoment kills the daemon")
	killSeed = flag.Uint64("killseed", uint64(time.Now().UnixNano()), "seed of TestKilledAtAnyMoment")
)

// childFolder names the environment variable that makes the test binary a daemon on a folder.
const childFolder = "STEELYARD_TEST_DAEMON"

func TestMain(m *testing.M) {
	if folder := os.Getenv(childFolder); folder != "" {
		if err := runChild(folder); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
		return
	}
	os.Exit(m.Run())
}

func runChild(folder string) error {
	cfg, err := config.Load(filepath.Join(folder, "config.toml"))
	if err != nil {
		return err
	}
	desk, err := Open(cfg, Options{Log: zerolog.New(os.Stderr).Level(zerolog.WarnLevel)})
	if err != nil {
		return err
	}
	ready := make(chan struct{})
	go func() { <-ready; fmt.Println("ready") }()
	return desk.Run(context.Background(), ready)
}

func asText(t *testing.T, v any) string {
	t.Helper()
	text, err := json.Marshal(v)
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

// child starts the daemon as a process of its own.
func child(t *testing.T, folder string) *exec.Cmd {
	t.Helper()
	cmd := exec.Command(os.Args[0])
	cmd.Env = append(os.Environ(), childFolder+"="+folder)
	var trouble strings.Builder
	cmd.Stderr = &trouble
	out, err := cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	if line, err := bufio.NewReader(out).ReadString('\n'); err != nil {
		t.Fatalf("the daemon did not start: %q, %v: %s", line, err, trouble.String())
	}
	return cmd
}

// While files arrive (renamed in, rewritten before they settle, sent again, some bad) the daemon
// is killed with SIGKILL at random moments and started again. Then every file has been counted
// once or held once, what is believed equals what the files say, and each alarm change in the
// journal is in the feed with its one id. A kill leaves the page cache, so this shows
// atomicity; what a power cut does is another test's.
func TestKilledAtAnyMoment(t *testing.T) {
	t.Logf("seed %d; repeat with -killseed", *killSeed)
	rng := rand.New(rand.NewPCG(*killSeed, 0))
	folder := t.TempDir()
	text := strings.Replace(twoLines, `settle = "0s"`, `settle = "50ms"`, 1)
	if err := os.WriteFile(filepath.Join(folder, "config.toml"), []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	if err := os.Mkdir(filepath.Join(folder, "drop"), 0o755); err != nil {
		t.Fatal(err)
	}
	const files = 300
	go func() {
		for i := range files {
			arrive(t, filepath.Join(folder, "drop"), i)
			time.Sleep(time.Duration(*kills) * 150 * time.Millisecond / files)
		}
	}()
	for range *kills {
		cmd := child(t, folder)
		time.Sleep(time.Duration(rng.IntN(300000)) * time.Microsecond)
		if err := cmd.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		_ = cmd.Wait() // it was killed
	}
	cfg, err := config.Load(filepath.Join(folder, "config.toml"))
	if err != nil {
		t.Fatal(err)
	}
	d := start(t, cfg)
	known := func() (n int) {
		if err := d.store.Files("rig", func(store.FileMemory) { n++ }); err != nil {
			t.Fatal(err)
		}
		return n
	}
	d.until("every file is dealt with", func(*Status) bool { return known() == files })
	d.until("the feed is told", func(s *Status) bool { return s.Feeds[0].Waiting == 0 })
	checkKilled(t, d, files)
}

// arrive is the arrival of file i, in one of the ways that files have.
func arrive(t *testing.T, folder string, i int) {
	name := fmt.Sprintf("f%03d.csv", i)
	line := []string{"L1", "L4"}[i%2]
	content := rows(line, i*5, 5, 33+0.7*float64(i%2)*float64(min(i, 200))/100)
	path := filepath.Join(folder, name)
	var err error
	switch {
	case i%10 == 3: // a bad file
		err = os.WriteFile(path, []byte("Line,Serial\nL1,"+name+"\n"), 0o644)
	case i%10 == 5: // the one before, sent again
		old := i - 1
		content = rows([]string{"L1", "L4"}[old%2], old*5, 5, 33+0.7*float64(old%2)*float64(min(old, 200))/100)
		err = os.WriteFile(path, []byte(content), 0o644)
	case i%10 == 7: // written in two pieces, and so rewritten before it settles
		if err = os.WriteFile(path, []byte(content[:len(content)/2]), 0o644); err == nil {
			err = os.WriteFile(path, []byte(content), 0o644)
		}
	default:
		hidden := filepath.Join(folder, "."+name)
		if err = os.WriteFile(hidden, []byte(content), 0o644); err == nil {
			err = os.Rename(hidden, path)
		}
	}
	if err != nil {
		t.Error(err)
	}
}

// checkKilled holds the journal, the state and the feed against the files.
func checkKilled(t *testing.T, d *daemon, files int) {
	counted, held, again := map[string]int{}, map[string]int{}, map[string]int{}
	want := map[string]posterior.Sums{}
	changes := map[string]bool{}
	err := d.store.Journal(0, d.store.Next(), func(e rules.Event, out rules.Outcomes) error {
		switch {
		case e.Batch != nil:
			counted[e.Batch.File]++
			for _, s := range e.Batch.Series {
				sum := want[s.Process]
				for _, v := range s.Value {
					sum = sum.Add(posterior.NormalFamily, v, 1)
				}
				want[s.Process] = sum
			}
		case e.Held != nil:
			held[e.Held.File]++
		case e.Again != nil:
			again[e.Again.File]++
		}
		for _, c := range out.Changes {
			id := fmt.Sprintf("A%d.%d", c.Alarm, c.Step)
			if changes[id] {
				t.Errorf("the change %s is twice in the journal", id)
			}
			changes[id] = true
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	units := 0
	for i := range files {
		name := fmt.Sprintf("f%03d.csv", i)
		got, wants := [3]int{counted[name], held[name], again[name]}, [3]int{1, 0, 0}
		switch i % 10 {
		case 3:
			wants = [3]int{0, 1, 0}
		case 4: // the next one has the same content: either may be seen first
			if got[2] == 1 {
				wants = [3]int{0, 0, 1}
			}
		case 5:
			if before := fmt.Sprintf("f%03d.csv", i-1); counted[before] == 1 {
				wants = [3]int{0, 0, 1}
			}
		}
		if got != wants {
			t.Errorf("%s: counted, held and again %v times; want %v", name, got, wants)
		}
		units += 5 * counted[name]
	}
	total := 0.0
	for process, sum := range want {
		d.mu.Lock()
		got, err := d.state.Sums(process)
		d.mu.Unlock()
		total += got.N
		if err != nil || got.N != sum.N || math.Abs(got.Mean/sum.Mean-1) > 1e-15 || math.Abs(got.SS/sum.SS-1) > 1e-15 {
			t.Errorf("%s: %+v, want %+v, %v", process, got, sum, err)
		}
	}
	if total != float64(units) {
		t.Errorf("%v units are believed in, the files have %d", total, units)
	}
	seen := map[string]bool{}
	for _, m := range messages(t, d.cfg.Feeds[0].Path) {
		seen[m.ID] = true
	}
	for id := range changes {
		if !seen[id] {
			t.Errorf("the change %s is not in the feed", id)
		}
	}
	if len(changes) == 0 {
		t.Error("no alarm was raised, though L4 drifts away")
	}
	replayed(t, d.Desk)
}
