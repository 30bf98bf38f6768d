package store

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"strings"

	bolt "go.etcd.io/bbolt"
)

// FileMemory is what intake must remember of one file.
//
// Its value in the bucket is 1 for this form (a byte), whether it was counted (0 or 1, a byte),
// Size and Written (varints of encoding/binary), Index (uvarint), SHA256 (32 bytes), and what
// remains is Progress. A reader refuses another form.
type FileMemory struct {
	Source  string
	File    string
	Size    int64
	Written int64 // modification time, ns since 1970
	SHA256  [32]byte
	Index   uint64 // of the record that dealt with it
	Counted bool   // content that stood under this name is in a batch

	// Progress is how far a growing file has been read, as intake writes it; nil of a whole file.
	Progress []byte

	Batch bool // this step takes the content as a batch; not remembered
}

const fileForm = 1

func writeFile(tx *bolt.Tx, f *FileMemory) error {
	b := []byte{fileForm, 0}
	if f.Counted {
		b[1] = 1
	}
	b = binary.AppendVarint(b, f.Size)
	b = binary.AppendVarint(b, f.Written)
	b = binary.AppendUvarint(b, f.Index)
	key := joined(f.Source, []byte(f.File))
	if err := tx.Bucket(filesBucket).Put(key, append(append(b, f.SHA256[:]...), f.Progress...)); err != nil {
		return err
	}
	if !f.Batch {
		return nil
	}
	return tx.Bucket(contentsBucket).Put(f.SHA256[:], append(number(f.Index), key...))
}

// readFile reads what is remembered of a file.
func readFile(b []byte, source, file string) (f FileMemory, err error) {
	c := &columns{rest: b}
	form := c.byte()
	f = FileMemory{Source: source, File: file, Counted: c.byte() == 1, Size: c.varint(), Written: c.varint(), Index: c.uvarint()}
	copy(f.SHA256[:], c.take(uint64(len(f.SHA256))))
	if c.err == nil && form != fileForm {
		c.fail("its form is not the %d that this program reads", fileForm)
	}
	if c.err != nil {
		return f, fmt.Errorf("what is remembered of %q of %s: %w", file, source, c.err)
	}
	if len(c.rest) > 0 {
		f.Progress = bytes.Clone(c.rest)
	}
	return f, nil
}

// File is what is remembered of a file.
func (s *Store) File(source, file string) (f FileMemory, found bool, err error) {
	err = s.view("find a file", func(tx *bolt.Tx) (err error) {
		text := tx.Bucket(filesBucket).Get(joined(source, []byte(file)))
		if text == nil {
			return nil
		}
		found = true
		f, err = readFile(text, source, file)
		return err
	})
	return f, found, err
}

// Files gives everything that is remembered of the files of a source to visit.
func (s *Store) Files(source string, visit func(FileMemory)) error {
	prefix := joined(source, nil)
	return s.view("read what is known of files", func(tx *bolt.Tx) error {
		c := tx.Bucket(filesBucket).Cursor()
		for k, v := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, v = c.Next() {
			f, err := readFile(v, source, string(k[len(prefix):]))
			if err != nil {
				return err
			}
			visit(f)
		}
		return nil
	})
}

// Taken says which batch took a content last, and from where: there is more than one where an
// earlier one was withdrawn.
func (s *Store) Taken(sha [32]byte) (index uint64, source, file string, found bool, err error) {
	err = s.view("find a content", func(tx *bolt.Tx) error {
		v := tx.Bucket(contentsBucket).Get(sha[:])
		if v == nil {
			return nil
		}
		found, index = true, binary.BigEndian.Uint64(v)
		source, file, _ = strings.Cut(string(v[8:]), "\x00")
		return nil
	})
	return index, source, file, found, err
}
