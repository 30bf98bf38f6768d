// Package store keeps what happened and what is believed, in one bbolt file: the journal, the
// engine's state, what intake must remember, and the outbox. Commit writes one step of the
// program, all of it or none, in one transaction.
//
// Buckets, their keys and values. Numbers in keys are 8 bytes, big-endian, so that they sort;
// strings in composite keys end with a zero byte, which no source, feed or file name holds.
//
//	meta     "format"                 → "5": the version of this layout; another is refused
//	         "origin"                 → a random UUID, made with the store or its new origin
//	         "signed"                 → size of the last checkpoint that Commit knew of
//	origins  number, from 0           → Origin as JSON
//	journal  index                    → a record (record.go)
//	tree     index                    → the hashes of the subtrees that the record completes, the
//	                                    leaf first, 32 bytes each (package ledger)
//	times    at (ns since 1970), index → nothing: the first record at or after a moment
//	alarms   alarm number, index      → nothing: the records that changed an alarm
//	state    name of a piece          → the piece, as the engine encoded it; a large one in a bucket
//	                                    of that name, under "piece" (pieces.go)
//	files    source 0 file            → FileMemory (files.go)
//	contents SHA-256                  → index of the batch that took it last, source 0 file
//	batches  source 0 file 0 index    → nothing: the records that counted a batch
//	held     index                    → how many of its rows wait for a decision (uvarint); 0
//	                                    where it is a file held whole (held.go)
//	outbox   feed 0 number            → Message as JSON
//	volumes  first record             → Volume as JSON: its records are in a file (volume.go), and no
//	                                    longer in the bucket journal
//
// Beside the store lie the stamp (stamp.go) and, named by the origin, the key that checkpoints
// are signed with and the last of them (sealing.go).
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
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"runtime/debug"
	"sync"
	"time"

	bolt "go.etcd.io/bbolt"
	bolterrors "go.etcd.io/bbolt/errors"

	"steelyard/rules"
	"steelyard/store/ledger"
)

// ErrHeld is wrapped by Open where another process has the store.
var ErrHeld = errors.New("another process has the store")

// ErrStorage is wrapped by every error of the disk or the file. What was to be written is then
// unknown, not undone: it may be there.
var ErrStorage = errors.New("storage failed")

const (
	fileName = "steelyard.db"
	format   = "5"
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
	treeBucket     = []byte("tree")
	originsBucket  = []byte("origins")
	batchesBucket  = []byte("batches")
	heldBucket     = []byte("held")

	buckets = [][]byte{metaBucket, journalBucket, timesBucket, alarmsBucket, stateBucket, filesBucket, contentsBucket, outboxBucket,
		treeBucket, originsBucket, batchesBucket, heldBucket}

	// What is put into these comes behind what is there, so that their pages need no room for more.
	growing = [][]byte{journalBucket, treeBucket, timesBucket}

	formatKey, originKey, signedKey = []byte("format"), []byte("origin"), []byte("signed")
)

// Store is an open store. Commit must be called by one goroutine at a time; everything else
// may be called at any time.
type Store struct {
	folder    string
	db        *bolt.DB
	origin    string
	before    stamp // as it was found
	recovered string
	sealing   sealing
	volumes   volumes
	bare      bool // without the tree: only a benchmark does so
	toRead    bool // nothing is to be written

	mu     sync.Mutex // guards what follows, for as long as it takes to read, set or stamp it
	stamp  stamp
	next   uint64
	failed error
}

// Options are how a store is opened; the zero value serves.
type Options struct {
	Wait time.Duration // for another process to let go of it; 1 s where 0

	// NewOrigin has the store go on under a new origin and key: the way on where Open refuses
	// with ErrNotAsSigned, or the key is lost.
	NewOrigin *NewOrigin
}

// Open opens the store in a folder, which it makes where there is none. The error wraps
// ErrHeld, ErrStorage or ErrNotAsSigned, or says in a sentence what else is wrong.
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
	old, err := os.Stat(path)
	existed := err == nil && old.Size() > 0
	if s.db, err = openFile(path, o.Wait); err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, s.db.Close())
		}
	}()
	if err = s.readStamp(existed); err != nil {
		return err
	}
	if s.before.Open {
		if err = s.renew(path, o.Wait); err != nil {
			return err
		}
	}
	found := format
	if err = s.guard("open", func() (err error) {
		found, err = s.prepare()
		return err
	}); err != nil {
		return err
	}
	if found != format {
		return fmt.Errorf("the store in %s has format %q and this program reads %q; use the program that wrote it", s.folder, found, format)
	}
	if err = s.readVolumes(); err != nil {
		return err
	}
	if err = s.openSealing(o.NewOrigin); err != nil {
		return err
	}
	return s.stampOpen()
}

