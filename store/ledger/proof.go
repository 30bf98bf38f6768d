package ledger

import (
	"bytes"
	"errors"
	"fmt"
	"strconv"
	"strings"

	"golang.org/x/mod/sumdb/tlog"
)

// Proof shows offline, with nothing but the key to verify with, that a record is number Index
// of the log under a signed checkpoint. In text it is that of C2SP tlog-proof:
//
//	c2sp.org/tlog-proof@v1
//	index 73894
//	gSKyXoYZUgZ6jduW…   the hashes of RFC 6962, section 2.1.1, one a line
//
//	steelyard/3d0f…     the signed checkpoint
//	…
//
// A reader skips one line that begins with "extra " after the first, and refuses another first
// line.
type Proof struct {
	Index      uint64
	Hashes     []Hash
	Checkpoint []byte // signed
}

const proofHeader = "c2sp.org/tlog-proof@v1"

// mostHashes is more than a proof in any log can have.
const mostHashes = 64

// Prove makes the proof of a record under a signed checkpoint of a size.
func Prove(index, size uint64, signed []byte, kept Kept) (Proof, error) {
	if index >= size {
		return Proof{}, fmt.Errorf("record %d is not under a checkpoint of %d records", index, size)
	}
	hashes, err := tlog.ProveRecord(int64(size), int64(index), kept)
	return Proof{Index: index, Hashes: hashes, Checkpoint: signed}, err
}

// Check checks that a record is the one that the proof is of, under its checkpoint, signed
// with the key; it returns the checkpoint.
func (p Proof) Check(record []byte, verifying string) (Checkpoint, error) {
	c, err := Open(p.Checkpoint, verifying)
	if err != nil {
		return Checkpoint{}, err
	}
	if p.Index >= c.Size {
		return Checkpoint{}, fmt.Errorf("record %d is not under a checkpoint of %d records", p.Index, c.Size)
	}
	if err := tlog.CheckRecord(p.Hashes, int64(c.Size), c.Root, int64(p.Index), tlog.RecordHash(record)); err != nil {
		return Checkpoint{}, fmt.Errorf("the record isn't number %d under the checkpoint of %d records: it, the proof or the checkpoint was changed",
			p.Index, c.Size)
	}
	return c, nil
}

// Text is the proof in text.
func (p Proof) Text() []byte {
	var b bytes.Buffer
	fmt.Fprintf(&b, "%s\nindex %d\n", proofHeader, p.Index)
	for _, h := range p.Hashes {
		fmt.Fprintln(&b, h)
	}
	b.WriteByte('\n')
	b.Write(p.Checkpoint)
	return b.Bytes()
}

// ParseProof reads a proof in text. It checks the form, not the proof.
func ParseProof(text []byte) (p Proof, err error) {
	head, signed, found := bytes.Cut(text, []byte("\n\n"))
	lines := strings.Split(string(head), "\n")
	if !found || lines[0] != proofHeader {
		return Proof{}, errors.New("that is no proof: its first line is not " + proofHeader)
	}
	if lines = lines[1:]; len(lines) > 0 && strings.HasPrefix(lines[0], "extra ") {
		lines = lines[1:]
	}
	if len(lines) == 0 || len(lines) > 1+mostHashes {
		return Proof{}, errors.New("a proof has too few lines or too many")
	}
	index, ok := strings.CutPrefix(lines[0], "index ")
	if p.Index, err = strconv.ParseUint(index, 10, 63); !ok || err != nil || strconv.FormatUint(p.Index, 10) != index {
		return Proof{}, fmt.Errorf("a proof's index is %q", lines[0])
	}
	for _, line := range lines[1:] {
		h, err := ParseHash(line)
		if err != nil {
			return Proof{}, fmt.Errorf("a proof has the line %q, which is no hash", line)
		}
		p.Hashes = append(p.Hashes, h)
	}
	p.Checkpoint = bytes.Clone(signed)
	return p, nil
}

// ProveExtends shows that the log of one size begins with that of a smaller one (RFC 6962,
// section 2.1.2).
func ProveExtends(older, size uint64, kept Kept) ([]Hash, error) {
	if older == 0 || older > size {
		return nil, fmt.Errorf("a log of %d records can't be shown to begin with one of %d", size, older)
	}
	return tlog.ProveTree(int64(size), int64(older), kept)
}

// CheckExtends checks that the log of one checkpoint begins with that of an older one.
func CheckExtends(older, newer Checkpoint, proof []Hash) error {
	if older.Size == 0 || older.Size > newer.Size {
		return fmt.Errorf("a log of %d records can't be shown to begin with one of %d", newer.Size, older.Size)
	}
	if err := tlog.CheckTree(proof, int64(newer.Size), newer.Root, int64(older.Size), older.Root); err != nil {
		return fmt.Errorf("the log of %d records doesn't begin with the one of %d that was signed before", newer.Size, older.Size)
	}
	return nil
}
