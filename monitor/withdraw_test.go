package monitor

import (
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// still is a Desk on which nothing runs: a test commits to it, and gives it the time.
type still struct {
	*Desk
	t   *testing.T
	cfg *config.Config
	now time.Time
}

func stand(t *testing.T, text string) *still {
	s := &still{t: t, cfg: plant(t, text), now: time.Date(2026, 3, 2, 10, 0, 0, 0, time.UTC)}
	s.open()
	if err := s.Adopt(); err != nil {
		t.Fatal(err)
	}
	return s
}

func (s *still) open() {
	s.t.Helper()
	var err error
	if s.Desk, err = Open(s.cfg, Options{Log: zerolog.Nop(), Now: func() time.Time { return s.now }}); err != nil {
		s.t.Fatal(err)
	}
	s.t.Cleanup(func() { s.Desk.Close() })
}

// again ends the Desk and opens another on the same store.
func (s *still) again() {
	s.t.Helper()
	if err := s.Desk.Close(); err != nil {
		s.t.Fatal(err)
	}
	s.open()
}

func (s *still) commit1(e rules.Event) rules.Outcomes {
	s.t.Helper()
	s.now = s.now.Add(time.Minute)
	out, err := s.commitOne(e)
	if err != nil {
		s.t.Fatal(err)
	}
	return out
}

func (s *still) units(process string) float64 {
	s.t.Helper()
	st, err := s.Status()
	if err != nil {
		s.t.Fatal(err)
	}
	return standingOf(st.Processes, process).Units
}

// A rig is found out of calibration: what it sent between two times is taken out, the alarm that
// rested on it goes, and the past is told as it would have been.
func TestRigOutOfCalibration(t *testing.T) {
	s := stand(t, twoLines)
	b := func(source, process string, mean float64) rules.Event {
		batch := batchOf(process, mean)
		batch.Source = source
		for i := range batch.Rows.Line {
			batch.Rows.Time = append(batch.Rows.Time, s.now.Add(time.Duration(i-20)*time.Second).UnixNano())
		}
		return rules.Event{Batch: batch}
	}
	s.commit1(b("rig", "head.L1", 33))           // 1
	s.commit1(b("rig", "head.L4", 33))           // 2
	raised := s.commit1(b("rig", "head.L4", 36)) // 3
	s.commit1(b("rig", "head.L4", 36))           // 4
	s.commit1(b("rig", "head.L4", 36))           // 5, after the two times
	if len(raised.Changes) != 1 || raised.Changes[0].Cause != rules.Raised {
		t.Fatalf("%+v", raised.Changes)
	}
	w := Withdrawal{Source: "rig", From: s.now.Add(-4 * time.Minute), To: s.now.Add(-135 * time.Second), Reason: "weights were off", By: "the engineer", How: "test", Try: true}
	if a, err := s.Withdraw(w); err != nil || !a.Tried || len(a.Batches) != 2 || s.units("head.L4") != 48 {
		t.Fatalf("trying: %+v, %v", a, err)
	}
	w.Try = false
	a, err := s.Withdraw(w)
	if err != nil {
		t.Fatal(err)
	}
	if len(a.Batches) != 2 || a.Batches[0].Record != 3 || a.Batches[0].Beyond != 0 || a.Batches[1].Record != 4 || a.Batches[1].Beyond != 7 || a.Record != 6 || s.units("head.L4") != 24 {
		t.Errorf("withdrawn: %+v", a)
	}
	// Without 3 and 4, what is high begins with record 5: the same alarm, later.
	if len(a.NotThen) != 1 || a.NotThen[0].Record != 3 || a.NotThen[0].Instead == nil || *a.NotThen[0].Instead != 5 || len(a.Changes) != 0 {
		t.Errorf("what would have been: %+v, %+v, %+v", a.NotThen, a.Then, a.Changes)
	}
	if _, err := s.Withdraw(Withdrawal{Batches: []uint64{3}, Reason: "again"}); err == nil || !strings.Contains(err.Error(), "withdrawn before") {
		t.Errorf("withdrawn twice: %v", err)
	}
	if _, err := s.Withdraw(w); err == nil || !strings.Contains(err.Error(), "no batch of rig that counts") {
		t.Errorf("the same stretch twice: %v", err)
	}
	s.again()
	a, err = s.Withdraw(Withdrawal{Batches: []uint64{5, 2}, Reason: "and the rest", By: "the engineer", How: "test"})
	if err != nil || len(a.Changes) != 1 || a.Changes[0].Cause != rules.TakenOut || a.Changes[0].To != rules.Returned || s.units("head.L4") != 0 {
		t.Fatalf("%+v, %v", a, err)
	}
	x, err := s.Explain(1)
	if err != nil || len(x.Withdrawn) != 2 || x.Withdrawn[0].Batch != 3 || x.Withdrawn[1].Reason != "and the rest" || x.Stands == nil || *x.Stands {
		t.Errorf("the explanation: %+v, %v", x, err)
	}
	log, err := s.DayLog("")
	if err != nil {
		t.Fatal(err)
	}
	said := strings.Join(log.Remarks, "\n")
	for _, want := range []string{"Withdrawn by the engineer (test)", "the records 3 and 4", "every batch of rig", "weights were off", "the records 2 and 5"} {
		if !strings.Contains(said, want) {
			t.Errorf("the day log says %q, want it to say %q", said, want)
		}
	}
}

// What is asked for that can't be is refused in words.
func TestWithdrawalAskedWrongly(t *testing.T) {
	s := stand(t, twoLines)
	s.commit1(rules.Event{Batch: batchOf("head.L1", 33)})
	for _, c := range []struct {
		w    Withdrawal
		says string
	}{
		{Withdrawal{Batches: []uint64{1}}, "needs a reason"},
		{Withdrawal{Reason: "r"}, "no batch is named"},
		{Withdrawal{Reason: "r", Batches: []uint64{0}}, "counted no batch"},
		{Withdrawal{Reason: "r", Batches: []uint64{7}}, "there is no record 7"},
		{Withdrawal{Reason: "r", Batches: []uint64{1}, Source: "rig"}, "not both"},
		{Withdrawal{Reason: "r", Source: "rig"}, "two times"},
		{Withdrawal{Reason: "r", Source: "rig", From: s.now, To: s.now}, "the first before the second"},
		{Withdrawal{Reason: "r", From: s.now, To: s.now}, "need the source"},
		{Withdrawal{Reason: "r", Source: "other", From: s.now.Add(-time.Hour), To: s.now.Add(time.Hour)}, "no batch of other"},
	} {
		if _, err := s.Withdraw(c.w); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%+v: %v, want it to say %q", c.w, err, c.says)
		}
	}
	if s.units("head.L1") != 12 || s.store.Next() != 2 {
		t.Error("a refused withdrawal changed something")
	}
}

