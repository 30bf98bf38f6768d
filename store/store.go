// Package store keeps what happened and what is believed, in one bbolt file: the journal, the
// engine's state, what intake must remember, and the outbox. Commit writes one step of the
// program, all of it or none, in one transaction.
//
// Buckets, their keys and values. Numbers in keys are 8 bytes, big-endian, so that they sort;
// strings in composite keys end with a zero byte, which no source, feed or file name holds.
//
//	meta     "format"                 → "1": the version of this layout; another is refused
//	         "origin"                 → a random UUID, made with the store
//	journal  index                    → a record (record.go)
//	times    at (ns since 1970), index → nothing: the first record at or after a moment
//	alarms   alarm number, index      → nothing: the records that changed an alarm
//	state    name of a piece          → the piece, as the engine encoded it
//	files    source 0 file            → FileMemory as JSON
//	contents SHA-256                  → index of the batch that took it, source 0 file
//	outbox   feed 0 number            → Message as JSON
//
// A store belongs to one process at a time, and to one account: its folder and file are not
// readable by others. After the first storage error a Store does nothing more but give that
// error, because a commit that failed may still be in the file, and carrying on can damage
// it. A store that was not closed in order is checked and copied to a fresh file when it is
// opened next.
package store

import (
	"bytes"
	"crypto/rand"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

	bolt "go.etcd.io/bbolt"
	bolterrors "go.etcd.io/bbolt/errors"

	"steelyard/rules"
)

// ErrHeld is wrapped by Open where another process has the store.
var ErrHeld = errors.New("another process has the store")

// ErrStorage is wrapped by every error of the disk or the file. What was to be written is then
// unknown, not undone: it may be there.
var ErrStorage = errors.New("storage failed")

const (
	fileName = "steelyard.db"
	format   = "1"
)

var (
	metaBucket     = []byte("meta")
	journalBucket  = []byte("journal")
	timesBucket    = []byte("times")
	alarmsBucket   = []byte("alarms")
	stateBucket    = []byte("state")
	filesBucket    = []byte("files")
	contentsBucket = []byte("contents")
	outboxBucket   = []byte("outbox")
)

// Store is an open store. Commit must be called by one goroutine at a time; everything else
// may be called at any time.
type Store struct {
	folder    string
	db        *bolt.DB
	origin    string
	before    stamp // as it was found
	recovered string

	mu     sync.Mutex // guards what follows, for as long as it takes to read, set or stamp it
	stamp  stamp
	next   uint64
	failed error
}

// Options are how a store is opened; the zero value serves.
type Options struct {
	Wait time.Duration // for another process to let go of it; 1 s where 0
}

// Open opens the store in a folder, which it makes where there is none. The error wraps
// ErrHeld or ErrStorage, or says in a sentence what else is wrong.
func Open(folder string, o Options) (*Store, error) {
	if o.Wait == 0 {
		o.Wait = time.Second
	}
	if err := os.MkdirAll(folder, 0o700); err != nil {
		return nil, fmt.Errorf("%w: %w", ErrStorage, err)
	}
	if err := refuseNetwork(folder); err != nil {
		return nil, err
	}
	s := &Store{folder: folder}
	if err := s.open(o); err != nil {
		return nil, err
	}
	return s, nil
}

func (s *Store) open(o Options) (err error) {
	path := filepath.Join(s.folder, fileName)
	if s.db, err = openFile(path, o.Wait); err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, s.db.Close())
		}
	}()
	if err = s.readStamp(); err != nil {
		return err
	}
	if s.before.Open {
		if err = s.renew(path, o.Wait); err != nil {
			return err
		}
	}
	if err = s.guard("open", s.prepare); err != nil {
		return err
	}
	return s.restamp(func(st *stamp) { st.Open = true })
}

// openFile opens the bbolt file with the options that RELIABILITY of a record asks for: a
// synced freelist, a lock that is not waited for for ever, and room to grow without waiting
// for readers.
func openFile(path string, wait time.Duration) (*bolt.DB, error) {
	db, err := bolt.Open(path, 0o600, &bolt.Options{
		Timeout: wait, FreelistType: bolt.FreelistMapType, InitialMmapSize: initialMap,
	})
	switch {
	case errors.Is(err, bolterrors.ErrTimeout):
		return nil, fmt.Errorf("%w in %s; only one daemon can watch with one state folder", ErrHeld, filepath.Dir(path))
	case err != nil:
		return nil, fmt.Errorf("%w: open %s: %w", ErrStorage, path, err)
	}
	return db, nil
}

