package store

import (
	"bytes"
	"encoding/binary"

	bolt "go.etcd.io/bbolt"
)

// noteBatch keeps where the batches of a source and of a file name stand in the journal.
func noteBatch(tx *bolt.Tx, e *Entry) error {
	b := e.Event.Batch
	if b == nil {
		return nil
	}
	return tx.Bucket(batchesBucket).Put(joined(b.Source, joined(b.File, number(e.Event.Index))), nil)
}

// Batches are the indexes of the records that counted a batch of a file name of a source, in
// order; those of every file of the source where the name is empty, by file name. Withdrawn
// ones are among them.
func (s *Store) Batches(source, file string) (indexes []uint64, err error) {
	prefix := joined(source, nil)
	if file != "" {
		prefix = joined(source, joined(file, nil))
	}
	err = s.view("find batches", func(tx *bolt.Tx) error {
		c := tx.Bucket(batchesBucket).Cursor()
		for k, _ := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, _ = c.Next() {
			indexes = append(indexes, binary.BigEndian.Uint64(k[len(k)-8:]))
		}
		return nil
	})
	return indexes, err
}
