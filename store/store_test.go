package store

import (
	"bytes"
	"encoding/binary"
	"errors"
	"os"
	"path/filepath"
	"testing"
	"time"

	bolterrors "go.etcd.io/bbolt/errors"

	"steelyard/rules"
)

func open(t testing.TB, folder string) *Store {
	t.Helper()
	s, err := Open(folder, Options{Wait: 50 * time.Millisecond})
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// step is a step with a batch of a content, a piece of state and a message.
func step(s *Store, content byte) Step {
	i := s.Next()
	e := rules.Event{Index: i, At: time.Unix(int64(1000+i), 0).UTC(), Batch: &rules.Batch{Source: "rig", File: string('a' + rune(content)),
		Rows: rules.Rows{Line: []int{2}}, Series: []rules.Series{{Process: "head.L1", Row: []int{0}, Value: []float64{float64(content)}}}}}
	return Step{
		Entries: []Entry{{Event: e, Outcomes: rules.Outcomes{Changes: []rules.Change{{Alarm: 1 + int(content%3), Step: 1}}}}},
		Pieces:  map[string][]byte{"process/head.L1": {content}},
		Files:   []FileMemory{{Source: "rig", File: e.Batch.File, Size: int64(content), SHA256: [32]byte{content}, Index: i, Counted: true, Batch: true}},
		Outbox:  []Message{{Feed: "leads", ID: e.Batch.File, Body: []byte("{}"), At: e.At}},
	}
}

// What was committed is there after a new start, whole and in order.
func TestCommitAndReopen(t *testing.T) {
	folder := filepath.Join(t.TempDir(), "state")
	s := open(t, folder)
	origin := s.Origin()
	for c := range byte(10) {
		if err := s.Commit(step(s, c)); err != nil {
			t.Fatal(err)
		}
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	s = open(t, folder)
	defer s.Close()
	if s.Recovered() != "" || s.Next() != 10 || s.Origin() != origin {
		t.Errorf("recovered %q, next %d, origin %s and %s", s.Recovered(), s.Next(), s.Origin(), origin)
	}
	n := uint64(0)
	err := s.Journal(2, 9, func(e rules.Event, _ rules.Outcomes) error {
		if e.Index != n+2 || e.Batch.Series[0].Value[0] != float64(n+2) {
			t.Errorf("record %d: %+v", n+2, e)
		}
		n++
		return nil
	})
	if err != nil || n != 7 {
		t.Errorf("%d records, %v", n, err)
	}
	pieces, err := s.Pieces()
	if err != nil || !bytes.Equal(pieces["process/head.L1"], []byte{9}) {
		t.Errorf("pieces %v, %v", pieces, err)
	}
	if i, source, file, found, err := s.Taken([32]byte{4}); err != nil || !found || i != 4 || source != "rig" || file != "e" {
		t.Errorf("content 4: %d %s %s %v %v", i, source, file, found, err)
	}
	if f, found, err := s.File("rig", "e"); err != nil || !found || f.Size != 4 || f.Index != 4 {
		t.Errorf("file e: %+v %v %v", f, found, err)
	}
	if records, err := s.AlarmRecords(2); err != nil || len(records) != 3 || records[1] != 4 {
		t.Errorf("alarm 2: %v %v", records, err)
	}
	if i, err := s.FirstAt(time.Unix(1003, 500)); err != nil || i != 4 {
		t.Errorf("first at: %d %v", i, err)
	}
	messages, all, err := s.Pending("leads", 3)
	if err != nil || len(messages) != 3 || all != 10 || messages[0].ID != "a" {
		t.Errorf("pending: %+v %d %v", messages, all, err)
	}
	if err := s.Delivered(messages); err != nil {
		t.Fatal(err)
	}
	if messages, all, err = s.Pending("leads", 1); err != nil || all != 7 || messages[0].ID != "d" {
		t.Errorf("pending: %+v %d %v", messages, all, err)
	}
}

func TestHeldByAnother(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder)
	defer s.Close()
	if _, err := Open(folder, Options{Wait: 50 * time.Millisecond}); !errors.Is(err, ErrHeld) {
		t.Errorf("a second opener: %v", err)
	}
}

// A store whose process was killed is checked, copied to a fresh file and goes on.
func TestRecovery(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder)
	for c := range byte(5) {
		if err := s.Commit(step(s, c)); err != nil {
			t.Fatal(err)
		}
	}
	alive := time.Unix(5000, 0)
	if err := s.Alive(alive); err != nil {
		t.Fatal(err)
	}
	if err := s.db.Close(); err != nil { // without Close: the stamp still says that it is open
		t.Fatal(err)
	}
	s = open(t, folder)
	defer s.Close()
	if s.Recovered() == "" || s.Next() != 5 {
		t.Errorf("recovered %q, next %d", s.Recovered(), s.Next())
	}
	if at, orderly := s.LastAlive(); orderly || !at.Equal(alive) {
		t.Errorf("the end before: %v, in order %v", at, orderly)
	}
}

// A damaged page is an error in words, not a panic.
func TestDamagedFile(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder)
	for c := range byte(50) {
		if err := s.Commit(step(s, c)); err != nil {
			t.Fatal(err)
		}
	}
	if err := s.db.Close(); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(folder, fileName)
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for i := 2 * 4096; i < len(text); i += 4096 {
		binary.LittleEndian.PutUint64(text[i:], 77)
	}
	if err := os.WriteFile(path, text, 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := Open(folder, Options{}); !errors.Is(err, ErrStorage) {
		t.Errorf("a damaged file: %v", err)
	}
}

// After the first storage error a store does nothing more, and says so each time.
func TestFirstErrorIsTheLast(t *testing.T) {
	s := open(t, t.TempDir())
	if err := s.db.Close(); err != nil {
		t.Fatal(err)
	}
	first := s.Commit(step(s, 1))
	if !errors.Is(first, ErrStorage) || !errors.Is(first, bolterrors.ErrDatabaseNotOpen) {
		t.Fatalf("%v", first)
	}
	if _, err := s.Pieces(); err != first {
		t.Errorf("afterwards: %v", err)
	}
}

func TestJournalGoesOnWithoutGaps(t *testing.T) {
	s := open(t, t.TempDir())
	defer s.Close()
	bad := step(s, 1)
	bad.Entries[0].Event.Index = 7
	if err := s.Commit(bad); err == nil || errors.Is(err, ErrStorage) {
		t.Errorf("a record out of order: %v", err)
	}
	if err := s.Commit(step(s, 1)); err != nil {
		t.Errorf("the refusal was taken for a storage error: %v", err)
	}
}