// prepare makes the buckets and reads what is needed at all times.
func (s *Store) prepare() error {
	err := s.db.Update(func(tx *bolt.Tx) error {
		for _, name := range [][]byte{metaBucket, journalBucket, timesBucket, alarmsBucket, stateBucket, filesBucket, contentsBucket, outboxBucket} {
			if _, err := tx.CreateBucketIfNotExists(name); err != nil {
				return err
			}
		}
		meta := tx.Bucket(metaBucket)
		if meta.Get([]byte("format")) == nil {
			if err := meta.Put([]byte("format"), []byte(format)); err != nil {
				return err
			}
			return meta.Put([]byte("origin"), []byte(newUUID()))
		}
		return nil
	})
	if err != nil {
		return err
	}
	return s.db.View(func(tx *bolt.Tx) error {
		meta := tx.Bucket(metaBucket)
		if f := string(meta.Get([]byte("format"))); f != format {
			return fmt.Errorf("the store in %s has format %q; this program reads %q", s.folder, f, format)
		}
		s.origin = string(meta.Get([]byte("origin")))
		if k, _ := tx.Bucket(journalBucket).Cursor().Last(); k != nil {
			s.next = binary.BigEndian.Uint64(k) + 1
		}
		return nil
	})
}

// newUUID is a random UUID (RFC 9562, version 4).
func newUUID() string {
	var b [16]byte
	_, _ = rand.Read(b[:]) // never fails (crypto/rand)
	b[6], b[8] = b[6]&0x0f|0x40, b[8]&0x3f|0x80
	return fmt.Sprintf("%x-%x-%x-%x-%x", b[:4], b[4:6], b[6:8], b[8:10], b[10:])
}

// Close closes the store in order.
func (s *Store) Close() error {
	err := s.db.Close()
	if s.failure() == nil && err == nil {
		return s.restamp(func(st *stamp) { st.Open = false })
	}
	return err
}

// Origin is a random UUID made with the store.
func (s *Store) Origin() string { return s.origin }

// Recovered says what was done because the store had not been closed in order; empty where
// nothing was.
func (s *Store) Recovered() string { return s.recovered }

// Next is the index that the next journal record will have.
func (s *Store) Next() uint64 {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.next
}

func (s *Store) failure() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.failed
}

// guard runs a use of the file. The first error or panic makes the store unusable: bbolt
// panics on a damaged page.
func (s *Store) guard(what string, use func() error) (err error) {
	if failed := s.failure(); failed != nil {
		return failed
	}
	defer func() {
		if p := recover(); p != nil {
			err = fmt.Errorf("the file is damaged: %v", p)
		}
		if err != nil {
			err = fmt.Errorf("%w: %s in %s: %w; nothing more is counted until the program is started again", ErrStorage, what, s.folder, err)
			s.mu.Lock()
			s.failed = err
			s.mu.Unlock()
		}
	}()
	return use()
}

// Entry is one event with what followed from it.
type Entry struct {
	Event    rules.Event
	Outcomes rules.Outcomes
}

// FileMemory is what intake must remember of one file.
type FileMemory struct {
	Source  string   `json:"source"`
	File    string   `json:"file"`
	Size    int64    `json:"size"`
	Written int64    `json:"written"` // modification time, ns since 1970
	SHA256  [32]byte `json:"sha256"`
	Index   uint64   `json:"index"`   // of the record that dealt with it
	Counted bool     `json:"counted"` // content that stood under this name is in a batch
	Batch   bool     `json:"-"`       // this step takes the content as a batch
}

// Message is one message in the outbox.
type Message struct {
	Feed   string    `json:"feed"`
	Number uint64    `json:"number"` // given by Commit; grows
	ID     string    `json:"id"`
	At     time.Time `json:"at"`
	Body   []byte    `json:"body"`
}

