package store

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	bolt "go.etcd.io/bbolt"
	bolterrors "go.etcd.io/bbolt/errors"

	"steelyard/store/ledger"
)

// publicSuffix names the file beside the store with the key to verify with, for everybody.
const publicSuffix = ".pub"

// OpenToRead opens the store in a folder, or a copy of it elsewhere, for Verify and for reading alone: nothing is
// written, and no key to sign with is needed. The error wraps ErrHeld where a daemon has the store.
func OpenToRead(folder string) (s *Store, err error) {
	path := filepath.Join(folder, fileName)
	if _, err := os.Stat(path); err != nil {
		return nil, fmt.Errorf("there is no store in %s: %w", folder, err)
	}
	s = &Store{folder: folder, toRead: true}
	defer func() {
		if p := recover(); p != nil {
			s, err = nil, fmt.Errorf("%w: open %s: the file is damaged: %v", ErrStorage, path, p)
		}
	}()
	s.db, err = bolt.Open(path, 0o400, &bolt.Options{ReadOnly: true, Timeout: time.Second, PreLoadFreelist: false})
	switch {
	case errors.Is(err, bolterrors.ErrTimeout):
		return nil, fmt.Errorf("%w in %s; stop the daemon, or make a copy with `steelyard backup` and read that", ErrHeld, folder)
	case err != nil:
		return nil, fmt.Errorf("%w: open %s: %w", ErrStorage, path, err)
	}
	if err = s.readWhatIs(); err != nil {
		return nil, errors.Join(err, s.db.Close())
	}
	return s, nil
}

// readWhatIs reads what is needed at all times, of a store that is not to be changed.
func (s *Store) readWhatIs() error {
	found := ""
	err := s.view("open", func(tx *bolt.Tx) error {
		meta := tx.Bucket(metaBucket)
		if meta == nil {
			return errors.New("it is no store of this program")
		}
		found = string(meta.Get(formatKey))
		return nil
	})
	if err == nil && found != format {
		err = fmt.Errorf("the store in %s has format %q and this program reads %q; use the program that wrote it", s.folder, found, format)
	}
	if err == nil {
		_, err = s.readMeta()
	}
	if err == nil {
		err = s.readVolumes()
	}
	if err != nil {
		return err
	}
	origins, err := s.Origins()
	if err != nil {
		return err
	}
	if len(origins) == 0 {
		return fmt.Errorf("%w: the store in %s names no key", ErrNotAsSigned, s.folder)
	}
	s.sealing.verifying = origins[len(origins)-1].Verifying
	text, err := os.ReadFile(s.beside(checkpointSuffix))
	if errors.Is(err, fs.ErrNotExist) {
		return nil // a copy without it
	}
	if err != nil {
		return err
	}
	c, err := ledger.Open(text, s.sealing.verifying)
	if err != nil {
		return fmt.Errorf("%w: %s: %w", ErrNotAsSigned, s.beside(checkpointSuffix), err)
	}
	if c.Size > s.Next() {
		return fmt.Errorf("%w: the store in %s has %d records, and a checkpoint of %d was signed: its end is missing", ErrNotAsSigned, s.folder, s.Next(), c.Size)
	}
	s.sealing.last, s.sealing.text = c, text
	return nil
}

// LastSigned is the size of the checkpoint that was signed last; 0 where there is none beside the store.
func (s *Store) LastSigned() uint64 {
	s.sealing.mu.Lock()
	defer s.sealing.mu.Unlock()
	return s.sealing.last.Size
}

// Backup writes a consistent copy of the store into a new folder, with its volumes, the last checkpoint and the key to verify
// with beside it, but not the key to sign with. A volume that can't be read is named in the error, and all else copied. It is synced, and read through once, before
// Backup returns. The store goes on being used meanwhile.
func (s *Store) Backup(folder string) (err error) {
	if err := os.MkdirAll(filepath.Dir(folder), 0o755); err != nil {
		return err
	}
	if err := os.Mkdir(folder, 0o700); err != nil {
		return fmt.Errorf("a backup goes into a new folder: %w", err)
	}
	signed, err := s.Checkpoint()
	if err != nil {
		return err
	}
	path := filepath.Join(folder, fileName)
	if err := s.guard("copy", func() error { return copyTo(s.db, path) }); err != nil {
		return err
	}
	missing := s.copyVolumes(folder)
	if missing != nil && !errors.Is(missing, ErrVolume) {
		return missing
	}
	if err := checkCopy(path); err != nil {
		return fmt.Errorf("%w: the copy in %s is damaged: %w", ErrStorage, folder, err)
	}
	err = errors.Join(
		writeWhole(filepath.Join(folder, s.origin+checkpointSuffix), signed),
		writeWhole(filepath.Join(folder, s.origin+publicSuffix), []byte(s.Verifying()+"\n")),
	)
	if err == nil {
		err = SyncFolder(filepath.Dir(folder))
	}
	if err == nil && missing != nil {
		err = fmt.Errorf("the copy in %s is whole but for this: %w", folder, missing)
	}
	return err
}
