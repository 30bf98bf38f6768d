package store

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	bolt "go.etcd.io/bbolt"
	"pgregory.net/rapid"
)

var long = flag.Bool("long", false, "sweep every write, sync and bit, make more images, and kill more often")

// many commits batches of the daemon's kind, which need not last, until there are as many records.
func many(t testing.TB, s *Store, records uint64) {
	t.Helper()
	s.db.NoSync = true
	for s.Next() < records {
		var st Step
		for i := range min(100, records-s.Next()) {
			st.Entries = append(st.Entries, batchWithLooks(s.Next()+i, int(1+(s.Next()+i)%5), 2))
		}
		if err := s.Commit(st); err != nil {
			t.Fatal(err)
		}
	}
}

// volumeFile is where the volume of a number is.
func volumeFile(s *Store, number int) string {
	return filepath.Join(s.folder, volumesFolder, s.Volumes()[number].File)
}

// anew has the store forget what it read of volumes, and that it failed, and read which there are, as a
// new start does.
func anew(s *Store) error {
	s.volumes.last.file, s.volumes.list, s.failed = "", nil, nil
	return s.readVolumes()
}

// What was sealed is under the next checkpoint: nobody can put another volume, with other digest
// and note, in its place.
func TestEveryBitWithAVolume(t *testing.T) {
	s := open(t, t.TempDir())
	defer s.Close()
	many(t, s, 12)
	sealNext(t, s, 8)
	sign(t, s)
	verify := func(what string, bit int) {
		t.Helper()
		err := anew(s)
		if err == nil {
			_, err = s.Verify(Verification{})
		}
		if !errors.Is(err, ErrNotAsSigned) && !errors.Is(err, ErrStorage) {
			t.Fatalf("bit %d of %s: %v", bit, what, err)
		}
		s.failed = nil
	}
	path := volumeFile(s, 0)
	volume, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.Chmod(path, 0o600); err != nil {
		t.Fatal(err)
	}
	every := 3
	if *long {
		every = 1
	}
	for bit := 0; bit < 8*len(volume); bit += every {
		flipFile(t, path, bit)
		verify("the volume", bit)
		flipFile(t, path, bit)
	}
	var note []byte
	tamper(t, s, func(tx *bolt.Tx) error {
		note = bytes.Clone(tx.Bucket(volumesBucket).Get(number(0)))
		return nil
	})
	put := func(b []byte) {
		tamper(t, s, func(tx *bolt.Tx) error { return tx.Bucket(volumesBucket).Put(number(0), b) })
	}
	for bit := range 8 * len(note) {
		changed := bytes.Clone(note)
		changed[bit/8] ^= 1 << (bit % 8)
		put(changed)
		verify("the note", bit)
	}
	put(note)
	for name, forge := range map[string]func(tx *bolt.Tx) error{
		"the note is gone":            func(tx *bolt.Tx) error { return tx.Bucket(volumesBucket).Delete(number(0)) },
		"a record is in both":         func(tx *bolt.Tx) error { return tx.Bucket(journalBucket).Put(number(7), []byte("x")) },
		"a volume that nobody noted":  func(tx *bolt.Tx) error { return tx.Bucket(volumesBucket).Put(number(8), note) },
		"the hash of a sealed record": func(tx *bolt.Tx) error { return tx.Bucket(treeBucket).Put(number(3), make([]byte, 96)) },
	} {
		var saved [][3][]byte
		tamper(t, s, func(tx *bolt.Tx) error {
			for _, at := range [][2][]byte{{volumesBucket, number(0)}, {volumesBucket, number(8)}, {journalBucket, number(7)}, {treeBucket, number(3)}} {
				saved = append(saved, [3][]byte{at[0], at[1], bytes.Clone(tx.Bucket(at[0]).Get(at[1]))})
			}
			return forge(tx)
		})
		verify(name, 0)
		tamper(t, s, func(tx *bolt.Tx) error {
			for _, was := range saved {
				if was[2] == nil {
					if err := tx.Bucket(was[0]).Delete(was[1]); err != nil {
						return err
					}
				} else if err := tx.Bucket(was[0]).Put(was[1], was[2]); err != nil {
					return err
				}
			}
			return nil
		})
	}
	if err := anew(s); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Verify(Verification{}); err != nil {
		t.Fatalf("with everything put back: %v", err)
	}
}

func flipFile(t testing.TB, path string, bit int) {
	t.Helper()
	file, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	b := make([]byte, 1)
	_, err = file.ReadAt(b, int64(bit/8))
	if err == nil {
		b[0] ^= 1 << (bit % 8)
		_, err = file.WriteAt(b, int64(bit/8))
	}
	if err := errors.Join(err, file.Close()); err != nil {
		t.Fatal(err)
	}
}