// openFile opens the bbolt file: with a freelist that is synced, a lock that is not waited
// for for ever, and room to grow without waiting for readers. Who waited for the lock may
// have got that of a file that renew has replaced since: then it opens the new one.
func openFile(path string, wait time.Duration) (db *bolt.DB, err error) {
	defer func() {
		if p := recover(); p != nil {
			err = fmt.Errorf("%w: open %s: the file is damaged: %v", ErrStorage, path, p)
		}
	}()
	for {
		var locked *os.File
		db, err = bolt.Open(path, 0o600, &bolt.Options{
			Timeout: wait, FreelistType: bolt.FreelistMapType, InitialMmapSize: initialMap,
			OpenFile: func(name string, flag int, mode os.FileMode) (file *os.File, err error) {
				locked, err = os.OpenFile(name, flag, mode)
				return locked, err
			},
		})
		switch {
		case errors.Is(err, bolterrors.ErrTimeout):
			return nil, fmt.Errorf("%w in %s; only one daemon can watch with one state folder", ErrHeld, filepath.Dir(path))
		case err != nil:
			return nil, fmt.Errorf("%w: open %s: %w", ErrStorage, path, err)
		}
		mine, err := locked.Stat()
		if err != nil {
			return nil, errors.Join(fmt.Errorf("%w: %w", ErrStorage, err), db.Close())
		}
		if there, err := os.Stat(path); err == nil && os.SameFile(mine, there) {
			return db, nil
		}
		if err := db.Close(); err != nil {
			return nil, fmt.Errorf("%w: %w", ErrStorage, err)
		}
	}
}

// prepare makes the buckets of a new store, and reads what is needed at all times. A store of
// another format it leaves alone.
func (s *Store) prepare() (found string, err error) {
	err = s.db.Update(func(tx *bolt.Tx) error {
		if meta := tx.Bucket(metaBucket); meta != nil && meta.Get(formatKey) != nil {
			return nil
		}
		for _, name := range buckets {
			if _, err := tx.CreateBucketIfNotExists(name); err != nil {
				return err
			}
		}
		meta := tx.Bucket(metaBucket)
		if err := meta.Put(formatKey, []byte(format)); err != nil {
			return err
		}
		return meta.Put(originKey, []byte(newUUID()))
	})
	if err != nil {
		return "", err
	}
	return s.readMeta()
}

// readMeta reads what is needed at all times, where the format is that of this program.
func (s *Store) readMeta() (found string, err error) {
	err = s.db.View(func(tx *bolt.Tx) error {
		meta := tx.Bucket(metaBucket)
		if found = string(meta.Get(formatKey)); found != format {
			return nil
		}
		s.origin = string(meta.Get(originKey))
		if k, _ := tx.Bucket(journalBucket).Cursor().Last(); k != nil {
			s.next = binary.BigEndian.Uint64(k) + 1
		}
		return nil
	})
	return found, err
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
	if s.failure() == nil && err == nil && !s.toRead {
		return s.restamp(func(st *stamp) { st.Open = false })
	}
	return err
}

// Origin is a random UUID made with the store, or with its new origin.
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

// Failure is the first storage error, after which the store does nothing more; nil where there was none.
func (s *Store) Failure() error { return s.failure() }

func (s *Store) failure() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.failed
}

