package main

import (
	"bufio"
	"context"
	_ "embed"
	"encoding/json"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"os/signal"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor"
	"steelyard/monitor/config"
	"steelyard/monitor/feed"
	"steelyard/rules"
)

//go:embed demo.toml
var demoConfiguration []byte

type demoVerb struct {
	Keep bool   `help:"Leave the folder with everything in it."`
	Seed uint64 `default:"7" help:"Seed of the invented measurements."`
}

// The course of the demonstration: so many rounds of one file from each rig, which stand for 20
// minutes of production each.
const (
	demoRounds     = 36
	demoChange     = 14 // the round at which the insert on L3 is changed
	demoPause      = 450 * time.Millisecond
	demoProduction = 20 * time.Minute
)

// Run shows the daemon at work on invented rigs: real files, the real daemon, the real store.
func (v *demoVerb) Run(d *desk) (err error) {
	folder, err := os.MkdirTemp("", "steelyard-demo-")
	if err != nil {
		return err
	}
	defer func() {
		if v.Keep {
			d.line("\nEverything is left in %s: look with\n  go run ./cmd/steelyard --config %s status", folder, filepath.Join(folder, "config.toml"))
			return
		}
		err = errors.Join(err, os.RemoveAll(folder))
	}()
	s, err := newShow(d, folder, v.Seed)
	if err != nil {
		return err
	}
	return s.run()
}

// show is one demonstration.
type show struct {
	d      *desk
	folder string
	cfg    *config.Config
	rng    *rand.Rand
	rigs   []*demoRig
	start  time.Time // of the invented production
	told   int       // messages of the feed that were shown
	raised []string  // rules whose alarms were raised
}

func newShow(d *desk, folder string, seed uint64) (*show, error) {
	path := filepath.Join(folder, "config.toml")
	if err := os.WriteFile(path, demoConfiguration, 0o644); err != nil {
		return nil, err
	}
	cfg, err := config.Load(path)
	if err != nil {
		return nil, err
	}
	s := &show{d: d, folder: folder, cfg: cfg, rng: rand.New(rand.NewPCG(seed, 0)), rigs: demoRigs()}
	s.start = time.Now().In(cfg.Site.Zone).Add(-demoRounds * demoProduction).Truncate(time.Second)
	for _, src := range cfg.Sources {
		if err := os.MkdirAll(src.Folder, 0o755); err != nil {
			return nil, err
		}
	}
	return s, nil
}

func (s *show) run() error {
	s.d.line("Tessmoor Pumpworks is invented. Four lines, L1 to L4, make one cartridge; three rigs drop files of 12\n"+
		"cartridges a line into folders below %s.\nThe daemon watches, and weighs two rules a round; a round stands for 20 minutes of production.\n"+
		"At round %d somebody changes the insert of L3's boring tool: the bore grows by 0.0034 mm.\n%s\n", s.folder, demoChange, rules.ReleaseNote)
	desk, err := monitor.Open(s.cfg, monitor.Options{Log: zerolog.Nop()})
	if err != nil {
		return err
	}
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	daemon, end := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- desk.Run(daemon, nil) }()
	err = s.rounds(ctx, desk)
	if err == nil {
		err = s.close(desk)
	}
	end()
	err = errors.Join(err, <-done, desk.Close())
	if ctx.Err() != nil && err == nil {
		return outcome(exitInterrupted)
	}
	return err
}

// rounds lets the rigs drop their files, and tells what comes of it.
func (s *show) rounds(ctx context.Context, desk *monitor.Desk) error {
	for round := 1; round <= demoRounds && ctx.Err() == nil; round++ {
		at := s.start.Add(time.Duration(round) * demoProduction)
		if err := s.drop(round, at); err != nil {
			return err
		}
		select {
		case <-ctx.Done():
		case <-time.After(demoPause):
		}
		if err := s.tell(desk, round, at); err != nil {
			return err
		}
	}
	return nil
}

// drop makes the files of one round, and some that plants know too well.
func (s *show) drop(round int, at time.Time) error {
	folder := filepath.Join(s.folder, "drop")
	for _, r := range s.rigs {
		content := r.write(r.measure(s.rng, at, round >= demoChange))
		name := fmt.Sprintf("%s_%03d.csv", r.name, round)
		if err := r.drop(folder, name, content); err != nil {
			return err
		}
		switch {
		case round == 5 && r.name == "rig1":
			s.d.line("         rig1 sends its file once more under another name")
			if err := r.drop(folder, "rig1_005_copy.csv", content); err != nil {
				return err
			}
		case round == 8 && r.name == "rig2":
			s.d.line("         rig2 sends a file with decimal points, which its source does not declare")
			if err := r.drop(folder, "rig2_points.csv", strings.ReplaceAll(content, ",", ".")); err != nil {
				return err
			}
		}
	}
	return nil
}