// Random bits of a larger store with volumes: of a record, a hash, a volume, a note or the last
// checkpoint.
func TestAnyBitWithVolumes(t *testing.T) {
	s := open(t, t.TempDir())
	many(t, s, 3000)
	sealNext(t, s, 1000)
	sealNext(t, s, 2000)
	signed := sign(t, s)
	defer s.Close()
	var volumes []string
	for i := range 2 {
		volumes = append(volumes, volumeFile(s, i))
		if err := os.Chmod(volumes[i], 0o600); err != nil {
			t.Fatal(err)
		}
	}
	rapid.Check(t, func(t *rapid.T) {
		checkpoint := bytes.Clone(signed)
		undo := func() {}
		switch what := rapid.SampledFrom([]string{"record", "hash", "note", "volume", "checkpoint"}).Draw(t, "what"); what {
		case "volume":
			path := rapid.SampledFrom(volumes).Draw(t, "volume")
			info, err := os.Stat(path)
			if err != nil {
				t.Fatal(err)
			}
			bit := rapid.IntRange(0, 8*int(info.Size())-1).Draw(t, "bit")
			flip := func() {
				b, err := os.ReadFile(path)
				if err != nil {
					t.Fatal(err)
				}
				b[bit/8] ^= 1 << (bit % 8)
				if err := os.WriteFile(path, b, 0o600); err != nil {
					t.Fatal(err)
				}
			}
			flip()
			undo = flip
		case "checkpoint":
			bit := rapid.IntRange(0, 8*len(checkpoint)-1).Draw(t, "bit")
			checkpoint[bit/8] ^= 1 << (bit % 8)
		default:
			bucket, key := treeBucket, number(rapid.Uint64Range(0, 3001).Draw(t, "index"))
			if what == "note" {
				bucket, key = volumesBucket, number(rapid.SampledFrom([]uint64{0, 1000}).Draw(t, "volume"))
			} else if what == "record" {
				bucket, key = journalBucket, number(rapid.Uint64Range(2000, 3001).Draw(t, "index"))
			}
			bit := -1
			flip := func() {
				if err := s.db.Update(func(tx *bolt.Tx) error {
					v := bytes.Clone(tx.Bucket(bucket).Get(key))
					if bit < 0 {
						bit = rapid.IntRange(0, 8*len(v)-1).Draw(t, "bit")
					}
					v[bit/8] ^= 1 << (bit % 8)
					return tx.Bucket(bucket).Put(key, v)
				}); err != nil {
					t.Fatal(err)
				}
			}
			flip()
			undo = flip
		}
		err := anew(s)
		if err == nil {
			_, err = s.Verify(Verification{Signed: [][]byte{checkpoint}})
		}
		undo()
		if !errors.Is(err, ErrNotAsSigned) && !errors.Is(err, ErrStorage) {
			t.Fatal(err)
		}
	})
	if err := anew(s); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Verify(Verification{Signed: [][]byte{signed}}); err != nil {
		t.Errorf("with every bit put back: %v", err)
	}
}

// A record of a volume is changed, dropped, sent twice, put in or exchanged with another, and the volume written anew,
// with or without its note and the hashes of the tree: what is kept, or signed, tells.
func TestVolumeWrittenAnew(t *testing.T) {
	for name, rewrite := range map[string]func([][]byte) [][]byte{
		"one changed":   func(all [][]byte) [][]byte { all[5] = append(bytes.Clone(all[5]), 0); return all },
		"one dropped":   func(all [][]byte) [][]byte { return slices.Delete(all, 5, 6) },
		"one twice":     func(all [][]byte) [][]byte { return slices.Insert(all, 5, all[5])[:100] },
		"one put in":    func(all [][]byte) [][]byte { return slices.Insert(all, 5, all[50])[:100] },
		"two exchanged": func(all [][]byte) [][]byte { all[5], all[6] = all[6], all[5]; return all },
	} {
		for _, noted := range []bool{false, true} {
			for _, hashed := range []bool{false, true} {
				t.Run(fmt.Sprintf("%s/noted=%v/hashed=%v", name, noted, hashed), func(t *testing.T) {
					s := open(t, t.TempDir())
					defer s.Close()
					many(t, s, 200)
					sealNext(t, s, 100)
					sign(t, s)
					records := rewrite(all(t, s)[:100])
					forge(t, s, records, noted)
					if hashed && len(records) == 100 {
						tamper(t, s, s.plant)
					} else if err := s.Records(0, 100, func(uint64, []byte) error { return nil }); !errors.Is(err, ErrVolume) {
						t.Errorf("read as if it were the one: %v", err)
					}
					if _, err := s.Verify(Verification{}); !errors.Is(err, ErrNotAsSigned) {
						t.Errorf("%v", err)
					}
				})
			}
		}
	}
}