// guard runs a use of the file. The first error or panic makes the store unusable: bbolt
// panics on a damaged page, and reading the map of a file that somebody cut short faults,
// which ends the program unless it is told to panic.
func (s *Store) guard(what string, use func() error) (err error) {
	if failed := s.failure(); failed != nil {
		return failed
	}
	defer debug.SetPanicOnFault(debug.SetPanicOnFault(true))
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

// Step is one step of the program.
type Step struct {
	Entries []Entry           // in order; the first has the index Next
	Pieces  map[string][]byte // of the state that changed; nil takes one away
	Files   []FileMemory
	Outbox  []Message
	Sealed  *Volume // WriteVolume has written it: its records leave the bbolt file
}

// Commit writes a step in one transaction and returns once it is on the disk.
func (s *Store) Commit(step Step) error {
	next := s.Next()
	for i := range step.Entries {
		if got := step.Entries[i].Event.Index; got != next+uint64(i) {
			return fmt.Errorf("the record %d can't be written: the journal goes on with %d", got, next+uint64(i))
		}
	}
	if step.Sealed != nil {
		// Before its records leave the bbolt file, so that a reader finds them here or there.
		s.volumes.mu.Lock()
		s.volumes.list = append(s.volumes.list, *step.Sealed)
		s.volumes.mu.Unlock()
	}
	err := s.guard("commit", func() error {
		return s.db.Update(func(tx *bolt.Tx) error { return s.write(tx, &step) })
	})
	if err != nil {
		return err
	}
	s.mu.Lock()
	s.next = next + uint64(len(step.Entries))
	s.mu.Unlock()
	return nil
}

func (s *Store) write(tx *bolt.Tx, step *Step) error {
	for i := range step.Entries {
		if err := s.writeEntry(tx, &step.Entries[i]); err != nil {
			return err
		}
	}
	if err := s.noteSigned(tx); err != nil {
		return err
	}
	if step.Sealed != nil {
		if err := s.seal(tx, step.Sealed); err != nil {
			return err
		}
	}
	for name, piece := range step.Pieces {
		if err := putPiece(tx, []byte(name), piece); err != nil {
			return err
		}
	}
	for i := range step.Files {
		if err := writeFile(tx, &step.Files[i]); err != nil {
			return err
		}
	}
	for _, m := range step.Outbox {
		if err := writeMessage(tx, m); err != nil {
			return err
		}
	}
	return nil
}

func (s *Store) writeEntry(tx *bolt.Tx, e *Entry) error {
	record, err := encode(e)
	if err != nil {
		return err
	}
	index := number(e.Event.Index)
	for _, name := range growing {
		tx.Bucket(name).FillPercent = 0.95
	}
	if err := tx.Bucket(journalBucket).Put(index, record); err != nil {
		return err
	}
	if !s.bare {
		hashes, err := ledger.Grow(e.Event.Index, record, kept(tx))
		if err == nil {
			err = tx.Bucket(treeBucket).Put(index, hashes)
		}
		if err != nil {
			return err
		}
	}
	if err := tx.Bucket(timesBucket).Put(append(number(uint64(e.Event.At.UnixNano())), index...), nil); err != nil {
		return err
	}
	if err := errors.Join(noteBatch(tx, e), noteHeld(tx, &e.Event)); err != nil {
		return err
	}
	for _, c := range e.Outcomes.Changes {
		if err := tx.Bucket(alarmsBucket).Put(append(number(uint64(c.Alarm)), index...), nil); err != nil {
			return err
		}
	}
	return nil
}

// number is a number as a key.
func number(n uint64) []byte { return binary.BigEndian.AppendUint64(nil, n) }

// joined is a composite key.
func joined(name string, rest []byte) []byte {
	return append(append([]byte(name), 0), rest...)
}

func (s *Store) view(what string, read func(*bolt.Tx) error) error {
	return s.guard(what, func() error { return s.db.View(read) })
}

// What one read transaction takes at most, but for one record: a long one would keep old pages.
const (
	recordsAtOnce = 256
	bytesAtOnce   = 4 << 20
)

// Journal gives the records from one index up to another, in order, to visit; its error ends
// the visit and is returned.
func (s *Store) Journal(from, to uint64, visit func(rules.Event, rules.Outcomes) error) error {
	return s.Records(from, to, func(index uint64, record []byte) error {
		var e *Entry
		err := s.guard("read the journal", func() (err error) {
			if e, err = decode(record); err == nil && e.Event.Index != index {
				err = fmt.Errorf("it says that it is record %d", e.Event.Index)
			}
			if err != nil {
				return fmt.Errorf("record %d: %w", index, err)
			}
			return nil
		})
		if err != nil {
			return err
		}
		return visit(e.Event, e.Outcomes)
	})
}

// Records gives the bytes of the records from one index up to another, in order, to visit,
// which may keep them but not change them; its error ends the visit and is returned. A record that is missing is
// a storage error.
func (s *Store) Records(from, to uint64, visit func(index uint64, record []byte) error) error {
	for to = min(to, s.Next()); from < to; {
		some, in, err := s.some(from, to)
		if err == nil && in != nil {
			err = s.areAsHashed(in, from, some)
		}
		if err != nil {
			return err
		}
		for _, record := range some {
			if err := visit(from, record); err != nil {
				return err
			}
			from++
		}
	}
	return nil
}

// some gives the first records of a range, one at least, from the bbolt file or from a volume, which it
// names.
func (s *Store) some(from, to uint64) (some [][]byte, in *Volume, err error) {
	if v, ok := s.volumeOf(from); ok {
		some, err = s.inVolume(v, from)
		return some[:min(uint64(len(some)), to-from)], &v, err
	}
	err = s.view("read the journal", func(tx *bolt.Tx) (err error) {
		if _, moved := s.volumeOf(from); !moved {
			some, err = readRecords(tx, from, to)
		}
		return err
	})
	if err == nil && some == nil {
		return s.some(from, to) // it was moved meanwhile
	}
	return some, nil, err
}

// readRecords copies the first records of a range, one at least.
func readRecords(tx *bolt.Tx, from, to uint64) (some [][]byte, err error) {
	c, size := tx.Bucket(journalBucket).Cursor(), 0
	k, v := c.Seek(number(from))
	for ; from < to && len(some) < recordsAtOnce && size < bytesAtOnce; from++ {
		if k == nil || binary.BigEndian.Uint64(k) != from {
			return nil, fmt.Errorf("record %d is missing", from)
		}
		some, size = append(some, bytes.Clone(v)), size+len(v)
		k, v = c.Next()
	}
	return some, nil
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