// A batch and its withdrawal in one transaction: the engine reads what is not in the store yet.
func TestWithdrawnInTheSameCommit(t *testing.T) {
	s := stand(t, twoLines)
	next := batchOf("head.L1", 34)
	next.Replaces = []uint64{1}
	_, refused, err := s.commit([]happening{
		{event: rules.Event{Batch: batchOf("head.L1", 33)}},
		{event: rules.Event{Batch: next}},
		{event: rules.Event{Withdrawn: &rules.Withdrawn{Batches: []uint64{2}, Reason: "r"}}},
		{event: rules.Event{Batch: batchOf("head.L1", 35)}},
	})
	if err != nil || refused[0] != nil || refused[1] != nil || refused[2] != nil || s.units("head.L1") != 12 {
		t.Errorf("%v, %v, %v units", refused, err, s.units("head.L1"))
	}
	live := asText(t, s.state.Standings())
	s.again()
	if again := asText(t, s.state.Standings()); again != live {
		t.Errorf("restored %s, want %s", again, live)
	}
	replayed := s.replaying()
	if err := s.store.Journal(0, s.store.Next(), func(e rules.Event, out rules.Outcomes) error {
		got, err := replayed.Apply(&e)
		if asText(t, got) != asText(t, out) {
			t.Errorf("record %d: %s, want %s", e.Index, asText(t, got), asText(t, out))
		}
		return err
	}); err != nil {
		t.Fatal(err)
	}
	if again := asText(t, replayed.Standings()); again != live {
		t.Errorf("replayed %s, want %s", again, live)
	}
}

var _ rules.History = (*history)(nil)

// BenchmarkWithdraw is what taking out the last batch but one of a journal of 5000 costs: made
// anew from a recall, and beside it from the beginning, as the first batch is.
func BenchmarkWithdraw(b *testing.B) {
	for _, which := range []string{"newest", "oldest"} {
		b.Run(which, func(b *testing.B) {
			cfg, err := config.Parse("config.toml", []byte(twoLines), b.TempDir())
			if err != nil {
				b.Fatal(err)
			}
			d, err := Open(cfg, Options{Log: zerolog.Nop()})
			if err != nil {
				b.Fatal(err)
			}
			defer d.Close()
			if err := d.Adopt(); err != nil {
				b.Fatal(err)
			}
			for range 50 {
				var list []happening
				for range 100 {
					list = append(list, happening{event: rules.Event{Batch: batchOf("head.L1", 33)}})
				}
				if _, _, err := d.commit(list); err != nil {
					b.Fatal(err)
				}
			}
			next := d.store.Next()
			b.ResetTimer()
			for i := range b.N {
				index := uint64(i + 1)
				if which == "newest" {
					index = next - 1 - uint64(i)
				}
				if _, err := d.commitOne(rules.Event{Withdrawn: &rules.Withdrawn{Batches: []uint64{index}, Reason: "r"}}); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
