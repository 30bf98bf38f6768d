package store

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

	bolt "go.etcd.io/bbolt"

	"steelyard/store/ledger"
)

// ErrNotAsSigned is wrapped where the journal is not what was signed: it was changed, or an
// older copy stands in its place.
var ErrNotAsSigned = errors.New("the journal is not what was signed")

// Beside the store lie, for each origin, the key to sign with (readable by its account only)
// and the last checkpoint that was signed. They are not in the store, so that an older copy of
// it, or another store, is noticed.
const (
	keySuffix        = ".key"
	checkpointSuffix = ".checkpoint"
)

// sealing is what signs checkpoints.
type sealing struct {
	key       string // to sign with
	verifying string

	mu    sync.Mutex // held for one checkpoint: counted, checked, signed and on the disk
	last  ledger.Checkpoint
	text  []byte // last, signed; nil where nothing has been signed
	noted uint64 // the size of last as the store knows it; only Commit uses it
}

// NewOrigin is why a store goes on under a new origin: one that was restored from a copy, or
// lost its key, must, because it can't promise to have everything that was signed.
type NewOrigin struct {
	Why string    `json:"why"`
	By  string    `json:"by"`
	At  time.Time `json:"at"`
}

// Origin is a stretch of the journal under one origin and key.
type Origin struct {
	ID        string    `json:"id"`        // UUID
	Verifying string    `json:"verifying"` // the key to verify its checkpoints with
	From      uint64    `json:"from"`      // the records before are those of the origins before
	Because   NewOrigin `json:"because,omitzero"`
}

// openSealing finds the key and the last checkpoint of the store's origin, and refuses a
// journal that is not what was signed.
func (s *Store) openSealing(anew *NewOrigin) error {
	origins, err := s.Origins()
	if err != nil {
		return err
	}
	if len(origins) == 0 || anew != nil {
		return s.beginOrigin(origins, anew)
	}
	origin := origins[len(origins)-1]
	s.origin, s.sealing.verifying = origin.ID, origin.Verifying
	if err := s.readKey(); err != nil {
		return err
	}
	return s.readCheckpoint()
}

// wayOn ends the sentence of a refusal.
const wayOn = "find out why; then put the right files back, or go on under a new origin (run --new-origin WHY), which is noted in the store for good"

// beginOrigin makes a key, and notes the origin with it. The first origin of a store is the
// UUID it was made with. The key is on the disk before the store tells of it: a stop between
// them leaves a key that the next start of the first origin takes, and that of a later one
// leaves alone.
func (s *Store) beginOrigin(before []Origin, anew *NewOrigin) error {
	next := Origin{ID: s.origin, From: s.Next()}
	if len(before) == 0 && s.Next() > 0 && anew == nil {
		return fmt.Errorf("%w: the store in %s has %d records and names no key; %s", ErrNotAsSigned, s.folder, s.Next(), wayOn)
	}
	if anew != nil && s.Next() > 0 {
		next.ID = newUUID()
	}
	if anew != nil {
		next.Because = *anew
	}
	s.origin = next.ID
	err := s.readKey()
	if errors.Is(err, fs.ErrNotExist) {
		err = s.makeKey()
	}
	if err != nil {
		return err
	}
	s.sealing.noted = 0
	next.Verifying = s.sealing.verifying
	text, err := json.Marshal(next)
	if err != nil {
		return err
	}
	return s.guard("note an origin", func() error {
		return s.db.Update(func(tx *bolt.Tx) error {
			meta := tx.Bucket(metaBucket)
			return errors.Join(
				meta.Put(originKey, []byte(next.ID)),
				meta.Put(signedKey, number(0)),
				tx.Bucket(originsBucket).Put(number(uint64(len(before))), text),
				s.plant(tx),
			)
		})
	})
}

// plant makes the tree of the records as they are: a new origin promises what is there. Of a volume
// that can't be read it promises the hashes that were kept of its records.
func (s *Store) plant(tx *bolt.Tx) error {
	tree := tx.Bucket(treeBucket)
	var count ledger.Recount
	for count.Size() < s.sealedTo() {
		v, _ := s.volumeOf(count.Size())
		records, err := s.inVolume(v, count.Size())
		if err != nil {
			if err = plantLeaves(tree, &count, v.To, err); err != nil {
				return err
			}
		}
		for _, record := range records {
			if err := tree.Put(number(count.Size()), count.Add(record)); err != nil {
				return err
			}
		}
	}
	if err := tx.Bucket(journalBucket).ForEach(func(index, record []byte) error {
		if binary.BigEndian.Uint64(index) != count.Size() {
			return fmt.Errorf("record %d is missing", count.Size())
		}
		return tree.Put(index, count.Add(record))
	}); err != nil {
		return err
	}
	c := tree.Cursor()
	for k, _ := c.Seek(number(count.Size())); k != nil; k, _ = c.Seek(number(count.Size())) {
		if err := c.Delete(); err != nil {
			return err
		}
	}
	return nil
}

