package monitor

import (
	"errors"
	"os"
	"path/filepath"
	"testing"
	"time"

	"steelyard/store"
)

// A running daemon moves its records into volumes: what was, is explained and verified as before, also from a backup; and
// a volume that is gone is named, and counting goes on.
func TestSealedWhileRunning(t *testing.T) {
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	for i := range 8 {
		drop(t, cfg.Sources[0].Folder, string(rune('a'+i))+".csv", rows([]string{"L1", "L4"}[i%2], 12*i, 12, 33+float64(i%2)))
	}
	d.until("eight files are counted", func(s *Status) bool { return s.Sources[0].Counted == 8 })
	before, err := d.Explain(1)
	if err != nil {
		t.Fatal(err)
	}
	if err := d.Seal(t.Context(), time.Now(), 1); err != nil {
		t.Fatal(err)
	}
	list := d.store.Volumes()
	if len(list) != 1 || list[0].To < 9 {
		t.Fatalf("%+v", list)
	}
	if err := d.Seal(t.Context(), time.Now(), 100); err != nil || len(d.store.Volumes()) != 1 {
		t.Errorf("too few for a volume: %v", err)
	}
	after, err := d.Explain(1)
	if err != nil || asText(t, before) != asText(t, after) {
		t.Errorf("explained before: %s\nand after: %s, %v", asText(t, before), asText(t, after), err)
	}
	replayed(t, d.Desk)
	backup := filepath.Join(t.TempDir(), "backup")
	if _, err := d.Backup(backup); err != nil {
		t.Fatal(err)
	}
	if found, err := Verify(Verification{Folder: backup, Against: []string{cfg.Feeds[0].Path}}); err != nil || found.Batches != 8 {
		t.Errorf("%+v, %v", found, err)
	}
	d.stop()
	if err := os.Remove(filepath.Join(cfg.Site.State, "volumes", list[0].File)); err != nil {
		t.Fatal(err)
	}
	d = start(t, cfg)
	drop(t, cfg.Sources[0].Folder, "later.csv", rows("L1", 500, 12, 33))
	d.until("a file is counted without the volume", func(s *Status) bool { return s.Sources[0].Counted == 1 })
	if _, err := d.Explain(1); !errors.Is(err, store.ErrVolume) {
		t.Errorf("%v", err)
	}
	d.stop()
	if _, err := Verify(Verification{Folder: cfg.Site.State}); !errors.Is(err, ErrNotVerified) {
		t.Errorf("%v", err)
	}
}