// forge writes the first volume anew with other records, and its note where that is wanted.
func forge(t *testing.T, s *Store, records [][]byte, noted bool) {
	t.Helper()
	v := s.Volumes()[0]
	text := packedVolume(t, 0, records)
	if err := os.WriteFile(volumeFile(s, 0), text, 0o600); err != nil {
		t.Fatal(err)
	}
	sum := sha256.Sum256(text)
	v.Size = int64(len(text))
	if noted {
		v.SHA256 = hex.EncodeToString(sum[:])
	}
	tamper(t, s, func(tx *bolt.Tx) error {
		note, err := json.Marshal(v)
		if err != nil {
			return err
		}
		return tx.Bucket(volumesBucket).Put(number(0), note)
	})
	if err := anew(s); err != nil {
		t.Fatal(err)
	}
}

// packedVolume is the text of a volume.
func packedVolume(t testing.TB, from uint64, records [][]byte) []byte {
	t.Helper()
	var b bytes.Buffer
	p, err := newPacking(&b, from)
	for i := 0; err == nil && i < len(records); i++ {
		err = p.add(records[i])
	}
	if err == nil {
		err = p.finish()
	}
	if err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

// A store that lost a volume goes on under a new origin, which promises the hashes of what was in
// it, so that the file is known again when it turns up.
func TestNewOriginWithoutAVolume(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder)
	many(t, s, 60)
	sealNext(t, s, 20)
	sealNext(t, s, 50)
	path, away := volumeFile(s, 0), filepath.Join(t.TempDir(), "away")
	closed(t, s)
	if err := os.Rename(path, away); err != nil {
		t.Fatal(err)
	}
	s, err := Open(folder, Options{NewOrigin: &NewOrigin{Why: "the volume is lost", By: "R. Vale"}})
	if err != nil {
		t.Fatal(err)
	}
	defer func() { closed(t, s) }()
	sign(t, s)
	if _, err := s.Verify(Verification{}); !errors.Is(err, ErrVolume) {
		t.Errorf("without the volume: %v", err)
	}
	if err := os.Rename(away, path); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Verify(Verification{}); err != nil {
		t.Errorf("with it: %v", err)
	}
}

// A volume that is missing, cut, or changed anywhere is named with its records; what is in others and
// in the journal is read, proved and copied, the store goes on, and all is well once the file is back.
func TestDamagedVolume(t *testing.T) {
	s := open(t, t.TempDir())
	defer func() { closed(t, s) }()
	many(t, s, 5000)
	sealNext(t, s, 2000)
	sealNext(t, s, 4000)
	path := volumeFile(s, 0)
	whole, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for name, damaged := range map[string][]byte{
		"missing":   nil,
		"empty":     {},
		"cut":       whole[:len(whole)-1],
		"longer":    append(bytes.Clone(whole), 0),
		"a flip":    append(append(bytes.Clone(whole[:200]), whole[200]^1), whole[201:]...),
		"no volume": bytes.Repeat([]byte("x"), len(whole)),
	} {
		t.Run(name, func(t *testing.T) {
			if err := os.RemoveAll(path); err != nil {
				t.Fatal(err)
			}
			if damaged != nil {
				if err := os.WriteFile(path, damaged, 0o600); err != nil {
					t.Fatal(err)
				}
			}
			if err := anew(s); err != nil {
				t.Fatal(err)
			}
			named := func(err error) {
				t.Helper()
				if !errors.Is(err, ErrVolume) || errors.Is(err, ErrStorage) || !strings.Contains(err.Error(), filepath.Base(path)) ||
					!strings.Contains(err.Error(), "records 0 to 1999") {
					t.Errorf("%v", err)
				}
			}
			nothing := func(uint64, []byte) error { return nil }
			named(s.Records(0, 5000, nothing))
			_, err := s.Verify(Verification{})
			if named(err); !errors.Is(err, ErrNotAsSigned) {
				t.Error(err)
			}
			if faults := s.MissingVolumes(); (len(damaged) != len(whole)) != (len(faults) == 1) {
				t.Errorf("%v", faults)
			} else if len(faults) == 1 {
				named(faults[0])
			}
			if err := s.Records(2000, s.Next(), nothing); err != nil {
				t.Errorf("what is elsewhere: %v", err)
			}
			if _, err := s.Prove(17); err != nil {
				t.Errorf("the proof of a record that can't be read: %v", err)
			}
			copied := filepath.Join(t.TempDir(), "copy")
			named(s.Backup(copied))
			readCopy(t, copied)
			if err := s.Commit(Step{Entries: []Entry{batchWithLooks(s.Next(), 3, 1)}}); err != nil {
				t.Errorf("it does not go on: %v", err)
			}
		})
	}
	if err := errors.Join(os.RemoveAll(path), os.WriteFile(path, whole, 0o400), anew(s)); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Verify(Verification{}); err != nil {
		t.Errorf("with the file put back: %v", err)
	}
}

// readCopy reads what a copy without the first volume has.
func readCopy(t *testing.T, folder string) {
	t.Helper()
	c, err := OpenToRead(folder)
	if err != nil {
		t.Fatal(err)
	}
	defer closed(t, c)
	if err := c.Records(2000, c.Next(), func(uint64, []byte) error { return nil }); err != nil {
		t.Errorf("the copy: %v", err)
	}
}
