package store

import (
	"bytes"
	"encoding/binary"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	bolt "go.etcd.io/bbolt"
	bolterrors "go.etcd.io/bbolt/errors"
	"pgregory.net/rapid"

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

// A store of another format is refused in words, and nothing is written to it.
func TestOtherFormat(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder)
	err := s.db.Update(func(tx *bolt.Tx) error {
		if err := tx.DeleteBucket(outboxBucket); err != nil {
			return err
		}
		return tx.Bucket(metaBucket).Put(formatKey, []byte("99"))
	})
	if err = errors.Join(err, s.Close()); err != nil {
		t.Fatal(err)
	}
	_, err = Open(folder, Options{})
	if err == nil || errors.Is(err, ErrStorage) || !strings.Contains(err.Error(), `"99"`) {
		t.Errorf("%v", err)
	}
	db, err := bolt.Open(filepath.Join(folder, fileName), 0o600, nil)
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	err = db.View(func(tx *bolt.Tx) error {
		if tx.Bucket(outboxBucket) != nil {
			return errors.New("a bucket was made in it")
		}
		return nil
	})
	if err != nil {
		t.Error(err)
	}
}

// A store whose stamp is gone can't be known to have been closed in order; one that is new
// needs none.
func TestStampGone(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder)
	if s.Recovered() != "" {
		t.Errorf("a new store: %s", s.Recovered())
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if err := os.Remove(filepath.Join(folder, stampName)); err != nil {
		t.Fatal(err)
	}
	s = open(t, folder)
	defer s.Close()
	if s.Recovered() == "" {
		t.Error("the store was taken for one closed in order")
	}
}

// Whoever waits for the store while it is renewed gets the new file, not the lock of the old
// one, whose content nobody would see.
func TestWaitingWhileRenewed(t *testing.T) {
	folder := t.TempDir()
	path := filepath.Join(folder, fileName)
	s := open(t, folder)
	waited := make(chan error)
	go func() {
		second, err := Open(folder, Options{Wait: 10 * time.Second})
		if err == nil {
			err = errors.Join(second.Commit(step(second, 1)), second.Close())
		}
		waited <- err
	}()
	time.Sleep(100 * time.Millisecond) // the second waits for the lock by now
	if err := copyTo(s.db, path+".fresh"); err != nil {
		t.Fatal(err)
	}
	if err := os.Rename(path+".fresh", path); err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if err := <-waited; err != nil {
		t.Fatal(err)
	}
	s = open(t, folder)
	defer s.Close()
	if s.Next() != 1 {
		t.Errorf("%d records: what the second committed is gone", s.Next())
	}
}

// A file's name that is not UTF-8 comes back byte for byte.
func TestNameNotUTF8(t *testing.T) {
	s := open(t, t.TempDir())
	defer s.Close()
	st := step(s, 1)
	st.Files[0].File = "caf\xe9.csv"
	st.Files[0].Progress = []byte{0, 1, 0xff}
	if err := s.Commit(st); err != nil {
		t.Fatal(err)
	}
	err := s.Files("rig", func(f FileMemory) {
		if f.File != st.Files[0].File || !bytes.Equal(f.Progress, st.Files[0].Progress) {
			t.Errorf("%q, %x", f.File, f.Progress)
		}
	})
	if err != nil {
		t.Error(err)
	}
}

// model is what a store must hold, kept in maps.
type model struct {
	records []byte // the content that each took
	pieces  map[string]string
	pending []string
}