// Step is one step of the program.
type Step struct {
	Entries []Entry           // in order; the first has the index Next
	Pieces  map[string][]byte // of the state that changed; nil takes one away
	Files   []FileMemory
	Outbox  []Message
}

// Commit writes a step in one transaction and returns once it is on the disk.
func (s *Store) Commit(step Step) error {
	next := s.Next()
	for i := range step.Entries {
		if got := step.Entries[i].Event.Index; got != next+uint64(i) {
			return fmt.Errorf("the record %d can't be written: the journal goes on with %d", got, next+uint64(i))
		}
	}
	err := s.guard("commit", func() error {
		return s.db.Update(func(tx *bolt.Tx) error { return write(tx, &step) })
	})
	if err != nil {
		return err
	}
	s.mu.Lock()
	s.next = next + uint64(len(step.Entries))
	s.mu.Unlock()
	return nil
}

func write(tx *bolt.Tx, step *Step) error {
	for i := range step.Entries {
		if err := writeEntry(tx, &step.Entries[i]); err != nil {
			return err
		}
	}
	state := tx.Bucket(stateBucket)
	for name, piece := range step.Pieces {
		if piece == nil {
			if err := state.Delete([]byte(name)); err != nil {
				return err
			}
		} else if err := state.Put([]byte(name), piece); err != nil {
			return err
		}
	}
	for i := range step.Files {
		if err := writeFile(tx, &step.Files[i]); err != nil {
			return err
		}
	}
	outbox := tx.Bucket(outboxBucket)
	for _, m := range step.Outbox {
		n, err := outbox.NextSequence()
		if err != nil {
			return err
		}
		m.Number = n
		text, err := json.Marshal(m)
		if err != nil {
			return err
		}
		if err := outbox.Put(joined(m.Feed, number(n)), text); err != nil {
			return err
		}
	}
	return nil
}

func writeEntry(tx *bolt.Tx, e *Entry) error {
	record, err := encode(e)
	if err != nil {
		return err
	}
	index := number(e.Event.Index)
	if err := tx.Bucket(journalBucket).Put(index, record); err != nil {
		return err
	}
	if err := tx.Bucket(timesBucket).Put(append(number(uint64(e.Event.At.UnixNano())), index...), nil); err != nil {
		return err
	}
	for _, c := range e.Outcomes.Changes {
		if err := tx.Bucket(alarmsBucket).Put(append(number(uint64(c.Alarm)), index...), nil); err != nil {
			return err
		}
	}
	return nil
}

func writeFile(tx *bolt.Tx, f *FileMemory) error {
	text, err := json.Marshal(f)
	if err != nil {
		return err
	}
	key := joined(f.Source, []byte(f.File))
	if err := tx.Bucket(filesBucket).Put(key, text); err != nil {
		return err
	}
	contents := tx.Bucket(contentsBucket)
	if !f.Batch || contents.Get(f.SHA256[:]) != nil {
		return nil
	}
	return contents.Put(f.SHA256[:], append(number(f.Index), key...))
}

// number is a number as a key.
func number(n uint64) []byte { return binary.BigEndian.AppendUint64(nil, n) }

// joined is a composite key.
func joined(name string, rest []byte) []byte {
	return append(append([]byte(name), 0), rest...)
}

// Pieces are the pieces of the engine's state.
func (s *Store) Pieces() (map[string][]byte, error) {
	pieces := map[string][]byte{}
	err := s.view("read the state", func(tx *bolt.Tx) error {
		return tx.Bucket(stateBucket).ForEach(func(k, v []byte) error {
			pieces[string(k)] = bytes.Clone(v)
			return nil
		})
	})
	return pieces, err
}

func (s *Store) view(what string, read func(*bolt.Tx) error) error {
	return s.guard(what, func() error { return s.db.View(read) })
}

// readAtOnce is how many records one read transaction takes: a long one would keep old pages.
const readAtOnce = 256