// plantLeaves counts on from the hashes that were kept of records; why is why the records are not there.
func plantLeaves(tree *bolt.Bucket, count *ledger.Recount, to uint64, why error) error {
	for count.Size() < to {
		key := number(count.Size())
		kept := tree.Get(key)
		if len(kept) < ledger.HashSize {
			return fmt.Errorf("record %d and its hash are missing: %w", count.Size(), why)
		}
		if err := tree.Put(key, count.AddLeaf(ledger.Hash(kept[:ledger.HashSize]))); err != nil {
			return err
		}
	}
	return nil
}

func (s *Store) beside(suffix string) string { return filepath.Join(s.folder, s.origin+suffix) }

func (s *Store) makeKey() (err error) {
	line := ledger.OriginOf(s.origin)
	if s.sealing.key, s.sealing.verifying, err = ledger.NewKey(line); err != nil {
		return err
	}
	if err := writeWhole(s.beside(keySuffix), []byte(s.sealing.key+"\n")); err != nil {
		return fmt.Errorf("%w: write the key of the journal: %w", ErrStorage, err)
	}
	return s.publish()
}

func (s *Store) readKey() error {
	path := s.beside(keySuffix)
	text, err := os.ReadFile(path)
	if err != nil {
		return fmt.Errorf("the key that the journal in %s is signed with can't be read; %s: %w", s.folder, wayOn, err)
	}
	key := strings.TrimSpace(string(text))
	verifying, err := ledger.Verifying(key)
	if err != nil {
		return fmt.Errorf("the key in %s is damaged; %s: %w", path, wayOn, err)
	}
	if !strings.HasPrefix(verifying, ledger.OriginOf(s.origin)+"+") || s.sealing.verifying != "" && s.sealing.verifying != verifying {
		return fmt.Errorf("the key in %s is not that of this store; %s", path, wayOn)
	}
	s.sealing.key, s.sealing.verifying = key, verifying
	return s.publish()
}

// publish puts the key to verify with beside the store, where it is not yet.
func (s *Store) publish() error {
	path := s.beside(publicSuffix)
	if _, err := os.Stat(path); err == nil {
		return nil
	}
	if err := writeWhole(path, []byte(s.sealing.verifying+"\n")); err != nil {
		return fmt.Errorf("%w: write the key to verify with: %w", ErrStorage, err)
	}
	return nil
}

// readCheckpoint reads the checkpoint signed last and compares the journal with it.
func (s *Store) readCheckpoint() error {
	if err := s.view("read what was signed", func(tx *bolt.Tx) error {
		if b := tx.Bucket(metaBucket).Get(signedKey); len(b) == 8 {
			s.sealing.noted = binary.BigEndian.Uint64(b)
		}
		return nil
	}); err != nil {
		return err
	}
	path := s.beside(checkpointSuffix)
	text, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) && s.sealing.noted == 0 {
		return nil
	}
	if errors.Is(err, fs.ErrNotExist) {
		return fmt.Errorf("%w: a checkpoint of %d records was signed, and the file %s that holds the last is gone; %s",
			ErrNotAsSigned, s.sealing.noted, path, wayOn)
	}
	if err != nil {
		return fmt.Errorf("%w: %w", ErrStorage, err)
	}
	c, err := ledger.Open(text, s.sealing.verifying)
	if err != nil {
		return fmt.Errorf("%w: %s: %w; %s", ErrNotAsSigned, path, err, wayOn)
	}
	if c.Size > s.Next() {
		return fmt.Errorf("%w: the store in %s has %d records, and a checkpoint of %d was signed: an older copy was put in its place; %s",
			ErrNotAsSigned, s.folder, s.Next(), c.Size, wayOn)
	}
	if c.Size < s.sealing.noted {
		return fmt.Errorf("%w: a checkpoint of %d records was signed, and that in %s is an older one, of %d; %s",
			ErrNotAsSigned, s.sealing.noted, path, c.Size, wayOn)
	}
	root, err := s.root(c.Size)
	if err != nil {
		return err
	}
	if root != c.Root {
		return fmt.Errorf("%w: the first %d records in %s are not those that were signed; %s", ErrNotAsSigned, c.Size, s.folder, wayOn)
	}
	s.sealing.last, s.sealing.text = c, text
	return nil
}

