package monitor

import (
	"math"
	"os"
	"testing"

	"steelyard/rules"
)

// oxide.csv, morley.csv and warpbreaks.csv are dropped as they are into the running daemon. The averages,
// standard deviations and probabilities were computed with mpmath at 30 digits from the files, the
// probability by direct convolution of one Student density with the other's tail, which is not
// the engine's route (testdata/scripts/behrens_fisher.py, open_data_claims.py). R 4.2.2 agrees on the statistics:
// Welch's t of oxide is -3.6302 on 51.857 degrees of freedom (stats::t.test on nlme::Oxide).
func TestOpenData(t *testing.T) {
	cfg := plant(t, `
[site]
name = "Tessmoor Pumpworks"
[characteristic.thickness]
lines = ["1", "2"]
[characteristic.speed]
lines = ["1", "2", "3", "4", "5"]
[characteristic.breaks]
family = "poisson"
lines = ["A", "B"]
[source.oxide]
folder = "oxide"
settle = "0s"
columns = { line = "source", thickness = "thickness" }
[source.morley]
folder = "morley"
settle = "0s"
columns = { line = "experiment", serial = "run", speed = "speed" }
[source.looms]
folder = "looms"
settle = "0s"
columns = { line = "wool", breaks = "breaks" }
[[rule]]
name = "oxide: 1 over 2"
claim = "mean(thickness.1) - mean(thickness.2) > 0"
tell = []
[[rule]]
name = "oxide: 2 over 1 by 5"
claim = "mean(thickness.2) - mean(thickness.1) > 5"
tell = []
[[rule]]
name = "morley: 1 over 2"
claim = "mean(speed.1) - mean(speed.2) > 0"
tell = []
[[rule]]
name = "morley: 1 over 5 by 20"
claim = "mean(speed.1) - mean(speed.5) > 20"
tell = []
[[rule]]
name = "morley: 1 the fastest"
claim = "mean(speed.1) > max(mean(speed.2), mean(speed.3), mean(speed.4), mean(speed.5))"
tell = []
[[rule]]
name = "morley: 1 over the others by 40"
claim = "mean(speed.1) - (mean(speed.2) + mean(speed.3) + mean(speed.4) + mean(speed.5))/4 > 40"
tell = []
[[rule]]
name = "looms: A over B"
claim = "rate(breaks.A) / rate(breaks.B) > 1"
tell = []
[[rule]]
name = "looms: A over B by a quarter"
claim = "rate(breaks.A) / rate(breaks.B) > 1.25"
tell = []
`)
	d := start(t, cfg)
	for i, name := range []string{"oxide.csv", "morley.csv", "warpbreaks.csv"} {
		text, err := os.ReadFile("../testdata/data/" + name)
		if err != nil {
			t.Fatal(err)
		}
		drop(t, cfg.Sources[i].Folder, name, string(text))
	}
	st := d.until("all are counted", func(s *Status) bool {
		return s.Sources[0].Counted == 1 && s.Sources[1].Counted == 1 && s.Sources[2].Counted == 1
	})
	for i, want := range []float64{0.00036960209342633543473, 0.96214953310499740832, 0.96721289568948870659, 0.97927356191587043091,
		0.955118680296110616376, 0.886521274529345003131, 0.999968941507223338546, 0.369383433819236014542} {
		if got := st.Rules[i].Look.Odds().Probability(); math.Abs(got/want-1) > 1e-12 {
			t.Errorf("%s: %.17g, want %.17g", st.Rules[i].Rule, got, want)
		}
	}
	for _, want := range []struct {
		process     string
		n, mean, sd float64
	}{
		{"thickness.1", 36, 1995.1111111111111111, 7.5319425602004381031}, {"thickness.2", 36, 2005.1944444444444444, 14.866682682032800025},
		{"speed.1", 20, 909, 104.9260391142757581}, {"speed.2", 20, 856, 61.164144983633568066}, {"speed.3", 20, 845, 79.106856446468060011},
		{"speed.4", 20, 820.5, 60.041652209112300543}, {"speed.5", 20, 831.5, 54.219340111304039716},
	} {
		d.mu.Lock()
		s, err := d.state.Sums(want.process)
		d.mu.Unlock()
		sd := math.Sqrt(s.SS / (s.N - 1))
		if err != nil || s.N != want.n || s.Mean != want.mean || math.Abs(sd/want.sd-1) > 4e-16 {
			t.Errorf("%s: n %v, mean %.17g, sd %.17g, %v; want %+v", want.process, s.N, s.Mean, sd, err, want)
		}
	}
}

// What the journal holds is what the engine says: driving a fresh engine with the recorded
// events gives the recorded outcomes and the state that the daemon has.
func TestJournalReplays(t *testing.T) {
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	for i := range 6 {
		drop(t, cfg.Sources[0].Folder, string(rune('a'+i))+".csv", rows([]string{"L1", "L4"}[i%2], 12*i, 12, 33+float64(i%2)))
	}
	d.until("six files are counted", func(s *Status) bool { return s.Sources[0].Counted == 6 })
	state := replayed(t, d.Desk)
	for _, p := range []string{"head.L1", "head.L4"} {
		d.mu.Lock()
		live, err := d.state.Sums(p)
		d.mu.Unlock()
		again, err2 := state.Sums(p)
		if err != nil || err2 != nil || live != again {
			t.Errorf("%s: %+v live, %+v replayed", p, live, again)
		}
	}
}

// replayed drives a fresh engine with the journal and holds every outcome against the record.
func replayed(t *testing.T, d *Desk) *rules.State {
	t.Helper()
	state := d.replaying()
	err := d.store.Journal(0, d.store.Next(), func(e rules.Event, recorded rules.Outcomes) error {
		out, err := state.Apply(&e)
		if err != nil {
			return err
		}
		if asText(t, out) != asText(t, recorded) {
			t.Errorf("record %d: recorded %s, replayed %s", e.Index, asText(t, recorded), asText(t, out))
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return state
}
