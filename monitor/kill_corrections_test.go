package monitor

import (
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// While files are sent again under their names, each time corrected, and people withdraw and
// decide over the socket, the daemon is killed at random moments and started again. Then of every
// name at most one content counts, the one that lies there unless it was withdrawn, and what is
// believed is what these contents say.
func TestKilledWhileCorrecting(t *testing.T) {
	t.Logf("seed %d; repeat with -killseed", *killSeed)
	rng := rand.New(rand.NewPCG(*killSeed, 1))
	folder := t.TempDir()
	text := strings.Replace(twoLines, `settle = "0s"`, "resent = \"replace\"\nsettle = \"20ms\"", 1)
	if err := os.WriteFile(filepath.Join(folder, "config.toml"), []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	drops := filepath.Join(folder, "drop")
	mkdir(t, drops)
	cfg, err := config.Load(filepath.Join(folder, "config.toml"))
	if err != nil {
		t.Fatal(err)
	}
	const names = 8
	content := func(name, version int) string {
		text := rows("L1", 100*name, 5+name, 33+0.01*float64(version))
		if version%3 == 0 {
			text += "L1,odd,133\n" // a row that is held
		}
		return text
	}
	last := [names]int{}
	for kill := range max(*kills/2, 4) {
		cmd := child(t, folder)
		for range 6 {
			name := rng.IntN(names)
			last[name] = 1 + last[name]
			drop(t, drops, fmt.Sprintf("f%d.csv", name), content(name, last[name]))
			time.Sleep(time.Duration(rng.IntN(30)) * time.Millisecond)
			correct(cfg, rng)
		}
		time.Sleep(time.Duration(rng.IntN(40)) * time.Millisecond)
		if err := cmd.Process.Kill(); err != nil {
			t.Fatalf("kill %d: %v", kill, err)
		}
		_ = cmd.Wait() // it was killed
	}
	d := start(t, cfg)
	for name := range last { // the last word on each name, which nobody withdraws
		last[name] = 1 + last[name]
		drop(t, drops, fmt.Sprintf("f%d.csv", name), content(name, last[name]))
	}
	d.until("every name is counted", func(s *Status) bool { return s.Sources[0].Counted >= names })
	units := 0
	for name := range last {
		file := fmt.Sprintf("f%d.csv", name)
		counting, err := d.counting("rig", file)
		if err != nil || len(counting) != 1 {
			t.Fatalf("of %s the records %v count, %v", file, counting, err)
		}
		e, err := d.record(counting[0])
		if err != nil || len(e.Batch.Rows.Line) != 5+name {
			t.Fatalf("%s: %+v, %v", file, e, err)
		}
		units += len(e.Batch.Rows.Line)
	}
	st, err := d.Status()
	if err != nil {
		t.Fatal(err)
	}
	if got := standingOf(st.Processes, "head.L1").Units; got != float64(units) {
		t.Errorf("%v units are believed in, want %d", got, units)
	}
	var replaced, withdrawn, decided int
	if err := d.store.Journal(0, d.store.Next(), func(e rules.Event, _ rules.Outcomes) error {
		switch {
		case e.Withdrawn != nil:
			withdrawn++
		case e.Decided != nil, e.Batch != nil && e.Batch.Decided != nil:
			decided++
		case e.Batch != nil && len(e.Batch.Replaces) > 0:
			replaced++
		}
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	t.Logf("%d files replaced others, %d withdrawals, %d decisions", replaced, withdrawn, decided)
	if replaced == 0 {
		t.Error("nothing was replaced, so nothing was tried")
	}
	replayed(t, d.Desk)
}

// correct withdraws something, or takes a held row, over the socket. The daemon may be killed
// meanwhile, and may refuse.
func correct(cfg *config.Config, rng *rand.Rand) {
	c, running, err := Reach(cfg, Options{Log: zerolog.Nop()})
	if err != nil {
		return
	}
	defer c.Close()
	if !running {
		return
	}
	if rng.IntN(3) == 0 {
		st, err := c.Status()
		if err == nil && st.Records > 2 {
			_, _ = c.Withdraw(Withdrawal{Batches: []uint64{2 + rng.Uint64N(st.Records-2)}, Reason: "r", By: "b", How: "h"})
		}
		return
	}
	items, err := c.Held()
	if err == nil && len(items) > 0 {
		i := items[rng.IntN(len(items))]
		_, _ = c.Decide(Decision{HeldRef: HeldRef{i.Record, i.Line}, Take: rng.IntN(2) == 0, Reason: "r", By: "b", How: "h"})
	}
}
