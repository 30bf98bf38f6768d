package monitor

import (
	"strings"
	"sync"
	"testing"
	"time"

	"steelyard/rules"
)

// Situation 2: a file is sent again, corrected, under its name. As declared, the new content is
// held, counted beside the old one, or counted in its place.
func TestSituation02ResentWithCorrections(t *testing.T) {
	for way, want := range map[string]float64{"hold": 5, "add": 12, "replace": 7} {
		t.Run(way, func(t *testing.T) {
			cfg := plant(t, strings.Replace(twoLines, "settle", "resent = \""+way+"\"\nsettle", 1))
			folder := cfg.Sources[0].Folder
			d := start(t, cfg)
			drop(t, folder, "a.csv", rows("L1", 0, 5, 33))
			d.until("it is counted", func(s *Status) bool { return s.Sources[0].Counted == 1 })
			drop(t, folder, "a.csv", rows("L1", 0, 7, 34))
			st := d.until("the second is dealt with", func(s *Status) bool { return s.Sources[0].Counted+s.Sources[0].Held == 2 })
			if got := standingOf(st.Processes, "head.L1").Units; got != want {
				t.Errorf("%v units, want %v", got, want)
			}
			if way != "replace" {
				return
			}
			// And back again: the first content is the newest now. A copy of what is out is held.
			drop(t, folder, "copy.csv", rows("L1", 0, 5, 33))
			d.until("the copy is held", func(s *Status) bool { return s.Sources[0].Held == 1 })
			drop(t, folder, "a.csv", rows("L1", 0, 5, 33))
			d.until("the first is back", func(s *Status) bool { return s.Sources[0].Counted == 3 })
			d.stop()
			d = start(t, cfg)
			drop(t, folder, "copy2.csv", rows("L1", 0, 5, 33))
			st = d.until("a copy of what counts comes again", func(s *Status) bool { return s.Sources[0].Again == 1 })
			if got := standingOf(st.Processes, "head.L1"); got.Units != 5 || got.Taken != 5 || got.Estimate.Median > 33.5 {
				t.Errorf("%+v", got)
			}
			log, err := d.DayLog("")
			if err != nil {
				t.Fatal(err)
			}
			if said := strings.Join(log.Remarks, "\n"); strings.Count(said, "File a.csv of rig") != 2 || !strings.Contains(said, "takes the place of record 2, which counts no more") {
				t.Errorf("the day log says %s", said)
			}
			if len(log.Held) != 1 || !strings.Contains(log.Held[0].Reason, "has been withdrawn since") {
				t.Errorf("held: %+v", log.Held)
			}
		})
	}
}

// Once a person has withdrawn what a name brought, the corrected file of that name is new.
func TestResentAfterAWithdrawal(t *testing.T) {
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	drop(t, cfg.Sources[0].Folder, "a.csv", rows("L1", 0, 5, 33))
	d.until("it is counted", func(s *Status) bool { return s.Sources[0].Counted == 1 })
	if _, err := d.Withdraw(Withdrawal{Batches: []uint64{2}, Reason: "wrong gauge", By: "the engineer", How: "test"}); err != nil {
		t.Fatal(err)
	}
	drop(t, cfg.Sources[0].Folder, "a.csv", rows("L1", 0, 6, 33))
	st := d.until("the corrected file is counted", func(s *Status) bool { return s.Sources[0].Counted == 2 })
	if got := standingOf(st.Processes, "head.L1").Units; got != 6 {
		t.Errorf("%v units", got)
	}
}

// The writer and a person decide at the same time: whichever comes first, each row counts once.
func TestReplacedWhileWithdrawn(t *testing.T) {
	cfg := plant(t, strings.Replace(twoLines, "settle", "resent = \"replace\"\nsettle", 1))
	d := start(t, cfg)
	var people sync.WaitGroup
	for i := range 20 {
		drop(t, cfg.Sources[0].Folder, "a.csv", rows("L1", i, 5, 33))
		d.until("it is dealt with", func(s *Status) bool { return s.Sources[0].Counted+s.Sources[0].Held == i+1 })
		counting, err := d.counting("rig", "a.csv")
		if err != nil {
			t.Fatal(err)
		}
		people.Go(func() {
			time.Sleep(time.Duration(i*200) * time.Microsecond)
			_, _ = d.Withdraw(Withdrawal{Batches: counting, Reason: "r", By: "b", How: "h"}) // it may be too late
		})
	}
	d.until("all are dealt with", func(s *Status) bool { return s.Sources[0].Counted+s.Sources[0].Held == 20 })
	people.Wait()
	var counted int
	out := map[uint64]bool{}
	if err := d.store.Journal(0, d.store.Next(), func(e rules.Event, _ rules.Outcomes) error {
		for _, w := range takenOut(&e) {
			if out[w.Batch] {
				t.Errorf("record %d was taken out twice", w.Batch)
			}
			out[w.Batch] = true
		}
		if e.Batch != nil {
			counted++
		}
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	if left := counted - len(out); left > 1 {
		t.Errorf("%d batches of one name count", left)
	}
}
