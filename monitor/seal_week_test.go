package monitor

import (
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"steelyard/rules"
	"steelyard/store"
)

// A week of files: what is older than the last whole day goes into volumes, and day logs,
// explanations, withdrawals, the exhibit's proofs and verification say what they said before. With
// a volume gone, what needs it says so, and the rest goes on.
func TestSealedWeek(t *testing.T) {
	s := stand(t, twoLines)
	first := s.now
	for day := range 7 {
		s.now = first.AddDate(0, 0, day)
		for i := range 40 {
			mean := 33.0
			if i%2 == 1 && day == 2 && i > 20 {
				mean = 36
			}
			s.commit1(rules.Event{Batch: batchOf([]string{"head.L1", "head.L4"}[i%2], mean)})
		}
	}
	s.now = first.AddDate(0, 0, 7)
	said := func() (all []string) {
		t.Helper()
		tell := func(v any, err error) {
			t.Helper()
			text, jsonErr := json.Marshal(v)
			if err = errors.Join(err, jsonErr); err != nil {
				t.Fatal(err)
			}
			all = append(all, string(text))
		}
		for day := range 6 {
			log, err := s.DayLog(first.AddDate(0, 0, day).Format("2006-01-02"))
			if log != nil {
				log.Checkpoint = "" // it grows
			}
			tell(log, err)
		}
		x, err := s.Explain(1)
		tell(x, err)
		a, err := s.Withdraw(Withdrawal{Batches: []uint64{100}, Reason: "weights were off", By: "the engineer", How: "test", Try: true})
		if a != nil {
			a.Before = 0 // the journal grows by the notes of volumes
		}
		tell(a, err)
		return all
	}
	before := said()
	if err := s.Seal(t.Context(), s.now.AddDate(0, 0, -1), 64); err != nil {
		t.Fatal(err)
	}
	volumes := s.store.Volumes()
	if len(volumes) != 1 || volumes[0].To != 241 { // a plan, and 40 batches on each of six days
		t.Fatalf("%+v", volumes)
	}
	for i, text := range said() {
		if text != before[i] {
			t.Errorf("before: %s\nsealed: %s", before[i], text)
		}
	}
	log, err := s.DayLog("")
	if err != nil || !strings.Contains(strings.Join(log.Remarks, " "), volumes[0].SHA256) {
		t.Errorf("%v, %v", log.Remarks, err)
	}
	s.again()
	if _, err := s.Withdraw(Withdrawal{Batches: []uint64{100}, Reason: "weights were off", By: "the engineer", How: "test"}); err != nil {
		t.Fatal(err)
	}
	if err := s.Desk.Close(); err != nil {
		t.Fatal(err)
	}
	found, err := Verify(Verification{Folder: s.cfg.Site.State})
	if err != nil || found.Batches != 280 {
		t.Fatalf("%+v, %v", found, err)
	}
	gone := filepath.Join(s.cfg.Site.State, "volumes", volumes[0].File)
	if err := os.Rename(gone, gone+".away"); err != nil {
		t.Fatal(err)
	}
	if _, err := Verify(Verification{Folder: s.cfg.Site.State}); !errors.Is(err, ErrNotVerified) || !strings.Contains(err.Error(), volumes[0].File) {
		t.Errorf("%v", err)
	}
	s.open()
	if err := s.begin(); err != nil {
		t.Fatalf("it does not start: %v", err)
	}
	if _, err := s.DayLog(first.Format("2006-01-02")); !errors.Is(err, store.ErrVolume) {
		t.Errorf("a day in the volume that is gone: %v", err)
	}
	if _, err := s.Withdraw(Withdrawal{Batches: []uint64{101}, Reason: "weights were off", By: "the engineer", How: "test"}); !errors.Is(err, store.ErrVolume) {
		t.Errorf("a batch in the volume that is gone: %v", err)
	}
	s.commit1(rules.Event{Batch: batchOf("head.L1", 33)})
	if units := s.units("head.L1"); units <= 0 {
		t.Errorf("%v units", units)
	}
	if err := os.Rename(gone+".away", gone); err != nil {
		t.Fatal(err)
	}
	s.now = s.now.Add(time.Hour)
	if _, err := s.DayLog(first.Format("2006-01-02")); err != nil {
		t.Errorf("with the volume put back: %v", err)
	}
}
