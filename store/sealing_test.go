package store

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	bolt "go.etcd.io/bbolt"
	"pgregory.net/rapid"

	"steelyard/store/ledger"
)

// filled is a store with some records, whose commits need not last.
func filled(t testing.TB, folder string, records int) *Store {
	t.Helper()
	s := open(t, folder)
	s.db.NoSync = true
	for range records {
		if err := s.Commit(step(s, byte(s.Next()))); err != nil {
			t.Fatal(err)
		}
	}
	return s
}

func sign(t testing.TB, s *Store) []byte {
	t.Helper()
	signed, err := s.Checkpoint()
	if err != nil {
		t.Fatal(err)
	}
	return signed
}

func closed(t testing.TB, s *Store) {
	t.Helper()
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}

// tamper changes the file behind the store's back.
func tamper(t testing.TB, s *Store, change func(tx *bolt.Tx) error) {
	t.Helper()
	if err := s.db.Update(change); err != nil {
		t.Fatal(err)
	}
}

// What was signed is verified, with checkpoints from every stage, over starts; every record
// has a proof that holds without the store.
func TestSignedAndVerified(t *testing.T) {
	folder := t.TempDir()
	var signed [][]byte
	for n := range 5 {
		s := filled(t, folder, n)
		signed = append(signed, sign(t, s), sign(t, s))
		visited := uint64(0)
		c, err := s.Verify(Verification{Signed: signed, Verifying: []string{s.Verifying()}, Visit: func(i uint64, record []byte) error {
			if e, err := decode(record); err != nil || e.Event.Index != i || i != visited {
				t.Errorf("record %d visited in the place of %d, %v", i, visited, err)
			}
			visited++
			return nil
		}})
		last, openErr := ledger.Open(signed[len(signed)-1], s.Verifying())
		if err != nil || openErr != nil || c != last || c.Size != s.Next() || visited != s.Next() {
			t.Errorf("verified %+v, signed %+v, %d visited; %v %v", c, last, visited, err, openErr)
		}
		if err := s.Records(0, s.Next(), func(i uint64, record []byte) error {
			p, err := s.Prove(i)
			if err != nil {
				return err
			}
			_, err = p.Check(record, s.Verifying())
			return err
		}); err != nil {
			t.Error(err)
		}
		if n > 1 {
			begins(t, s, signed[2], c)
		}
		closed(t, s)
	}
}

// begins checks that the journal under a checkpoint is shown to begin with an older one.
func begins(t *testing.T, s *Store, older []byte, newer ledger.Checkpoint) {
	t.Helper()
	old, err := ledger.Open(older, s.Verifying())
	if err != nil {
		t.Fatal(err)
	}
	proof, err := s.ProveExtends(old, newer)
	if err = errors.Join(err, ledger.CheckExtends(old, newer, proof)); err != nil {
		t.Error(err)
	}
}

func TestKeyIsSecret(t *testing.T) {
	s := open(t, t.TempDir())
	defer s.Close()
	info, err := os.Stat(s.beside(keySuffix))
	if err != nil || info.Mode().Perm() != 0o600 {
		t.Errorf("%v %v", info.Mode(), err)
	}
}

// Every bit of every record, hash and checkpoint of a small store is flipped: each is noticed.
func TestEveryBitOfASmallStore(t *testing.T) {
	s := filled(t, t.TempDir(), 3)
	defer s.Close()
	signed := sign(t, s)
	for _, bucket := range [][]byte{journalBucket, treeBucket} {
		for i := range uint64(3) {
			flipEvery(t, s, bucket, number(i))
		}
	}
	if _, err := s.Verify(Verification{Signed: [][]byte{signed}}); err != nil {
		t.Fatalf("with every bit put back: %v", err)
	}
	for bit := range 8 * len(signed) {
		signed[bit/8] ^= 1 << (bit % 8)
		if _, err := s.Verify(Verification{Signed: [][]byte{signed}}); !errors.Is(err, ErrNotAsSigned) {
			t.Errorf("bit %d of the checkpoint: %v", bit, err)
		}
		signed[bit/8] ^= 1 << (bit % 8)
	}
}

