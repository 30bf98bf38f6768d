package store

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"fmt"

	bolt "go.etcd.io/bbolt"

	"steelyard/rules"
)

// readHashes copies the hashes that are kept with some records, nil where there are none.
func readHashes(tx *bolt.Tx, from uint64, n int) [][]byte {
	hashes := make([][]byte, n)
	c := tx.Bucket(treeBucket).Cursor()
	k, v := c.Seek(number(from))
	for i := range hashes {
		if k != nil && binary.BigEndian.Uint64(k) == from+uint64(i) {
			hashes[i] = bytes.Clone(v)
			k, v = c.Next()
		}
	}
	return hashes
}

// differs compares what is in the file. That something differs is no storage error.
func (s *Store) differs(compare func(*bolt.Tx) error) error {
	var different error
	if err := s.view("verify", func(tx *bolt.Tx) error {
		different = compare(tx)
		return nil
	}); err != nil {
		return err
	}
	return different
}

// noted compares the notes of volumes with the records that say the same and are under the tree.
type noted struct {
	store *Store
	seen  int
}

var sealedMark = []byte(`"sealed":{`) // in a string its quotes would be escaped

// compare compares the note of a volume with a record, where the record is of one.
func (n *noted) compare(index uint64, record []byte) error {
	length, begins := headLength(record)
	if !bytes.Contains(record[begins:begins+length], sealedMark) {
		return nil
	}
	e, err := decode(record)
	if err != nil || e.Event.Sealed == nil {
		return err
	}
	n.seen++
	said := *e.Event.Sealed
	return n.store.differs(func(tx *bolt.Tx) error {
		var note []byte
		if bucket := tx.Bucket(volumesBucket); bucket != nil {
			note = bucket.Get(number(said.From))
		}
		v, err := readNote(note)
		if err != nil || said != (rules.Sealed{From: v.From, To: v.To, File: v.File, SHA256: v.SHA256}) {
			return fmt.Errorf("%w: the note of the volume %s is not what record %d says of it", ErrNotAsSigned, said.File, index)
		}
		return nil
	})
}

// readNote reads the note of a volume, in its one form.
func readNote(note []byte) (v Volume, err error) {
	if err = json.Unmarshal(note, &v); err != nil {
		return v, err
	}
	if again, err := json.Marshal(v); err != nil || !bytes.Equal(again, note) {
		return v, fmt.Errorf("a note of a volume is not written as this program writes it: %q", note)
	}
	return v, nil
}

// all checks that every note has its record, unless more were added meanwhile, and that the journal
// begins where the volumes end.
func (n *noted) all(size uint64) error {
	return n.store.differs(func(tx *bolt.Tx) error {
		last, _ := tx.Bucket(journalBucket).Cursor().Last()
		if last == nil || binary.BigEndian.Uint64(last)+1 != size {
			return nil
		}
		notes, ends := 0, uint64(0)
		if bucket := tx.Bucket(volumesBucket); bucket != nil {
			if err := bucket.ForEach(func(k, note []byte) error {
				v, err := readNote(note)
				if err != nil || v.From != ends || !bytes.Equal(k, number(v.From)) {
					return fmt.Errorf("%w: the notes of volumes were changed", ErrNotAsSigned)
				}
				notes, ends = notes+1, v.To
				return nil
			}); err != nil {
				return err
			}
		}
		if notes != n.seen {
			return fmt.Errorf("%w: %d volumes are noted, and %d in the journal", ErrNotAsSigned, notes, n.seen)
		}
		if first, _ := tx.Bucket(journalBucket).Cursor().First(); !bytes.Equal(first, number(ends)) {
			return fmt.Errorf("%w: the journal does not begin where the volumes end", ErrNotAsSigned)
		}
		return nil
	})
}
