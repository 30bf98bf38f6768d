package store

import (
	"bytes"
	"cmp"
	"encoding/binary"
	"errors"
	"fmt"
	"slices"
	"strings"

	bolt "go.etcd.io/bbolt"

	"steelyard/store/ledger"
)

// Prove makes the proof of a record under a checkpoint of all that is committed.
func (s *Store) Prove(index uint64) (p ledger.Proof, err error) {
	signed, err := s.Checkpoint()
	if err != nil {
		return p, err
	}
	c, err := ledger.Open(signed, s.Verifying())
	if err != nil {
		return p, err
	}
	if index >= c.Size {
		return p, fmt.Errorf("there is no record %d: the journal has %d", index, c.Size)
	}
	err = s.view("prove a record", func(tx *bolt.Tx) (err error) {
		p, err = ledger.Prove(index, c.Size, signed, kept(tx))
		return err
	})
	return p, err
}

// ProveExtends shows that the journal under a checkpoint begins with that under an older one;
// ledger.CheckExtends checks it without the store.
func (s *Store) ProveExtends(older, newer ledger.Checkpoint) (proof []ledger.Hash, err error) {
	if newer.Size > s.Next() || older.Size == 0 || older.Size > newer.Size {
		return nil, fmt.Errorf("no journal of %d records can be shown to begin with one of %d here: it has %d", newer.Size, older.Size, s.Next())
	}
	err = s.view("prove a beginning", func(tx *bolt.Tx) (err error) {
		proof, err = ledger.ProveExtends(older.Size, newer.Size, kept(tx))
		return err
	})
	return proof, err
}

// Verification is what Verify compares the journal with, besides itself.
type Verification struct {
	Signed    [][]byte // checkpoints from elsewhere: old messages, day logs, notes
	Verifying []string // keys to verify them with, as their holder has them; the store's own where nil

	// Visit, where there is one, is given every record after it was found as it was signed so
	// far as can be told by then; its error ends the verification.
	Visit func(index uint64, record []byte) error
}

// Verify counts the whole journal again from its records, and compares every hash that is
// kept, the checkpoint signed last, and those that are handed in. The error wraps
// ErrNotAsSigned and names the first difference; it returns the checkpoint, not signed, of
// what was verified. With none handed in from outside the machine, it can't tell a journal
// that was written anew together with its key.
func (s *Store) Verify(v Verification) (ledger.Checkpoint, error) {
	size := s.Next()
	found := ledger.Checkpoint{Origin: ledger.OriginOf(s.origin)}
	signed, err := s.toCompare(v, size)
	if err != nil {
		return found, err
	}
	var count ledger.Recount
	compare := func() error {
		for ; len(signed) > 0 && signed[0].Size == count.Size(); signed = signed[1:] {
			if signed[0].Root != count.Root() {
				return fmt.Errorf("%w: the first %d records are not those of a checkpoint of %s", ErrNotAsSigned, count.Size(), signed[0].Origin)
			}
		}
		return nil
	}
	if err = compare(); err == nil {
		err = s.checkVolumes()
	}
	if err == nil {
		err = s.recount(&count, size, compare, v.Visit)
	}
	found.Size, found.Root = count.Size(), count.Root()
	if err == nil {
		err = s.nothingBeyond(size)
	}
	return found, err
}

// toCompare opens the checkpoints, in the order of their sizes.
func (s *Store) toCompare(v Verification, size uint64) (all []ledger.Checkpoint, err error) {
	origins, err := s.Origins()
	if err != nil {
		return nil, err
	}
	keys := v.Verifying
	if keys != nil && !slices.Contains(keys, s.Verifying()) {
		return nil, fmt.Errorf("%w: it is signed with another key than those handed in", ErrNotAsSigned)
	}
	if keys == nil {
		for _, o := range origins {
			keys = append(keys, o.Verifying)
		}
	}
	for i, text := range v.Signed {
		c, err := openWith(text, keys)
		if err != nil {
			return nil, fmt.Errorf("%w: checkpoint %d of those handed in: %w", ErrNotAsSigned, i+1, err)
		}
		if err := inOrigin(c, origins); err != nil {
			return nil, fmt.Errorf("%w: checkpoint %d of those handed in: %w", ErrNotAsSigned, i+1, err)
		}
		all = append(all, c)
	}
	s.sealing.mu.Lock()
	if last := s.sealing.last; s.sealing.text != nil && last.Size <= size { // or it was signed since
		all = append(all, last)
	}
	s.sealing.mu.Unlock()
	slices.SortFunc(all, func(a, b ledger.Checkpoint) int { return cmp.Compare(a.Size, b.Size) })
	if n := len(all); n > 0 && all[n-1].Size > size {
		return nil, fmt.Errorf("%w: a checkpoint of %s has %d records, and the journal %d", ErrNotAsSigned, all[n-1].Origin, all[n-1].Size, size)
	}
	return all, nil
}

// openWith opens a checkpoint with the key of its origin.
func openWith(text []byte, keys []string) (c ledger.Checkpoint, err error) {
	origin := ledger.OriginIn(text)
	for _, key := range keys {
		if strings.HasPrefix(key, origin+"+") {
			return ledger.Open(text, key)
		}
	}
	return c, fmt.Errorf("there is no key to verify a checkpoint of %q with", origin)
}

// inOrigin refuses a checkpoint of a former origin that has records of which that origin's
// successor does not know.
func inOrigin(c ledger.Checkpoint, origins []Origin) error {
	for i, o := range origins[:max(len(origins)-1, 0)] {
		if next := origins[i+1]; ledger.OriginOf(o.ID) == c.Origin && c.Size > next.From {
			return fmt.Errorf("%s signed %d records, and the store went on with %d of them under a new origin (%s, by %s): the others are lost here",
				c.Origin, c.Size, next.From, next.Because.Why, next.Because.By)
		}
	}
	return nil
}

// recount counts records and compares the hashes kept with them.
func (s *Store) recount(count *ledger.Recount, size uint64, compare func() error, visit func(uint64, []byte) error) error {
	sealed := noted{store: s}
	for count.Size() < size {
		from := count.Size()
		records, _, err := s.some(from, size)
		if err != nil {
			if errors.Is(err, ErrVolume) {
				err = fmt.Errorf("%w: %w", ErrNotAsSigned, err)
			}
			return err
		}
		var hashes [][]byte
		if err := s.view("verify", func(tx *bolt.Tx) error {
			hashes = readHashes(tx, from, len(records))
			return nil
		}); err != nil {
			return err
		}
		for i, record := range records {
			if !bytes.Equal(count.Add(record), hashes[i]) {
				return fmt.Errorf("%w: record %d, or a hash kept with it, was changed", ErrNotAsSigned, from+uint64(i))
			}
			if err := errors.Join(sealed.compare(from+uint64(i), record), compare()); err != nil {
				return err
			}
			if visit == nil {
				continue
			}
			if err := visit(from+uint64(i), record); err != nil {
				return err
			}
		}
	}
	return sealed.all(size)
}

// nothingBeyond checks that the tree ends with the journal; both may have grown meanwhile.
func (s *Store) nothingBeyond(size uint64) error {
	return s.differs(func(tx *bolt.Tx) error {
		record, _ := tx.Bucket(journalBucket).Cursor().Last()
		hash, _ := tx.Bucket(treeBucket).Cursor().Last()
		if !bytes.Equal(record, hash) || size > 0 && binary.BigEndian.Uint64(record)+1 < size {
			return errors.Join(ErrNotAsSigned, errors.New("the hashes don't end with the last record"))
		}
		return nil
	})
}
