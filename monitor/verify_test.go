package monitor

import (
	"bytes"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	bolt "go.etcd.io/bbolt"

	"steelyard/monitor/daylog"
	"steelyard/rules"
	"steelyard/store"
)

// recorded is a state folder with a record in it: files, an alarm, an answer, a withdrawal, a day log, a feed file.
func recorded(t *testing.T) (state, dayLog, feedFile string) {
	t.Helper()
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	for i := range 8 {
		drop(t, cfg.Sources[0].Folder, string(rune('a'+i))+".csv", rows([]string{"L1", "L4"}[i%2], 12*i, 12, 33+float64(i%2)))
	}
	d.until("eight files are counted", func(s *Status) bool { return s.Sources[0].Counted == 8 })
	d.until("the feed is told", func(s *Status) bool { return s.Feeds[0].Waiting == 0 })
	if _, err := d.Acknowledge(1, "M. Ferreira", "as typed", "looked at the rig"); err != nil {
		t.Fatal(err)
	}
	log, markdown, _, err := d.WriteDayLog("")
	if err != nil || log.Checkpoint == "" {
		t.Fatal(err, log)
	}
	if _, err := d.Withdraw(Withdrawal{Batches: []uint64{3}, Reason: "the rig was out of calibration", By: "M. Ferreira", How: "as typed"}); err != nil {
		t.Fatal(err)
	}
	d.stop()
	return cfg.Site.State, markdown, cfg.Feeds[0].Path
}

// change makes a change in the file of a store.
func change(t *testing.T, state string, what func(tx *bolt.Tx) error) {
	t.Helper()
	db, err := bolt.Open(filepath.Join(state, "steelyard.db"), 0o600, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(db.Update(what), db.Close()); err != nil {
		t.Fatal(err)
	}
}

func copyFolder(t *testing.T, from string) string {
	t.Helper()
	to := filepath.Join(t.TempDir(), "copy")
	if err := os.CopyFS(to, os.DirFS(from)); err != nil {
		t.Fatal(err)
	}
	return to
}

func TestVerifyHolds(t *testing.T) {
	state, dayLog, feedFile := recorded(t)
	found, err := Verify(Verification{Folder: state, Against: []string{dayLog, feedFile, strings.TrimSuffix(dayLog, "md") + "json"}})
	if err != nil || found.Batches != 8 || found.Rows != 96 || found.Checkpoints < 3 || found.NotCompared != "" || found.Signed == 0 {
		t.Fatalf("%+v, %v", found, err)
	}
	// On another machine there is a copy of the store and the key, and nothing else.
	away := t.TempDir()
	text, err := os.ReadFile(filepath.Join(state, "steelyard.db"))
	if err == nil {
		err = os.WriteFile(filepath.Join(away, "steelyard.db"), text, 0o600)
	}
	if err == nil {
		err = os.WriteFile(filepath.Join(away, "key.pub"), []byte(found.Key+"\n"), 0o600)
	}
	if err != nil {
		t.Fatal(err)
	}
	found, err = Verify(Verification{Folder: away, Key: filepath.Join(away, "key.pub"), Against: []string{dayLog}})
	if err != nil || !found.KeyHandedIn || found.Signed != 0 {
		t.Fatalf("%+v, %v", found, err)
	}
}

// Whatever is changed in the store is found, and named.
func TestVerifyFindsChanges(t *testing.T) {
	state, dayLog, _ := recorded(t)
	bucket := func(tx *bolt.Tx, name string) *bolt.Bucket { return tx.Bucket([]byte(name)) }
	key := func(i byte) []byte { return []byte{0, 0, 0, 0, 0, 0, 0, i} }
	for name, c := range map[string]struct {
		what func(tx *bolt.Tx) error
		says string
	}{
		"a bit of a record": {func(tx *bolt.Tx) error {
			r := bytes.Clone(bucket(tx, "journal").Get(key(4)))
			r[len(r)/2] ^= 1
			return bucket(tx, "journal").Put(key(4), r)
		}, "record 4"},
		"a bit of a hash": {func(tx *bolt.Tx) error {
			h := bytes.Clone(bucket(tx, "tree").Get(key(5)))
			h[3] ^= 8
			return bucket(tx, "tree").Put(key(5), h)
		}, ""},
		"a piece of the state": {func(tx *bolt.Tx) error {
			p := bytes.Replace(bucket(tx, "state").Get([]byte("counters")), []byte("1"), []byte("2"), 1)
			return bucket(tx, "state").Put([]byte("counters"), p)
		}, "counters"},
		"a record is dropped": {func(tx *bolt.Tx) error {
			_ = bucket(tx, "tree").Delete(key(6))
			return bucket(tx, "journal").Delete(key(6))
		}, "record 6"},
		"two records change places": {func(tx *bolt.Tx) error {
			a, b := bytes.Clone(bucket(tx, "journal").Get(key(3))), bytes.Clone(bucket(tx, "journal").Get(key(5)))
			return errors.Join(bucket(tx, "journal").Put(key(3), b), bucket(tx, "journal").Put(key(5), a))
		}, "record 3"},
		"the last record is taken out, with its hashes": {func(tx *bolt.Tx) error {
			k, _ := bucket(tx, "journal").Cursor().Last()
			k = bytes.Clone(k)
			return errors.Join(bucket(tx, "journal").Delete(k), bucket(tx, "tree").Delete(k))
		}, "its end is missing"},
		"the last record is put twice": {func(tx *bolt.Tx) error {
			k, v := bucket(tx, "journal").Cursor().Last()
			return bucket(tx, "journal").Put(key(k[7]+1), bytes.Clone(v))
		}, ""},
	} {
		folder := copyFolder(t, state)
		change(t, folder, c.what)
		if _, err := Verify(Verification{Folder: folder, Against: []string{dayLog}}); !errors.Is(err, ErrNotVerified) || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%s: %v, want %q", name, err, c.says)
		}
	}
}

