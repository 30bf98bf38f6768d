package store

import (
	"bytes"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"

	"github.com/klauspost/compress/zstd"
	bolt "go.etcd.io/bbolt"

	"steelyard/store/ledger"
)

// A volume is a file of records that were taken out of the bbolt file, so that this stays small for years. It is
// written once, and named by its records and digest, so that no other ever takes its place:
//
//	volumes/000000000000-000000004213-5f0c3a91.volume
//
//	"steelyard volume 2\n"
//	frames   each some hundred records, their bytes sorted by kind and packed with zstd (streams.go): read back they are
//	         to the bit what was hashed into the tree
//	index    zstd of the frames: of each its first record, offset and length in the file (uvarints)
//	trailer  SHA-256 of the index as it stands in the file (32 bytes), its length (8 bytes, big-endian),
//	         "steelyard volume\n"
//
// The file is on the disk, and was read back and compared, before the transaction that takes its records out of the
// journal's bucket and notes it; the record of that names its SHA-256, and so do checkpoints through it.
// What a crash leaves between is a file that no store knows. The hashes of the tree stay in the bbolt
// file: what is read from a volume is compared with them, and where one is lost the rest can still be proved.
type Volume struct {
	From   uint64 `json:"from"` // first record
	To     uint64 `json:"to"`   // the record after the last
	File   string `json:"file"` // its name in the folder of volumes
	Size   int64  `json:"size"`
	SHA256 string `json:"sha256"` // of the file, hexadecimal
}

// ErrVolume is wrapped where a volume is missing or damaged. Everything else still works.
var ErrVolume = errors.New("a volume of the journal can't be read")

const (
	volumesFolder = "volumes"
	volumeHead    = "steelyard volume 2\n"
	volumeTail    = "steelyard volume\n"

	// frameBytes and frameRecords are about how much goes into one frame: one record is read by unpacking it.
	frameBytes   = 512 << 10
	frameRecords = 1024
)

var volumesBucket = []byte("volumes")

// volumes are the volumes of a store, and the frame that was read last.
type volumes struct {
	mu      sync.Mutex
	list    []Volume
	indexes map[string][]frame
	last    struct {
		file    string
		frame   int
		records [][]byte
	}
}

// frame is a stretch of a volume.
type frame struct {
	first          uint64 // record
	offset, length int64
}

// zstdCoder packs and unpacks; both are safe for use by many at once as they are used here.
var (
	packer = sync.OnceValue(func() *zstd.Encoder {
		return mustCoder(zstd.NewWriter(nil, zstd.WithEncoderLevel(zstd.SpeedBestCompression), zstd.WithEncoderConcurrency(1)))
	})
	unpacker = sync.OnceValue(func() *zstd.Decoder {
		return mustCoder(zstd.NewReader(nil, zstd.WithDecoderConcurrency(1), zstd.WithDecoderMaxMemory(mostPlain)))
	})
)

func mustCoder[T any](c T, err error) T {
	if err != nil {
		panic("store: the options of zstd are wrong: " + err.Error())
	}
	return c
}

// readVolumes reads which volumes there are.
func (s *Store) readVolumes() error {
	s.volumes.indexes = map[string][]frame{}
	return s.view("read which volumes there are", func(tx *bolt.Tx) error {
		bucket := tx.Bucket(volumesBucket)
		if bucket == nil {
			return nil
		}
		return bucket.ForEach(func(_, text []byte) error {
			var v Volume
			if err := json.Unmarshal(text, &v); err != nil {
				return err
			}
			s.volumes.list = append(s.volumes.list, v)
			return nil
		})
	})
}

// Volumes are the volumes that records have been moved into, in order.
func (s *Store) Volumes() []Volume {
	s.volumes.mu.Lock()
	defer s.volumes.mu.Unlock()
	return slices.Clone(s.volumes.list)
}

// sealedTo is the first record that is not in a volume.
func (s *Store) sealedTo() uint64 {
	if list := s.Volumes(); len(list) > 0 {
		return list[len(list)-1].To
	}
	return 0
}

