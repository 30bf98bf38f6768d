package store

import (
	"encoding/binary"
	"errors"

	bolt "go.etcd.io/bbolt"

	"steelyard/rules"
)

// noteHeld keeps what waits for a person's decision, so that it is found without reading the
// journal.
func noteHeld(tx *bolt.Tx, e *rules.Event) error {
	held := tx.Bucket(heldBucket)
	var err error
	switch b := e.Batch; {
	case e.Held != nil:
		err = held.Put(number(e.Index), binary.AppendUvarint(nil, 0))
	case e.Decided != nil:
		err = decided(held, e.Decided)
	case b != nil && b.Decided != nil:
		err = decided(held, b.Decided)
	}
	if b := e.Batch; err == nil && b != nil && len(b.Held) > 0 {
		err = held.Put(number(e.Index), binary.AppendUvarint(nil, uint64(len(b.Held))))
	}
	return err
}

// decided takes what was decided on out of what waits.
func decided(held *bolt.Bucket, d *rules.Decided) error {
	key := number(d.Held)
	waiting, n := binary.Uvarint(held.Get(key))
	if n <= 0 {
		return errors.New("a decision is about what does not wait for one")
	}
	if left := waiting - min(waiting, uint64(len(d.Lines))); left > 0 {
		return held.Put(key, binary.AppendUvarint(nil, left))
	}
	return held.Delete(key)
}

// Waiting is one record of which something waits for a decision.
type Waiting struct {
	Record uint64
	Rows   int // how many of its rows wait; 0 where it is a file held whole
}

// Waiting are the records of which something waits for a decision, in order.
func (s *Store) Waiting() (list []Waiting, err error) {
	err = s.view("find what is held", func(tx *bolt.Tx) error {
		return tx.Bucket(heldBucket).ForEach(func(k, v []byte) error {
			rows, _ := binary.Uvarint(v)
			list = append(list, Waiting{binary.BigEndian.Uint64(k), int(rows)})
			return nil
		})
	})
	return list, err
}