// Any sequence of commits, deliveries and starts, in order or not, leaves what it says.
func TestAgainstMaps(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		folder, err := os.MkdirTemp(memoryDisk(), "store")
		if err != nil {
			t.Fatal(err)
		}
		defer os.RemoveAll(folder)
		s, err := Open(folder, Options{})
		if err != nil {
			t.Fatal(err)
		}
		defer func() { s.Close() }()
		m := model{pieces: map[string]string{}}
		t.Repeat(map[string]func(*rapid.T){
			"commit": func(t *rapid.T) {
				st := m.step(t, s)
				if err := s.Commit(st); err != nil {
					t.Fatal(err)
				}
			},
			"deliver": func(t *rapid.T) {
				most := rapid.IntRange(0, 3).Draw(t, "most")
				messages, all, err := s.Pending("leads", most)
				if err != nil || all != len(m.pending) || len(messages) != min(most, all) {
					t.Fatalf("%d of %d pending, %v; want %d", len(messages), all, err, len(m.pending))
				}
				if err := s.Delivered(messages); err != nil {
					t.Fatal(err)
				}
				m.pending = m.pending[len(messages):]
			},
			"start again": func(t *rapid.T) {
				inOrder := rapid.Bool().Draw(t, "in order")
				end := s.Close
				if !inOrder {
					end = s.db.Close
				}
				if err := end(); err != nil {
					t.Fatal(err)
				}
				if s, err = Open(folder, Options{}); err != nil {
					t.Fatal(err)
				}
				if (s.Recovered() == "") != inOrder {
					t.Fatalf("in order %v, %q", inOrder, s.Recovered())
				}
			},
			"": func(t *rapid.T) { m.check(t, s) },
		})
	})
}

// memoryDisk is where files needn't wait for a disk, which is not what the model tests; empty,
// for the usual place, where there is none.
func memoryDisk() string {
	if info, err := os.Stat("/dev/shm"); err == nil && info.IsDir() {
		return "/dev/shm"
	}
	return ""
}

func (m *model) step(t *rapid.T, s *Store) (st Step) {
	st.Pieces = map[string][]byte{}
	for range rapid.IntRange(0, 3).Draw(t, "entries") {
		one := step(s, rapid.ByteRange(0, 20).Draw(t, "content"))
		e := &one.Entries[0].Event
		e.Index = uint64(len(m.records))
		e.At = time.Unix(int64(1000+e.Index), 0)
		one.Files[0].Index = e.Index
		m.records = append(m.records, byte(one.Files[0].Size))
		m.pending = append(m.pending, one.Outbox[0].ID)
		st.Entries, st.Files, st.Outbox = append(st.Entries, one.Entries...), append(st.Files, one.Files...), append(st.Outbox, one.Outbox...)
	}
	for _, name := range rapid.SliceOfNDistinct(rapid.SampledFrom([]string{"a", "b", "c"}), 0, 3, rapid.ID).Draw(t, "pieces") {
		if piece := rapid.String().Draw(t, "piece"); piece == "" {
			st.Pieces[name] = nil
			delete(m.pieces, name)
		} else {
			if rapid.Bool().Draw(t, "large") {
				piece = strings.Repeat(piece, 1+largePiece/len(piece))
			}
			st.Pieces[name], m.pieces[name] = []byte(piece), piece
		}
	}
	return st
}

func (m *model) check(t *rapid.T, s *Store) {
	if s.Next() != uint64(len(m.records)) {
		t.Fatalf("next is %d after %d records", s.Next(), len(m.records))
	}
	last := map[byte]uint64{}
	err := s.Journal(0, s.Next(), func(e rules.Event, _ rules.Outcomes) error {
		content := m.records[e.Index]
		if e.Batch.Series[0].Value[0] != float64(content) {
			t.Fatalf("record %d: %+v", e.Index, e.Batch)
		}
		last[content] = e.Index
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	for content := range byte(20) {
		want, known := last[content]
		if i, _, _, found, err := s.Taken([32]byte{content}); err != nil || found != known || i != want {
			t.Fatalf("content %d: %d %v %v, want %d %v", content, i, found, err, want, known)
		}
	}
	pieces, err := s.Pieces()
	if err != nil || len(pieces) != len(m.pieces) {
		t.Fatalf("%v %v, want %v", pieces, err, m.pieces)
	}
	for name, piece := range pieces {
		if m.pieces[name] != string(piece) {
			t.Fatalf("piece %s: %q, want %q", name, piece, m.pieces[name])
		}
	}
}