func flipEvery(t *testing.T, s *Store, bucket, key []byte) {
	t.Helper()
	var whole []byte
	put := func(v []byte) {
		tamper(t, s, func(tx *bolt.Tx) error { return tx.Bucket(bucket).Put(key, v) })
	}
	tamper(t, s, func(tx *bolt.Tx) error {
		whole = bytes.Clone(tx.Bucket(bucket).Get(key))
		return nil
	})
	every := 1
	if bytes.Equal(bucket, journalBucket) && testing.Short() {
		every = 11
	}
	for bit := 0; bit < 8*len(whole); bit += every {
		changed := bytes.Clone(whole)
		changed[bit/8] ^= 1 << (bit % 8)
		put(changed)
		if _, err := s.Verify(Verification{}); !errors.Is(err, ErrNotAsSigned) {
			t.Fatalf("bit %d of %s %x: %v", bit, bucket, key, err)
		}
	}
	put(whole)
}

// Random bits of a larger store.
func TestAnyBit(t *testing.T) {
	s := filled(t, t.TempDir(), 200)
	defer s.Close()
	sign(t, s)
	rapid.Check(t, func(t *rapid.T) {
		bucket := rapid.SampledFrom([][]byte{journalBucket, treeBucket}).Draw(t, "bucket")
		key := number(rapid.Uint64Range(0, 199).Draw(t, "index"))
		flip := func(at int) (size int) {
			err := s.db.Update(func(tx *bolt.Tx) error {
				v := bytes.Clone(tx.Bucket(bucket).Get(key))
				if size = 8 * len(v); at < 0 {
					return nil
				}
				v[at/8] ^= 1 << (at % 8)
				return tx.Bucket(bucket).Put(key, v)
			})
			if err != nil {
				t.Fatal(err)
			}
			return size
		}
		bit := rapid.IntRange(0, flip(-1)-1).Draw(t, "bit")
		flip(bit)
		_, err := s.Verify(Verification{})
		flip(bit)
		if !errors.Is(err, ErrNotAsSigned) {
			t.Fatal(err)
		}
	})
}

// The journal is written anew with a record changed, dropped, put in, sent twice or exchanged,
// and with it the tree, and it is signed again with the very key: a checkpoint that has left
// the machine tells.
func TestWrittenAnew(t *testing.T) {
	const records = 5
	for name, rewrite := range map[string]func([][]byte) [][]byte{
		"one changed": func(all [][]byte) [][]byte {
			all[2] = bytes.Replace(all[2], []byte(`"rig"`), []byte(`"Rig"`), 1)
			return all
		},
		"one dropped":   func(all [][]byte) [][]byte { return slices.Delete(all, 2, 3) },
		"the last gone": func(all [][]byte) [][]byte { return all[:records-1] },
		"one put in":    func(all [][]byte) [][]byte { return slices.Insert(all, 2, all[4]) },
		"one twice":     func(all [][]byte) [][]byte { return slices.Insert(all, 2, all[2]) },
		"two exchanged": func(all [][]byte) [][]byte { all[1], all[3] = all[3], all[1]; return all },
	} {
		t.Run(name, func(t *testing.T) {
			folder := t.TempDir()
			s := filled(t, folder, records)
			outside := sign(t, s)
			for range 3 {
				if err := s.Commit(step(s, byte(s.Next()))); err != nil {
					t.Fatal(err)
				}
			}
			sign(t, s)
			tamper(t, s, func(tx *bolt.Tx) error { return writeAnew(tx, rewrite) })
			if err := os.Remove(s.beside(checkpointSuffix)); err != nil {
				t.Fatal(err)
			}
			tamper(t, s, func(tx *bolt.Tx) error { return tx.Bucket(metaBucket).Put(signedKey, number(0)) })
			closed(t, s)
			s = open(t, folder)
			defer s.Close()
			sign(t, s)
			if _, err := s.Verify(Verification{}); err != nil {
				t.Fatalf("the forger left a trace that this test doesn't mean: %v", err)
			}
			if _, err := s.Verify(Verification{Signed: [][]byte{outside}}); !errors.Is(err, ErrNotAsSigned) {
				t.Errorf("%v", err)
			}
		})
	}
}