// A store is written anew as a whole, with one measured value changed, its own key and its own checkpoint: it holds by
// itself, and not beside any day log of the true one.
func TestVerifyFindsAJournalWrittenAnew(t *testing.T) {
	state, dayLog, feedFile := recorded(t)
	s, err := store.OpenToRead(state)
	if err != nil {
		t.Fatal(err)
	}
	forged := t.TempDir()
	f, err := store.Open(forged, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	engine := rules.NewState()
	engine.Consult(&history{store: f})
	err = s.Journal(0, s.Next(), func(e rules.Event, _ rules.Outcomes) error {
		if e.Batch != nil && e.Index == 4 {
			e.Batch.Series[0].Value[0] += 0.001
		}
		out, err := engine.Apply(&e)
		if err != nil {
			return err
		}
		pieces, err := engine.Pieces()
		if err != nil {
			return err
		}
		return f.Commit(store.Step{Entries: []store.Entry{{Event: e, Outcomes: out}}, Pieces: pieces})
	})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := f.Checkpoint(); err != nil {
		t.Fatal(err)
	}
	key := filepath.Join(t.TempDir(), "true.pub")
	if err := errors.Join(os.WriteFile(key, []byte(s.Verifying()), 0o600), s.Close(), f.Close()); err != nil {
		t.Fatal(err)
	}
	if found, err := Verify(Verification{Folder: forged}); err != nil || found.NotCompared == "" {
		t.Errorf("by itself: %+v, %v; it should hold, and say what was not compared", found, err)
	}
	for _, v := range []Verification{{Against: []string{dayLog}}, {Against: []string{feedFile}}, {Key: key}} {
		v.Folder = forged
		if _, err := Verify(v); !errors.Is(err, ErrNotVerified) {
			t.Errorf("against %v, key %q: %v", v.Against, v.Key, err)
		}
	}
}

// Outcomes that do not follow from the events are found, even where every hash is right.
func TestVerifyFindsFalseOutcomes(t *testing.T) {
	folder := t.TempDir()
	cfg := plant(t, twoLines)
	s, err := store.Open(folder, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	engine := rules.NewState()
	e := rules.Event{Adopted: &rules.Adopted{Plan: cfg.Plan, File: "config.toml", By: "test"}}
	out, err := engine.Apply(&e)
	if err != nil || len(out.Looks) == 0 {
		t.Fatal(out, err)
	}
	out.Looks[0].Withheld = "nobody looked"
	pieces, err := engine.Pieces()
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(s.Commit(store.Step{Entries: []store.Entry{{Event: e, Outcomes: out}}, Pieces: pieces}), s.Close()); err != nil {
		t.Fatal(err)
	}
	if _, err := Verify(Verification{Folder: folder}); !errors.Is(err, ErrNotVerified) || !strings.Contains(err.Error(), "nobody looked") {
		t.Errorf("%v", err)
	}
}

// Messages carry a checkpoint that covers the record they tell of; a backup made while the daemon runs verifies.
func TestCheckpointsLeaveTheMachine(t *testing.T) {
	cfg := plant(t, twoLines)
	d := start(t, cfg)
	for i := range 4 {
		drop(t, cfg.Sources[0].Folder, string(rune('a'+i))+".csv", rows([]string{"L1", "L4"}[i%2], 12*i, 12, 33+float64(i%2)))
	}
	d.until("an alarm is told", func(s *Status) bool { return s.Sources[0].Counted == 4 && s.Feeds[0].Waiting == 0 })
	told := messages(t, cfg.Feeds[0].Path)
	if len(told) == 0 || !signedText.MatchString(told[0].Checkpoint) {
		t.Fatalf("%+v", told)
	}
	remote := dial(cfg.Site.State)
	folder := filepath.Join(t.TempDir(), "backup")
	b, err := remote.Backup(folder)
	if err != nil || b.Records == 0 {
		t.Fatal(b, err)
	}
	if _, err := remote.Backup(folder); err == nil {
		t.Error("a backup went over another")
	}
	found, err := Verify(Verification{Folder: folder, Against: []string{cfg.Feeds[0].Path}})
	if err != nil || found.Batches != 4 || found.Signed == 0 {
		t.Errorf("%+v, %v", found, err)
	}
	if _, err := Verify(Verification{Folder: cfg.Site.State}); !errors.Is(err, store.ErrHeld) {
		t.Errorf("the store of a running daemon: %v", err)
	}
	if _, err := os.Stat(filepath.Join(folder, d.store.Origin()+".key")); err == nil {
		t.Error("the key to sign with is in the backup")
	}
	var log daylog.Log
	_, _, machine, err := d.WriteDayLog("")
	if err != nil {
		t.Fatal(err)
	}
	text, err := os.ReadFile(machine)
	if err != nil || json.Unmarshal(text, &log) != nil || !signedText.MatchString(log.Checkpoint) || log.Verifying != d.store.Verifying() {
		t.Errorf("day log: %v %q", err, log.Checkpoint)
	}
}