// Journal gives the records from one index up to another, in order, to visit; its error ends
// the visit and is returned.
func (s *Store) Journal(from, to uint64, visit func(rules.Event, rules.Outcomes) error) error {
	for from < to {
		var some []Entry
		err := s.view("read the journal", func(tx *bolt.Tx) error {
			c := tx.Bucket(journalBucket).Cursor()
			for k, v := c.Seek(number(from)); k != nil && len(some) < readAtOnce; k, v = c.Next() {
				if binary.BigEndian.Uint64(k) >= to {
					break
				}
				e, err := decode(v)
				if err != nil {
					return fmt.Errorf("record %d: %w", binary.BigEndian.Uint64(k), err)
				}
				some = append(some, *e)
			}
			return nil
		})
		if err != nil || len(some) == 0 {
			return err
		}
		for i := range some {
			if err := visit(some[i].Event, some[i].Outcomes); err != nil {
				return err
			}
		}
		from = some[len(some)-1].Event.Index + 1
	}
	return nil
}

// FirstAt is the index of the first record taken at or after a moment; Next where there is
// none.
func (s *Store) FirstAt(t time.Time) (index uint64, err error) {
	index = s.Next()
	err = s.view("find a record", func(tx *bolt.Tx) error {
		k, _ := tx.Bucket(timesBucket).Cursor().Seek(number(uint64(max(t.UnixNano(), 0))))
		if k != nil {
			index = binary.BigEndian.Uint64(k[8:])
		}
		return nil
	})
	return index, err
}

// AlarmRecords are the indexes of the records that changed an alarm, in order.
func (s *Store) AlarmRecords(alarm int) (indexes []uint64, err error) {
	prefix := number(uint64(alarm))
	err = s.view("find an alarm", func(tx *bolt.Tx) error {
		c := tx.Bucket(alarmsBucket).Cursor()
		for k, _ := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, _ = c.Next() {
			indexes = append(indexes, binary.BigEndian.Uint64(k[8:]))
		}
		return nil
	})
	return indexes, err
}

// File is what is remembered of a file.
func (s *Store) File(source, file string) (f FileMemory, found bool, err error) {
	err = s.view("find a file", func(tx *bolt.Tx) error {
		text := tx.Bucket(filesBucket).Get(joined(source, []byte(file)))
		if text == nil {
			return nil
		}
		found = true
		return json.Unmarshal(text, &f)
	})
	return f, found, err
}

// Files gives everything that is remembered of the files of a source to visit.
func (s *Store) Files(source string, visit func(FileMemory)) error {
	prefix := joined(source, nil)
	return s.view("read what is known of files", func(tx *bolt.Tx) error {
		c := tx.Bucket(filesBucket).Cursor()
		for k, v := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, v = c.Next() {
			var f FileMemory
			if err := json.Unmarshal(v, &f); err != nil {
				return err
			}
			visit(f)
		}
		return nil
	})
}

// Taken says which batch took a content first, and from where.
func (s *Store) Taken(sha [32]byte) (index uint64, source, file string, found bool, err error) {
	err = s.view("find a content", func(tx *bolt.Tx) error {
		v := tx.Bucket(contentsBucket).Get(sha[:])
		if v == nil {
			return nil
		}
		found, index = true, binary.BigEndian.Uint64(v)
		source, file, _ = strings.Cut(string(v[8:]), "\x00")
		return nil
	})
	return index, source, file, found, err
}

// Pending are the oldest messages of a feed that are not delivered, at most most of them, and
// how many there are in all.
func (s *Store) Pending(feed string, most int) (messages []Message, all int, err error) {
	prefix := joined(feed, nil)
	err = s.view("read the outbox", func(tx *bolt.Tx) error {
		c := tx.Bucket(outboxBucket).Cursor()
		for k, v := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, v = c.Next() {
			if all++; all > most {
				continue
			}
			var m Message
			if err := json.Unmarshal(v, &m); err != nil {
				return err
			}
			messages = append(messages, m)
		}
		return nil
	})
	return messages, all, err
}

// Delivered takes messages out of the outbox.
func (s *Store) Delivered(messages []Message) error {
	return s.guard("note a delivery", func() error {
		return s.db.Update(func(tx *bolt.Tx) error {
			for _, m := range messages {
				if err := tx.Bucket(outboxBucket).Delete(joined(m.Feed, number(m.Number))); err != nil {
					return err
				}
			}
			return nil
		})
	})
}