// tell shows where the rule about L3 stands, and every message that has come.
func (s *show) tell(desk *monitor.Desk, round int, at time.Time) error {
	st, err := desk.Status()
	if err != nil {
		return err
	}
	if round%2 == 0 {
		s.line(st, round, at)
	}
	return s.messages(desk)
}

// line is one line about the bore on L3.
func (s *show) line(st *monitor.Status, round int, at time.Time) {
	text := fmt.Sprintf("round %2d  %s", round, at.Format("02 Jan 15:04"))
	for _, p := range st.Processes {
		if p.Process == "bore.L3" && p.Estimate != nil {
			text += fmt.Sprintf("  bore on L3 %.4f mm (95 %% %.4f to %.4f)", p.Estimate.Median, p.Estimate.Lower, p.Estimate.Upper)
		}
	}
	for _, r := range st.Rules {
		if r.Rule == demoRule && r.Look != nil && r.Look.Withheld == "" {
			text += "  P(L3 over L1 by > 0.0020) = " + rules.ProbabilityText(r.Look.Odds())
		}
	}
	s.d.line("%s", text)
}

// demoRule is the rule that the changed insert must raise.
const demoRule = "bore: L3 over L1"

// messages shows what has come into the feed, as the line leads get it, and lets one of them
// answer.
func (s *show) messages(desk *monitor.Desk) error {
	file, err := os.Open(s.cfg.Feeds[0].Path)
	if errors.Is(err, os.ErrNotExist) {
		return nil
	}
	if err != nil {
		return err
	}
	defer file.Close()
	lines := bufio.NewScanner(file)
	lines.Buffer(nil, 1<<20)
	for n := 0; lines.Scan(); n++ {
		if n < s.told {
			continue
		}
		s.told++
		var m feed.Message
		if err := json.Unmarshal(lines.Bytes(), &m); err != nil {
			return err
		}
		s.d.line("\n  ALARM %s, %s: %s\n", m.ID, m.Data.Cause, strings.Join(wrapped(m.Data.Text, 100), "\n    "))
		if m.Data.Cause == rules.Raised {
			s.raised = append(s.raised, m.Data.Rule)
			number, err := alarmNumber(m.Data.Alarm)
			if err != nil {
				return err
			}
			if _, err := desk.Acknowledge(number, "the lead of L3 (invented)", "demonstration", "the insert was changed; a new one is set"); err != nil {
				return err
			}
		}
	}
	return lines.Err()
}

// wrapped breaks a text into lines of at most width characters.
func wrapped(text string, width int) []string {
	lines := []string{""}
	for _, word := range strings.Fields(text) {
		last := &lines[len(lines)-1]
		switch {
		case *last == "":
			*last = word
		case len(*last)+1+len(word) <= width:
			*last += " " + word
		default:
			lines = append(lines, word)
		}
	}
	return lines
}

// close says what was expected and what came, and shows what an auditor would ask for.
func (s *show) close(desk *monitor.Desk) error {
	time.Sleep(2 * demoPause)
	if err := s.messages(desk); err != nil {
		return err
	}
	st, err := desk.Status()
	if err != nil {
		return err
	}
	for _, src := range st.Sources {
		s.d.line("%s: %d files counted, %d held, %d came again. %s", src.Name, src.Counted, src.Held, src.Again, src.Remark)
	}
	if len(s.raised) > 0 {
		s.d.line("\nWhat an auditor gets to see of A1 (steelyard explain A1):\n")
		x, err := desk.Explain(1)
		if err != nil {
			return err
		}
		if err := printExplanation(s.d.out, x, s.cfg.Site.Zone); err != nil {
			return err
		}
	}
	_, markdown, _, err := desk.WriteDayLog("")
	if err != nil {
		return err
	}
	s.d.line("\nThe day log is %s.", markdown)
	expected := []string{demoRule}
	if !slices.Equal(s.raised, expected) {
		return fmt.Errorf("the demonstration raised %q; %q was expected", s.raised, expected)
	}
	s.d.line("Expected: one raise, of the rule %q, and no other. That is what happened.", demoRule)
	return nil
}
