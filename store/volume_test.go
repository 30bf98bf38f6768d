package store

import (
	"bytes"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"steelyard/rules"
)

// sealed is a store of n records of which those before to are in volumes, each of at most some records.
func sealed(t testing.TB, folder string, n, each int) *Store {
	t.Helper()
	s := filled(t, folder, n)
	for s.sealedTo()+uint64(each) < s.Next()-3 {
		sealNext(t, s, s.sealedTo()+uint64(each))
	}
	return s
}

func sealNext(t testing.TB, s *Store, to uint64) {
	t.Helper()
	v, err := s.WriteVolume(to)
	if err != nil || v == nil {
		t.Fatal(v, err)
	}
	e := Entry{Event: rules.Event{Index: s.Next(), Sealed: &rules.Sealed{From: v.From, To: v.To, File: v.File, SHA256: v.SHA256}}}
	if err := s.Commit(Step{Entries: []Entry{e}, Sealed: v}); err != nil {
		t.Fatal(err)
	}
}

// all are the bytes of every record.
func all(t testing.TB, s *Store) (list [][]byte) {
	t.Helper()
	if err := s.Records(0, s.Next(), func(_ uint64, r []byte) error {
		list = append(list, bytes.Clone(r))
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return list
}

// Records read the same before and after they were moved into volumes, after a new start, from a copy, and in a backup.
func TestVolumesReadAsBefore(t *testing.T) {
	folder := t.TempDir()
	s := filled(t, folder, 60)
	before := all(t, s)
	sealNext(t, s, 20)
	sealNext(t, s, 45)
	sealNext(t, s, 46)
	same := func(what string, s *Store) {
		t.Helper()
		for i, r := range all(t, s)[:60] {
			if !bytes.Equal(r, before[i]) {
				t.Errorf("%s: record %d is not what it was", what, i)
			}
		}
		n := 0
		if err := s.Records(19, 46, func(i uint64, r []byte) error {
			n++
			if !bytes.Equal(r, before[i]) {
				t.Errorf("%s: record %d, asked for from 19 on", what, i)
			}
			return nil
		}); err != nil || n != 27 {
			t.Errorf("%s: %d records from 19 to 46, %v", what, n, err)
		}
		if _, err := s.Verify(Verification{}); err != nil {
			t.Errorf("%s: %v", what, err)
		}
	}
	same("at once", s)
	if v, err := s.WriteVolume(46); v != nil || err != nil {
		t.Errorf("nothing to move: %+v, %v", v, err)
	}
	if p, err := s.Prove(3); err != nil {
		t.Error(err)
	} else if _, err := p.Check(before[3], s.Verifying()); err != nil {
		t.Error(err)
	}
	backup := filepath.Join(t.TempDir(), "backup")
	if err := errors.Join(s.Backup(backup), s.Close()); err != nil {
		t.Fatal(err)
	}
	s = open(t, folder)
	same("after a start", s)
	// What a crash leaves between the file and the transaction is replaced.
	if _, err := s.WriteVolume(50); err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	s = open(t, folder)
	sealNext(t, s, 50)
	same("after a file that no store knew", s)
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	c, err := OpenToRead(backup)
	if err != nil {
		t.Fatal(err)
	}
	same("in the backup", c)
	if err := c.Close(); err != nil {
		t.Fatal(err)
	}
}

// A volume that is missing or damaged is named, and everything else still works: what is behind it is read, and more is
// committed.
func TestVolumeMissing(t *testing.T) {
	folder := t.TempDir()
	s := sealed(t, folder, 40, 12)
	defer s.Close()
	v := s.Volumes()[0]
	if err := os.Remove(filepath.Join(folder, volumesFolder, v.File)); err != nil {
		t.Fatal(err)
	}
	s.volumes.last.file = ""
	err := s.Records(0, s.Next(), func(uint64, []byte) error { return nil })
	if !errors.Is(err, ErrVolume) || errors.Is(err, ErrStorage) || !strings.Contains(err.Error(), v.File) {
		t.Errorf("%v", err)
	}
	if err := s.Records(v.To, s.Next(), func(uint64, []byte) error { return nil }); err != nil {
		t.Error(err)
	}
	if err := s.Commit(step(s, 200)); err != nil {
		t.Error(err)
	}
	if _, err := s.Verify(Verification{}); !errors.Is(err, ErrNotAsSigned) || !strings.Contains(err.Error(), v.File) {
		t.Errorf("%v", err)
	}
}

// Any single bit of a volume: Verify notices each.
func TestVolumeBits(t *testing.T) {
	folder := t.TempDir()
	s := sealed(t, folder, 20, 16)
	defer s.Close()
	path := filepath.Join(folder, volumesFolder, s.Volumes()[0].File)
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	bits := 8 * len(text)
	for bit := 0; bit < bits; bit += 1 + bits/4000 {
		changed := bytes.Clone(text)
		changed[bit/8] ^= 1 << (bit % 8)
		if err := os.WriteFile(path, changed, 0o600); err != nil {
			t.Fatal(err)
		}
		s.volumes.last.file, s.volumes.indexes = "", map[string][]frame{}
		if _, err := s.Verify(Verification{}); !errors.Is(err, ErrNotAsSigned) {
			t.Fatalf("bit %d of %d: %v", bit, bits, err)
		}
	}
	for _, cut := range []int{0, 1, len(text) / 2, len(text) - 1} {
		if err := os.WriteFile(path, text[:cut], 0o600); err != nil {
			t.Fatal(err)
		}
		s.volumes.last.file, s.volumes.indexes = "", map[string][]frame{}
		if err := s.Records(0, 3, func(uint64, []byte) error { return nil }); !errors.Is(err, ErrVolume) {
			t.Errorf("cut to %d bytes: %v", cut, err)
		}
	}
}

// Reading goes on while records are moved.
func TestReadWhileSealing(t *testing.T) {
	s := filled(t, t.TempDir(), 300)
	defer s.Close()
	stop, done := make(chan struct{}), make(chan error, 1)
	go func() {
		random := rand.New(rand.NewPCG(1, 1))
		for {
			select {
			case <-stop:
				done <- nil
				return
			default:
			}
			from := uint64(random.IntN(300))
			if err := s.Records(from, from+20, func(uint64, []byte) error { return nil }); err != nil {
				done <- err
				return
			}
		}
	}()
	for to := uint64(10); to < 290; to += 10 {
		sealNext(t, s, to)
	}
	close(stop)
	if err := <-done; err != nil {
		t.Error(err)
	}
}

// BenchmarkVolume prints the bytes that a measured row takes in a volume: serial, time and one value; files of 12, 200 and
// 1000 rows with one look each.
func BenchmarkVolume(b *testing.B) {
	for _, rows := range []int{12, 200, 1000} {
		b.Run(fmt.Sprintf("%d rows a file", rows), func(b *testing.B) {
			s := open(b, b.TempDir())
			defer s.Close()
			n := 60000 / rows
			for range n {
				st := step(s, 0)
				st.Files = nil
				st.Entries[0] = batchWithLooks(s.Next(), rows, 1)
				if err := s.Commit(st); err != nil {
					b.Fatal(err)
				}
			}
			var v *Volume
			for b.Loop() {
				var err error
				if v, err = s.WriteVolume(s.Next()); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(v.Size)/float64(n*rows), "bytes/row")
		})
	}
}
