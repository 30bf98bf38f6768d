package store

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"strings"

	bolt "go.etcd.io/bbolt"
)

// FileMemory is what intake must remember of one file.
type FileMemory struct {
	Source  string   `json:"source"`
	File    string   `json:"file"`
	Size    int64    `json:"size"`
	Written int64    `json:"written"` // modification time, ns since 1970
	SHA256  [32]byte `json:"sha256"`
	Index   uint64   `json:"index"`   // of the record that dealt with it
	Counted bool     `json:"counted"` // content that stood under this name is in a batch
	Batch   bool     `json:"-"`       // this step takes the content as a batch
}

func writeFile(tx *bolt.Tx, f *FileMemory) error {
	text, err := json.Marshal(f)
	if err != nil {
		return err
	}
	key := joined(f.Source, []byte(f.File))
	if err := tx.Bucket(filesBucket).Put(key, text); err != nil {
		return err
	}
	contents := tx.Bucket(contentsBucket)
	if !f.Batch || contents.Get(f.SHA256[:]) != nil {
		return nil
	}
	return contents.Put(f.SHA256[:], append(number(f.Index), key...))
}

// File is what is remembered of a file.
func (s *Store) File(source, file string) (f FileMemory, found bool, err error) {
	err = s.view("find a file", func(tx *bolt.Tx) error {
		text := tx.Bucket(filesBucket).Get(joined(source, []byte(file)))
		if text == nil {
			return nil
		}
		found = true
		return readFile(text, source, file, &f)
	})
	return f, found, err
}

// Files gives everything that is remembered of the files of a source to visit.
func (s *Store) Files(source string, visit func(FileMemory)) error {
	prefix := joined(source, nil)
	return s.view("read what is known of files", func(tx *bolt.Tx) error {
		c := tx.Bucket(filesBucket).Cursor()
		for k, v := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, v = c.Next() {
			var f FileMemory
			if err := readFile(v, source, string(k[len(prefix):]), &f); err != nil {
				return err
			}
			visit(f)
		}
		return nil
	})
}

// readFile reads what is remembered of a file. Its name is that of the key, byte for byte:
// JSON would put another in the place of one that is not UTF-8.
func readFile(text []byte, source, file string, f *FileMemory) error {
	if err := json.Unmarshal(text, f); err != nil {
		return fmt.Errorf("what is remembered of %q of %s: %w", file, source, err)
	}
	f.Source, f.File = source, file
	return nil
}

// Taken says which batch took a content first, and from where.
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
