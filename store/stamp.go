package store

import (
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"strconv"
	"time"

	bolt "go.etcd.io/bbolt"
)

// stampName is a small file beside the store that says whether the store was closed in order,
// and when a daemon was last known to be watching. That a program has the store is synced;
// the rest is not: after a power cut an older one serves.
const stampName = "alive"

type stamp struct {
	Open    bool      `json:"open"`           // a program has the store, or ended without order
	Alive   time.Time `json:"alive,omitzero"` // a daemon was watching
	Orderly bool      `json:"orderly"`        // and then ended in order
}

// readStamp reads the stamp. A store that existed and has none was not closed in order, as
// far as can be told.
func (s *Store) readStamp(existed bool) error {
	path := filepath.Join(s.folder, stampName)
	text, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		s.before = stamp{Open: existed}
		return nil
	}
	if err == nil && json.Unmarshal(text, &s.stamp) != nil {
		// A power cut may leave it empty: then its own time is the best that is known.
		s.stamp = stamp{Open: true}
		if info, err := os.Stat(path); err == nil {
			s.stamp.Alive = info.ModTime().UTC()
		}
	}
	if err != nil {
		return fmt.Errorf("%w: %w", ErrStorage, err)
	}
	s.before = s.stamp
	return nil
}

// restamp changes the stamp and writes it.
func (s *Store) restamp(change func(*stamp)) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	change(&s.stamp)
	text, err := json.Marshal(s.stamp)
	if err != nil {
		return err
	}
	path := filepath.Join(s.folder, stampName)
	if err = os.WriteFile(path+".new", text, 0o600); err == nil {
		err = os.Rename(path+".new", path)
	}
	if err != nil {
		return fmt.Errorf("%w: %w", ErrStorage, err)
	}
	return nil
}

// stampOpen notes on the disk that a program has the store.
func (s *Store) stampOpen() error {
	err := s.restamp(func(st *stamp) { st.Open = true })
	if err == nil {
		if err = syncFile(filepath.Join(s.folder, stampName)); err == nil {
			err = SyncFolder(s.folder)
		}
		if err != nil {
			err = fmt.Errorf("%w: %w", ErrStorage, err)
		}
	}
	return err
}

func syncFile(path string) error {
	file, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		return err
	}
	return errors.Join(file.Sync(), file.Close())
}

// Alive notes that a daemon is watching at a moment.
func (s *Store) Alive(at time.Time) error {
	return s.restamp(func(st *stamp) { st.Alive, st.Orderly = at.UTC(), false })
}

// Ended notes that a daemon stopped watching, in order.
func (s *Store) Ended(at time.Time) error {
	return s.restamp(func(st *stamp) { st.Alive, st.Orderly = at.UTC(), true })
}

// LastAlive is when the daemon before this program was last known to be watching, and whether
// it had ended in order; zero where there was none.
func (s *Store) LastAlive() (at time.Time, orderly bool) { return s.before.Alive, s.before.Orderly }

// renew checks a store that was not closed in order and copies it to a fresh file, so that
// every page is read and written anew: after a failed sync the pages on the disk may not be
// those in memory, and only a new file is certain. The copy is checked before it takes the
// place of the old one, which stays locked until then.
func (s *Store) renew(path string, wait time.Duration) error {
	if err := s.guard("check after an end without order", func() error { return check(s.db) }); err != nil {
		return fmt.Errorf("the store in %s was not closed in order and is damaged; restore a copy, or move the folder away and begin a new one: %w",
			s.folder, err)
	}
	fresh := path + ".fresh"
	err := s.guard("copy after an end without order", func() error {
		if err := copyTo(s.db, fresh); err != nil {
			return err
		}
		return checkCopy(fresh)
	})
	if err == nil && runtime.GOOS == "windows" {
		err = s.db.Close() // an open file can't be replaced there
	}
	if err == nil {
		err = os.Rename(fresh, path)
	}
	if err == nil {
		err = SyncFolder(s.folder)
	}
	if err == nil {
		err = s.db.Close()
	}
	if err != nil {
		_ = os.Remove(fresh) // so that it doesn't fill the disk; it is written anew in any case
		return fmt.Errorf("the store in %s was not closed in order and must be copied before it is used; the disk needs as much free space as the store takes: %w",
			s.folder, err)
	}
	db, err := openFile(path, wait)
	if err != nil {
		return err
	}
	s.db = db
	s.recovered = "the store had not been closed in order; it was checked, found sound and copied to a fresh file"
	return nil
}

func checkCopy(path string) error {
	db, err := bolt.Open(path, 0o600, &bolt.Options{ReadOnly: true, Timeout: time.Second})
	if err != nil {
		return err
	}
	return errors.Join(check(db), db.Close())
}

// check reads the whole file.
func check(db *bolt.DB) error {
	return db.View(func(tx *bolt.Tx) error {
		var all error
		for err := range tx.Check(bolt.WithKVStringer(plainKeys{})) {
			all = errors.Join(all, err)
		}
		return all
	})
}

// plainKeys writes keys in the messages of a check.
type plainKeys struct{}

func (plainKeys) KeyToString(b []byte) string   { return strconv.Quote(string(b)) }
func (plainKeys) ValueToString(b []byte) string { return strconv.Itoa(len(b)) + " bytes" }

// copyTo writes a consistent copy and syncs it.
func copyTo(db *bolt.DB, path string) error {
	file, err := os.OpenFile(path, os.O_CREATE|os.O_TRUNC|os.O_WRONLY, 0o600)
	if err != nil {
		return err
	}
	err = db.View(func(tx *bolt.Tx) error {
		_, err := tx.WriteTo(file)
		return err
	})
	if err == nil {
		err = file.Sync()
	}
	return errors.Join(err, file.Close())
}

// SyncFolder makes the names in a folder as durable as the content of its files. A system that
// can't sync a folder says so, and needs no telling.
func SyncFolder(folder string) error {
	dir, err := os.Open(folder)
	if err != nil {
		return err
	}
	defer dir.Close()
	if err := dir.Sync(); err != nil && !errors.Is(err, errors.ErrUnsupported) && !errors.Is(err, os.ErrInvalid) {
		return err
	}
	return nil
}
