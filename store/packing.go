package store

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"syscall"
)

// What bounds a volume: the transaction that takes its records out, and the file.
const (
	mostInVolume  = 16 << 10
	bytesInVolume = 256 << 20 // as the records are in the journal
)

// freshVolume is the name of a volume that is being written.
const freshVolume = "fresh"

// packing writes a volume, a frame at a time.
type packing struct {
	out         io.Writer
	digest      hash.Hash
	at          int64 // bytes written
	index       []byte
	first, next uint64  // records: of the frame, and to come
	kinds       streams // of the frame
	plain       int     // bytes of the frame
	total       int64   // bytes of all records
}

func newPacking(out io.Writer, from uint64) (*packing, error) {
	p := &packing{digest: sha256.New(), first: from, next: from}
	p.out = io.MultiWriter(out, p.digest)
	return p, p.write([]byte(volumeHead))
}

func (p *packing) write(b []byte) error {
	n, err := p.out.Write(b)
	p.at += int64(n)
	return err
}

func (p *packing) add(record []byte) error {
	p.kinds.add(record)
	p.next++
	p.total += int64(len(record))
	if p.plain += len(record); p.plain < frameBytes && p.next-p.first < frameRecords {
		return nil
	}
	return p.flush()
}

func (p *packing) flush() error {
	if p.first == p.next {
		return nil
	}
	frame, at := p.kinds.pack(nil), p.at
	p.index = binary.AppendUvarint(binary.AppendUvarint(binary.AppendUvarint(p.index, p.first), uint64(at)), uint64(len(frame)))
	p.first, p.plain = p.next, 0
	return p.write(frame)
}

// finish writes the index and the end.
func (p *packing) finish() error {
	if err := p.flush(); err != nil {
		return err
	}
	index := packer().EncodeAll(p.index, nil)
	sum := sha256.Sum256(index)
	end := append(append(index, sum[:]...), number(uint64(len(index)))...)
	return p.write(append(end, volumeTail...))
}

// errFull ends the reading of records for a volume that has enough.
var errFull = errors.New("the volume has enough")

// WriteVolume writes the oldest records that are not in a volume, up to but not including one, into the next, at most as
// many as fit in one, and reads it back. It is noted, and its records leave the bbolt file, with the Step that has it
// for Sealed. It is nil where there is nothing to move. Others may commit and read meanwhile. A disk without space for
// it is no storage error: nothing is lost, and the records stay where they are.
func (s *Store) WriteVolume(to uint64) (v *Volume, err error) {
	from := s.sealedTo()
	if to = min(to, s.Next(), from+mostInVolume); s.toRead || from >= to {
		return nil, nil
	}
	folder := filepath.Join(s.folder, volumesFolder)
	fresh := filepath.Join(folder, freshVolume)
	var space error
	err = s.guard("write a volume", func() (err error) {
		if v, err = s.writeFresh(folder, fresh, from, to); err != nil {
			_ = os.Remove(fresh) // so that it takes no space
		}
		if errors.Is(err, syscall.ENOSPC) {
			space, err = err, nil
		}
		return err
	})
	if space != nil {
		return nil, fmt.Errorf("%w: there is no space for another in %s: %w", ErrVolume, folder, space)
	}
	if err != nil {
		return nil, err
	}
	return v, s.readBack(v)
}

// writeFresh writes a volume under another name, and gives it its own once it is on the disk.
func (s *Store) writeFresh(folder, fresh string, from, to uint64) (*Volume, error) {
	if err := os.Mkdir(folder, 0o700); err == nil {
		err = SyncFolder(s.folder)
		if err != nil {
			return nil, err
		}
	} else if !errors.Is(err, fs.ErrExist) {
		return nil, err
	}
	if err := os.Remove(fresh); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return nil, err
	}
	file, err := os.OpenFile(fresh, os.O_CREATE|os.O_EXCL|os.O_WRONLY, 0o400)
	if err != nil {
		return nil, err
	}
	p, err := newPacking(file, from)
	if err == nil {
		err = s.pack(p, to)
	}
	if err == nil {
		err = file.Sync()
	}
	if err = errors.Join(err, file.Close()); err != nil {
		return nil, err
	}
	v := &Volume{From: from, To: p.next, Size: p.at, SHA256: hex.EncodeToString(p.digest.Sum(nil))}
	v.File = fmt.Sprintf("%012d-%012d-%.8s.volume", v.From, v.To, v.SHA256)
	if err := os.Rename(fresh, filepath.Join(folder, v.File)); err != nil {
		return nil, err
	}
	return v, SyncFolder(folder)
}

// pack packs the records before one, or as many as fit.
func (s *Store) pack(p *packing, to uint64) error {
	err := s.Records(p.next, to, func(_ uint64, record []byte) error {
		if p.total >= bytesInVolume {
			return errFull
		}
		return p.add(record)
	})
	if err != nil && !errors.Is(err, errFull) {
		return err
	}
	return p.finish()
}