// readBack compares a volume, as it is on the disk, with the records it is to stand for.
func (s *Store) readBack(v *Volume) error {
	i := v.From
	for i < v.To {
		records, err := s.inVolume(*v, i)
		if err != nil {
			return err
		}
		err = s.Records(i, min(i+uint64(len(records)), v.To), func(at uint64, record []byte) error {
			if !bytes.Equal(record, records[at-i]) {
				return fmt.Errorf("%w: record %d is not in %s as it was written", ErrVolume, at, v.File)
			}
			return nil
		})
		if err != nil {
			return err
		}
		i += uint64(len(records))
	}
	return nil
}

// seal notes a volume in a transaction and takes its records out.
func (s *Store) seal(tx *bolt.Tx, v *Volume) error {
	text, err := json.Marshal(v)
	if err != nil {
		return err
	}
	bucket, err := tx.CreateBucketIfNotExists(volumesBucket)
	if err == nil {
		err = bucket.Put(number(v.From), text)
	}
	if err != nil {
		return err
	}
	journal := tx.Bucket(journalBucket)
	for i := v.From; i < v.To; i++ {
		if err := journal.Delete(number(i)); err != nil {
			return err
		}
	}
	return nil
}

// volumeOf finds the volume that holds a record.
func (s *Store) volumeOf(record uint64) (Volume, bool) {
	s.volumes.mu.Lock()
	defer s.volumes.mu.Unlock()
	i, found := slices.BinarySearchFunc(s.volumes.list, record, func(v Volume, r uint64) int {
		switch {
		case r < v.From:
			return 1
		case r >= v.To:
			return -1
		}
		return 0
	})
	if !found {
		return Volume{}, false
	}
	return s.volumes.list[i], true
}

// inVolume gives the records of a volume from one up to the end of its frame.
func (s *Store) inVolume(v Volume, record uint64) ([][]byte, error) {
	s.volumes.mu.Lock()
	defer s.volumes.mu.Unlock()
	records, err := s.volumes.read(filepath.Join(s.folder, volumesFolder, v.File), &v, record)
	if err != nil {
		return nil, v.fault(err)
	}
	return records, nil
}

func (c *volumes) read(path string, v *Volume, record uint64) ([][]byte, error) {
	file, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer file.Close()
	index, ok := c.indexes[v.File]
	if !ok {
		if index, err = readIndex(file, v); err != nil {
			return nil, err
		}
		c.indexes[v.File] = index
	}
	i, found := slices.BinarySearchFunc(index, record, func(f frame, r uint64) int {
		switch {
		case f.first > r:
			return 1
		case f.first < r:
			return -1
		}
		return 0
	})
	if !found {
		i--
	}
	if i < 0 {
		return nil, errors.New("its index does not begin with its first record")
	}
	if c.last.file != v.File || c.last.frame != i {
		records, err := readFrame(file, index[i])
		if err != nil {
			return nil, err
		}
		c.last.file, c.last.frame, c.last.records = v.File, i, records
	}
	if skip := record - index[i].first; skip < uint64(len(c.last.records)) {
		return c.last.records[skip:], nil
	}
	return nil, fmt.Errorf("record %d is missing", record)
}

// readIndex reads where the frames of a volume are.
func readIndex(file *os.File, v *Volume) (index []frame, err error) {
	const trailer = sha256.Size + 8 + len(volumeTail)
	info, err := file.Stat()
	if err != nil {
		return nil, err
	}
	if info.Size() != v.Size || v.Size < int64(len(volumeHead)+trailer) {
		return nil, fmt.Errorf("it has %d bytes, and was written with %d", info.Size(), v.Size)
	}
	head, tail := make([]byte, len(volumeHead)), make([]byte, trailer)
	if _, err := file.ReadAt(head, 0); err != nil {
		return nil, err
	}
	if string(head) != volumeHead {
		return nil, fmt.Errorf("its first line is not %q", strings.TrimSpace(volumeHead))
	}
	if _, err := file.ReadAt(tail, v.Size-int64(trailer)); err != nil {
		return nil, err
	}
	length := binary.BigEndian.Uint64(tail[sha256.Size:])
	if string(tail[sha256.Size+8:]) != volumeTail || length > uint64(v.Size) {
		return nil, errors.New("its end is not that of a volume")
	}
	packed := make([]byte, length)
	if _, err := file.ReadAt(packed, v.Size-int64(trailer)-int64(length)); err != nil {
		return nil, err
	}
	if sum := sha256.Sum256(packed); !bytes.Equal(sum[:], tail[:sha256.Size]) {
		return nil, errors.New("its index was changed")
	}
	plain, err := unpacker().DecodeAll(packed, nil)
	if err != nil {
		return nil, err
	}
	c := &columns{rest: plain}
	for len(c.rest) > 0 && c.err == nil {
		f := frame{c.uvarint(), int64(c.uvarint()), int64(c.uvarint())}
		if f.offset < 0 || f.length < 0 || f.offset+f.length > v.Size {
			return nil, errors.New("its index points out of it")
		}
		index = append(index, f)
	}
	return index, c.err
}

