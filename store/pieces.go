package store

import (
	"bytes"

	bolt "go.etcd.io/bbolt"
)

// largePiece is the size from which a piece has a bucket of its own: bbolt writes all of a page
// anew when anything on it changes, so that a small piece beside large ones would cost as much
// as they do.
const largePiece = 1024

// largeKey is the only key of such a bucket.
var largeKey = []byte("piece")

// putPiece puts a piece of the state, or takes it away where it is nil.
func putPiece(tx *bolt.Tx, name, piece []byte) error {
	state := tx.Bucket(stateBucket)
	own := state.Bucket(name)
	if len(piece) >= largePiece {
		if own == nil {
			if err := state.Delete(name); err != nil {
				return err
			}
			var err error
			if own, err = state.CreateBucket(name); err != nil {
				return err
			}
		}
		return own.Put(largeKey, piece)
	}
	if own != nil {
		if err := state.DeleteBucket(name); err != nil {
			return err
		}
	}
	if piece == nil {
		return state.Delete(name)
	}
	return state.Put(name, piece)
}

// Pieces are the pieces of the engine's state.
func (s *Store) Pieces() (map[string][]byte, error) {
	pieces := map[string][]byte{}
	err := s.view("read the state", func(tx *bolt.Tx) error {
		state := tx.Bucket(stateBucket)
		return state.ForEach(func(k, v []byte) error {
			if v == nil {
				v = state.Bucket(k).Get(largeKey)
			}
			pieces[string(k)] = bytes.Clone(v)
			return nil
		})
	})
	return pieces, err
}
