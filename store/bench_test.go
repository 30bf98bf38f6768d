package store

import (
	"bytes"
	"compress/flate"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"
	"time"

	"steelyard/rules"
)

// batchWithLooks is an entry as the daemon makes one: a file of some rows, and as many looks
// as rules. The values have a spread of 0.6 and three decimals, the units follow each other
// after 30 to 44 s, and one in ten serial numbers is left out.
func batchWithLooks(index uint64, rows, looks int) Entry {
	random := rand.New(rand.NewPCG(index, 0))
	b := &rules.Batch{Source: "rig1", File: fmt.Sprintf("r1_%08d.csv", index), To: int64(41 * rows), Series: []rules.Series{{Process: "head.L1"}},
		SHA256:  fmt.Sprintf("%016x%016x%016x%016x", random.Uint64(), random.Uint64(), random.Uint64(), random.Uint64()),
		Written: time.Unix(1_772_448_060+60*int64(index), random.Int64N(1e9))}
	e := Entry{Event: rules.Event{Index: index, At: b.Written.Add(time.Duration(2e9 + random.Int64N(1e8))), Batch: b}}
	at, serial, s := 1_772_448_000+37*int64(index)*int64(rows), int64(index)*int64(rows)*11/10, &b.Series[0]
	for i := range rows {
		at, serial = at+30+random.Int64N(15), serial+1
		if random.IntN(10) == 0 {
			serial++
		}
		b.Rows.Line, b.Rows.Time = append(b.Rows.Line, i+2), append(b.Rows.Time, at*1e9)
		b.Rows.Serial = append(b.Rows.Serial, fmt.Sprintf("TP26-%08d", serial))
		s.Row, s.Value = append(s.Row, i), append(s.Value, math.Round(1000*(33.4+0.6*random.NormFloat64()))/1000)
	}
	for i := range looks {
		p := random.Float64()
		e.Outcomes.Looks = append(e.Outcomes.Looks, rules.Look{Rule: i, LogFor: math.Log(p), LogAgainst: math.Log1p(-p)})
	}
	return e
}

// BenchmarkCommit is one step with a batch of 12 rows, ten looks, a piece of state and a
// message, until it is on the disk.
func BenchmarkCommit(b *testing.B) {
	s := open(b, b.TempDir())
	defer s.Close()
	for b.Loop() {
		if err := s.Commit(typical(s)); err != nil {
			b.Fatal(err)
		}
	}
}

// typical is the step of a batch of 12 rows with ten looks, a piece of state and a message.
func typical(s *Store) Step {
	st := step(s, 0)
	st.Entries[0] = batchWithLooks(s.Next(), 12, 10)
	st.Files[0].SHA256 = [32]byte{byte(s.Next()), byte(s.Next() >> 8), byte(s.Next() >> 16)}
	st.Pieces["process/head.L1"] = make([]byte, 1000)
	return st
}

// BenchmarkRecord is what a record takes to write and to read, and how many bytes a measured
// row (serial, time, one value) takes in it, and compressed together with others (DEFLATE).
func BenchmarkRecord(b *testing.B) {
	for _, c := range []struct{ rows, looks int }{{12, 10}, {12, 2}, {50, 10}, {200, 10}, {5000, 10}} {
		b.Run(fmt.Sprintf("rows=%d/looks=%d", c.rows, c.looks), func(b *testing.B) {
			var all bytes.Buffer
			z, err := flate.NewWriter(&all, flate.BestCompression)
			if err != nil {
				b.Fatal(err)
			}
			records := max(50_000/c.rows, 1)
			plain := 0
			for i := range records {
				e := batchWithLooks(uint64(i), c.rows, c.looks)
				record, err := encode(&e)
				if err == nil {
					_, err = z.Write(record)
				}
				if err != nil {
					b.Fatal(err)
				}
				plain += len(record)
			}
			if err := z.Close(); err != nil {
				b.Fatal(err)
			}
			e := batchWithLooks(1, c.rows, c.looks)
			for b.Loop() {
				record, err := encode(&e)
				if err == nil {
					_, err = decode(record)
				}
				if err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(plain)/float64(records*c.rows), "B/row")
			b.ReportMetric(float64(all.Len())/float64(records*c.rows), "B/row-compressed")
		})
	}
}

// BenchmarkFiles is what it takes to read what is remembered of 100,000 files.
func BenchmarkFiles(b *testing.B) {
	s := open(b, b.TempDir())
	defer s.Close()
	for i := 0; i < 100_000; {
		var st Step
		for range 10_000 {
			st.Files = append(st.Files, FileMemory{Source: "rig", File: fmt.Sprintf("2026/r1_%08d.csv", i), Size: 500,
				SHA256: [32]byte{byte(i), byte(i >> 8), byte(i >> 16)}, Written: 1_772_448_061_000_000_000, Batch: true, Counted: true})
			i++
		}
		if err := s.Commit(st); err != nil {
			b.Fatal(err)
		}
	}
	for b.Loop() {
		n := 0
		if err := s.Files("rig", func(FileMemory) { n++ }); err != nil || n != 100_000 {
			b.Fatal(n, err)
		}
	}
}

// BenchmarkRenew is a start after an end without order, with a store of 100 MB.
func BenchmarkRenew(b *testing.B) {
	folder := b.TempDir()
	s := open(b, folder)
	for range 100 {
		var st Step
		for i := range uint64(100) {
			st.Entries = append(st.Entries, batchWithLooks(s.Next()+i, 2000, 10))
		}
		if err := s.Commit(st); err != nil {
			b.Fatal(err)
		}
		if info, err := os.Stat(filepath.Join(folder, fileName)); err != nil || info.Size() > 100<<20 {
			break
		}
	}
	for b.Loop() {
		if err := s.db.Close(); err != nil {
			b.Fatal(err)
		}
		if s = open(b, folder); s.Recovered() == "" {
			b.Fatal("it was not renewed")
		}
	}
	info, err := os.Stat(filepath.Join(folder, fileName))
	if err != nil {
		b.Fatal(err)
	}
	b.ReportMetric(float64(info.Size())/1e6, "MB")
	if err := s.Close(); err != nil {
		b.Fatal(err)
	}
}

// BenchmarkJournal is what it takes to read 5000 records of 12 rows from the journal.
func BenchmarkJournal(b *testing.B) {
	s := open(b, b.TempDir())
	defer s.Close()
	var st Step
	for i := range uint64(5000) {
		st.Entries = append(st.Entries, batchWithLooks(i, 12, 10))
	}
	if err := s.Commit(st); err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		if err := s.Journal(0, 5000, func(rules.Event, rules.Outcomes) error { return nil }); err != nil {
			b.Fatal(err)
		}
	}
}