// writeAnew changes the first records as a whole, and the tree with them.
func writeAnew(tx *bolt.Tx, rewrite func([][]byte) [][]byte) error {
	journal := tx.Bucket(journalBucket)
	var all [][]byte
	if err := journal.ForEach(func(_, record []byte) error {
		all = append(all, bytes.Clone(record))
		return nil
	}); err != nil {
		return err
	}
	for i := range all {
		if err := journal.Delete(number(uint64(i))); err != nil {
			return err
		}
	}
	for i, record := range append(rewrite(slices.Clone(all[:5])), all[5:]...) {
		if err := journal.Put(number(uint64(i)), record); err != nil {
			return err
		}
	}
	return new(Store).plant(tx)
}

// An older copy is refused, and so is a store without its key or last checkpoint, or with
// those of another; under a new origin it goes on, and says so for good.
func TestNotAsSigned(t *testing.T) {
	copyFile := func(t *testing.T, from, to string) {
		t.Helper()
		text, err := os.ReadFile(from)
		if err == nil {
			err = os.WriteFile(to, text, 0o600)
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	for _, c := range []struct {
		name   string
		change func(t *testing.T, s *Store, older string) error // s is closed
		says   string
	}{
		{"an older copy", func(t *testing.T, s *Store, older string) error {
			copyFile(t, older, filepath.Join(s.folder, fileName))
			return nil
		}, "an older copy was put in its place"},
		{"another beginning", func(t *testing.T, s *Store, _ string) error {
			db, err := bolt.Open(filepath.Join(s.folder, fileName), 0o600, nil)
			if err != nil {
				return err
			}
			err = db.Update(func(tx *bolt.Tx) error {
				return tx.Bucket(treeBucket).Put(number(6), bytes.Repeat([]byte{1}, ledger.HashSize))
			})
			return errors.Join(err, db.Close())
		}, "are not those that were signed"},
		{"no checkpoint", func(t *testing.T, s *Store, _ string) error { return os.Remove(s.beside(checkpointSuffix)) }, "is gone"},
		{"a damaged checkpoint", func(t *testing.T, s *Store, _ string) error {
			return os.WriteFile(s.beside(checkpointSuffix), nil, 0o600)
		}, "no signed checkpoint"},
		{"no key", func(t *testing.T, s *Store, _ string) error { return os.Remove(s.beside(keySuffix)) }, "can't be read"},
		{"a damaged key", func(t *testing.T, s *Store, _ string) error {
			return os.WriteFile(s.beside(keySuffix), []byte("PRIVATE"), 0o600)
		}, "is damaged"},
		{"another key", func(t *testing.T, s *Store, _ string) error {
			signing, _, err := ledger.NewKey(ledger.OriginOf(s.origin))
			return errors.Join(err, os.WriteFile(s.beside(keySuffix), []byte(signing), 0o600))
		}, "not that of this store"},
	} {
		t.Run(c.name, func(t *testing.T) {
			folder := t.TempDir()
			s := filled(t, folder, 4)
			sign(t, s)
			closed(t, s)
			older := filepath.Join(t.TempDir(), "older")
			copyFile(t, filepath.Join(folder, fileName), older)
			s = filled(t, folder, 3)
			outside := sign(t, s)
			if err := s.Commit(step(s, 7)); err != nil { // notes what was signed
				t.Fatal(err)
			}
			closed(t, s)
			if err := c.change(t, s, older); err != nil {
				t.Fatal(err)
			}
			_, err := Open(folder, Options{})
			if err == nil || !strings.Contains(err.Error(), c.says) || !strings.Contains(err.Error(), "new origin") || errors.Is(err, ErrStorage) {
				t.Fatalf("%v", err)
			}
			goesOn(t, folder, outside, c.name == "an older copy")
		})
	}
}

// goesOn opens a refused store under a new origin.
func goesOn(t *testing.T, folder string, outside []byte, lost bool) {
	t.Helper()
	s, err := Open(folder, Options{NewOrigin: &NewOrigin{Why: "restored", By: "R. Vale", At: time.Unix(9, 0).UTC()}})
	if err != nil {
		t.Fatal(err)
	}
	from := s.Next()
	if err := s.Commit(step(s, 1)); err != nil {
		t.Fatal(err)
	}
	sign(t, s)
	closed(t, s)
	s = open(t, folder)
	defer s.Close()
	origins, err := s.Origins()
	if err != nil || len(origins) != 2 || origins[1].ID != s.Origin() || origins[0].ID == s.Origin() ||
		origins[1].From != from || origins[1].Because.By != "R. Vale" {
		t.Fatalf("%+v %v", origins, err)
	}
	if _, err := s.Verify(Verification{}); err != nil {
		t.Error(err)
	}
	_, err = s.Verify(Verification{Signed: [][]byte{outside}})
	switch {
	case !lost && err != nil:
		t.Errorf("a checkpoint of the origin before: %v", err)
	case lost && (!errors.Is(err, ErrNotAsSigned) || !strings.Contains(err.Error(), "R. Vale")):
		t.Errorf("a checkpoint of records that are lost: %v", err)
	}
}

// Before it signs, the store counts again what it signed last: a tree that was changed
// meanwhile is never signed.
func TestNeverSignsAnotherBeginning(t *testing.T) {
	s := filled(t, t.TempDir(), 4)
	sign(t, s)
	tamper(t, s, func(tx *bolt.Tx) error {
		return tx.Bucket(treeBucket).Put(number(3), bytes.Repeat([]byte{1}, 3*ledger.HashSize))
	})
	if err := s.Commit(step(s, 9)); err != nil {
		t.Fatal(err)
	}
	_, err := s.Checkpoint()
	if !errors.Is(err, ErrNotAsSigned) {
		t.Fatalf("%v", err)
	}
	if again := s.Commit(step(s, 9)); again != err {
		t.Errorf("it goes on: %v", again)
	}
}

// A checkpoint from elsewhere, and a key that isn't the store's, are refused.
func TestNotItsOwn(t *testing.T) {
	s, other := filled(t, t.TempDir(), 2), filled(t, t.TempDir(), 2)
	defer s.Close()
	defer other.Close()
	for i, v := range []Verification{
		{Signed: [][]byte{sign(t, other)}},
		{Verifying: []string{other.Verifying()}},
		{Signed: [][]byte{[]byte("hello\n")}},
	} {
		if _, err := s.Verify(v); !errors.Is(err, ErrNotAsSigned) {
			t.Errorf("%d: %v", i, err)
		}
	}
}

// BenchmarkTree is what a committed batch of 12 rows and ten looks costs with the tree and
// without, and with a checkpoint after each.
func BenchmarkTree(b *testing.B) {
	for _, c := range []struct {
		name       string
		bare, sign bool
	}{{"without", true, false}, {"with", false, false}, {"signed each time", false, true}} {
		b.Run(c.name, func(b *testing.B) {
			s := open(b, b.TempDir())
			defer s.Close()
			s.bare = c.bare
			for b.Loop() {
				if err := s.Commit(typical(s)); err != nil {
					b.Fatal(err)
				}
				if c.sign {
					sign(b, s)
				}
			}
		})
	}
}

// BenchmarkVerify is what a record of 12 rows costs to verify, but for the engine.
func BenchmarkVerify(b *testing.B) {
	s := open(b, b.TempDir())
	defer s.Close()
	const records = 20_000
	for s.Next() < records {
		var st Step
		for i := range uint64(1000) {
			st.Entries = append(st.Entries, batchWithLooks(s.Next()+i, 12, 10))
		}
		if err := s.Commit(st); err != nil {
			b.Fatal(err)
		}
	}
	for _, decoded := range []bool{false, true} {
		b.Run(fmt.Sprintf("decoded=%v", decoded), func(b *testing.B) {
			for b.Loop() {
				_, err := s.Verify(Verification{Visit: func(_ uint64, record []byte) error {
					if !decoded {
						return nil
					}
					_, err := decode(record)
					return err
				}})
				if err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(b.Elapsed().Microseconds())/float64(b.N)/records, "µs/record")
		})
	}
}
