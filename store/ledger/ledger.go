// Package ledger is the Merkle log over the bytes of records: what shows that none was
// changed, dropped, added or moved since somebody saw a checkpoint.
//
// The hashes are those of RFC 6962, section 2.1: SHA-256 of 0x00 and the record for a leaf, of
// 0x01 and both children for a node, of nothing for the empty log. A log of any size has one
// root, and a root signed with the log's key is a checkpoint (checkpoint.go). A Proof shows
// offline that a record is under a checkpoint (proof.go).
//
// The hashes of complete subtrees are kept with the record that completes them: with each
// record its leaf, then the larger subtrees that end with it, smallest first.
//
//	record       0    1        2    3
//	kept with    0    1 0-1    2    3 2-3 0-3
//
// Grow gives what is to be kept with the next record, from what was kept before. Recount does
// the same from the records alone, by another route, so that one checks the other.
//
// What this can't show: a log that was written anew from its first record, with the key, by
// whoever has both. Only a checkpoint that has left the machine shows that.
package ledger

import (
	"crypto/sha256"
	"fmt"
	"math/bits"

	"golang.org/x/mod/sumdb/tlog"
)

// Hash is a SHA-256 hash in the tree. In text it is base64.
type Hash = tlog.Hash

// HashSize is the length of a hash in bytes.
const HashSize = tlog.HashSize

// Kept gives the hashes that were kept with a record.
type Kept func(record uint64) ([]byte, error)

// ReadHashes reads hashes by the numbers of package tlog.
func (k Kept) ReadHashes(indexes []int64) ([]Hash, error) {
	hashes := make([]Hash, len(indexes))
	for i, index := range indexes {
		level, n := tlog.SplitStoredHashIndex(index)
		record := uint64(n+1)<<level - 1 // the one that completes the subtree
		kept, err := k(record)
		if err != nil {
			return nil, err
		}
		if len(kept) != HashSize*keptWith(record) {
			return nil, fmt.Errorf("the hashes kept with record %d are %d bytes and not %d", record, len(kept), HashSize*keptWith(record))
		}
		copy(hashes[i][:], kept[level*HashSize:])
	}
	return hashes, nil
}

// keptWith is how many hashes are kept with a record.
func keptWith(record uint64) int { return 1 + bits.TrailingZeros64(record+1) }

// Leaf is the hash of a record.
func Leaf(record []byte) Hash { return tlog.RecordHash(record) }

// Grow is what is to be kept with the record that becomes number n.
func Grow(n uint64, record []byte, kept Kept) ([]byte, error) {
	hashes, err := tlog.StoredHashes(int64(n), record, kept)
	if err != nil {
		return nil, err
	}
	b := make([]byte, 0, len(hashes)*HashSize)
	for _, h := range hashes {
		b = append(b, h[:]...)
	}
	return b, nil
}

// Root is the root of the log of the first size records.
func Root(size uint64, kept Kept) (Hash, error) { return tlog.TreeHash(int64(size), kept) }

// Recount counts a log again from its records, one after the other; the zero value has none.
// It needs no more memory than the hashes of the complete subtrees side by side, at most 64.
type Recount struct {
	size  uint64
	roots []Hash // of the complete subtrees, the largest first: one for each 1 in size
}

// Size is how many records were added.
func (r *Recount) Size() uint64 { return r.size }

// Add adds a record and returns what is to be kept with it.
func (r *Recount) Add(record []byte) []byte { return r.AddLeaf(Leaf(record)) }

// AddLeaf adds a record of which only the hash is there.
func (r *Recount) AddLeaf(h Hash) []byte {
	b := append(make([]byte, 0, HashSize*keptWith(r.size)), h[:]...)
	for rest := r.size; rest&1 == 1; rest >>= 1 {
		last := len(r.roots) - 1
		h = tlog.NodeHash(r.roots[last], h)
		r.roots = r.roots[:last]
		b = append(b, h[:]...)
	}
	r.roots = append(r.roots, h)
	r.size++
	return b
}

// Root is the root of the log as counted so far.
func (r *Recount) Root() Hash {
	if r.size == 0 {
		return sha256.Sum256(nil)
	}
	last := len(r.roots) - 1
	h := r.roots[last]
	for i := last - 1; i >= 0; i-- {
		h = tlog.NodeHash(r.roots[i], h)
	}
	return h
}