func readFrame(file *os.File, f frame) (records [][]byte, err error) {
	packed := make([]byte, f.length)
	if _, err := file.ReadAt(packed, f.offset); err != nil {
		return nil, err
	}
	return unpack(packed)
}

// areAsHashed compares records of a volume with their hashes in the tree: a volume that was written anew is not read
// as if it were the one that was noted.
func (s *Store) areAsHashed(v *Volume, from uint64, records [][]byte) error {
	var changed error
	if err := s.view("read the tree", func(tx *bolt.Tx) error {
		hashes := readHashes(tx, from, len(records))
		for i, record := range records {
			if leaf := ledger.Leaf(record); !bytes.HasPrefix(hashes[i], leaf[:]) {
				changed = v.fault(fmt.Errorf("record %d is not the one that its hash was taken of", from+uint64(i)))
				return nil
			}
		}
		return nil
	}); err != nil {
		return err
	}
	return changed
}

// MissingVolumes says of every volume that is not there, or has not the size that it was written with, which records can't
// be read. It opens none.
func (s *Store) MissingVolumes() (faults []error) {
	for _, v := range s.Volumes() {
		info, err := os.Stat(filepath.Join(s.folder, volumesFolder, v.File))
		if err == nil && info.Size() != v.Size {
			err = fmt.Errorf("it has %d bytes, and was written with %d", info.Size(), v.Size)
		}
		if err != nil {
			faults = append(faults, v.fault(err))
		}
	}
	return faults
}

// fault says that a volume can't be read.
func (v *Volume) fault(why error) error {
	return fmt.Errorf("%w: %s, with records %d to %d: %w; put it back from a backup", ErrVolume, v.File, v.From, v.To-1, why)
}

// checkVolumes compares the digests of all volumes with what was noted of them.
func (s *Store) checkVolumes() error {
	for _, v := range s.Volumes() {
		file, err := os.Open(filepath.Join(s.folder, volumesFolder, v.File))
		if err != nil {
			return fmt.Errorf("%w: %w", ErrNotAsSigned, v.fault(err))
		}
		sum := sha256.New()
		n, err := io.Copy(sum, file)
		if err = errors.Join(err, file.Close()); err != nil {
			return fmt.Errorf("%w: %w", ErrNotAsSigned, v.fault(err))
		}
		if got := hex.EncodeToString(sum.Sum(nil)); n != v.Size || got != v.SHA256 {
			return fmt.Errorf("%w: %w", ErrNotAsSigned, v.fault(errors.New("it was changed since it was written")))
		}
	}
	return nil
}

// copyVolumes copies the volumes into a backup; those that can't be read, or were changed, are named in the error.
func (s *Store) copyVolumes(folder string) error {
	list := s.Volumes()
	if len(list) == 0 {
		return nil
	}
	to := filepath.Join(folder, volumesFolder)
	if err := os.Mkdir(to, 0o700); err != nil {
		return err
	}
	var faults error
	for _, v := range list {
		text, err := os.ReadFile(filepath.Join(s.folder, volumesFolder, v.File))
		if sum := sha256.Sum256(text); err == nil && hex.EncodeToString(sum[:]) != v.SHA256 {
			err = errors.New("it was changed since it was written")
		}
		if err != nil {
			faults = errors.Join(faults, v.fault(err))
			continue
		}
		if err := writeWhole(filepath.Join(to, v.File), text); err != nil {
			return err
		}
	}
	return errors.Join(faults, SyncFolder(folder))
}