// kept gives the hashes in the tree bucket.
func kept(tx *bolt.Tx) ledger.Kept {
	tree := tx.Bucket(treeBucket)
	return func(record uint64) ([]byte, error) {
		if b := tree.Get(number(record)); b != nil {
			return b, nil
		}
		return nil, fmt.Errorf("the hashes of record %d are missing", record)
	}
}

func (s *Store) root(size uint64) (root ledger.Hash, err error) {
	err = s.view("count the journal", func(tx *bolt.Tx) (err error) {
		root, err = ledger.Root(size, kept(tx))
		return err
	})
	return root, err
}

// Verifying is the key to verify checkpoints and proofs of the store's origin with.
func (s *Store) Verifying() string { return s.sealing.verifying }

// Origins are the origins that the store has had, the present one last.
func (s *Store) Origins() (all []Origin, err error) {
	err = s.view("read the origins", func(tx *bolt.Tx) error {
		return tx.Bucket(originsBucket).ForEach(func(_, text []byte) error {
			var o Origin
			if err := json.Unmarshal(text, &o); err != nil {
				return err
			}
			all = append(all, o)
			return nil
		})
	})
	return all, err
}

// Checkpoint is a signed checkpoint of all that is committed. Before it is signed, the
// journal is shown to begin with what was signed last; before it is returned, it is on the
// disk beside the store. Where the journal does not, the error wraps ErrNotAsSigned, and the
// store does nothing more.
func (s *Store) Checkpoint() ([]byte, error) {
	s.sealing.mu.Lock()
	defer s.sealing.mu.Unlock()
	size := s.Next()
	if s.sealing.text != nil && s.sealing.last.Size == size {
		return bytes.Clone(s.sealing.text), nil
	}
	c := ledger.Checkpoint{Origin: ledger.OriginOf(s.origin), Size: size}
	err := s.guard("sign a checkpoint", func() error {
		if err := s.db.View(func(tx *bolt.Tx) error { return s.countOn(&c, kept(tx)) }); err != nil {
			return err
		}
		text, err := ledger.Sign(c, s.sealing.key)
		if err == nil {
			err = writeWhole(s.beside(checkpointSuffix), text)
		}
		if err != nil {
			return err
		}
		s.mu.Lock() // Commit reads last
		s.sealing.last, s.sealing.text = c, text
		s.mu.Unlock()
		return nil
	})
	return bytes.Clone(s.sealing.text), err
}

// countOn counts the root of a checkpoint, and checks that it extends the last.
func (s *Store) countOn(c *ledger.Checkpoint, tree ledger.Kept) (err error) {
	if c.Root, err = ledger.Root(c.Size, tree); err != nil {
		return err
	}
	if s.sealing.last.Size == 0 {
		return nil
	}
	proof, err := ledger.ProveExtends(s.sealing.last.Size, c.Size, tree)
	if err != nil {
		return err
	}
	if err := ledger.CheckExtends(s.sealing.last, *c, proof); err != nil {
		return fmt.Errorf("%w: %w", ErrNotAsSigned, err)
	}
	return nil
}

// noteSigned notes in the step's transaction what was signed last, so that its file can't be
// lost unnoticed.
func (s *Store) noteSigned(tx *bolt.Tx) error {
	s.mu.Lock()
	size := s.sealing.last.Size
	s.mu.Unlock()
	if size == s.sealing.noted {
		return nil
	}
	s.sealing.noted = size
	return tx.Bucket(metaBucket).Put(signedKey, number(size))
}

// writeWhole puts a file in place, readable by its account only, whole and on the disk or not
// at all.
func writeWhole(path string, text []byte) error {
	file, err := os.OpenFile(path+".new", os.O_CREATE|os.O_TRUNC|os.O_WRONLY, 0o600)
	if err != nil {
		return err
	}
	_, err = file.Write(text)
	if err == nil {
		err = file.Sync()
	}
	if err = errors.Join(err, file.Close()); err != nil {
		return err
	}
	if err := os.Rename(path+".new", path); err != nil {
		return err
	}
	return SyncFolder(filepath.Dir(path))
}
