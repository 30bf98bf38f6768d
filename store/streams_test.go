package store

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"slices"
	"testing"

	"pgregory.net/rapid"

	"steelyard/rules"
)

// packedFrame is a frame with records.
func packedFrame(records [][]byte) []byte {
	var s streams
	for _, r := range records {
		s.add(r)
	}
	return s.pack(nil)
}

func encoded(t testing.TB, e Entry) []byte {
	t.Helper()
	record, err := encode(&e)
	if err != nil {
		t.Fatal(err)
	}
	return record
}

// Whatever a record says, and whatever its bytes are, it comes back from a frame to the bit: those
// that follow the format are cut, and the others kept whole.
func TestFrameHoldsAnyRecord(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		records := rapid.SliceOfN(rapid.Custom(anyRecord), 1, 40).Draw(t, "records")
		back, err := unpack(packedFrame(records))
		if err != nil || !slices.EqualFunc(back, records, bytes.Equal) {
			t.Fatalf("%d records of %d, %v", len(back), len(records), err)
		}
	})
}

// anyRecord is a record, perhaps damaged, or any bytes.
func anyRecord(t *rapid.T) []byte {
	e := Entry{}
	if rapid.IntRange(0, 3).Draw(t, "kind") > 0 {
		e = batchWithLooks(rapid.Uint64Range(0, 1000).Draw(t, "index"), rapid.IntRange(0, 30).Draw(t, "rows"), rapid.IntRange(0, 3).Draw(t, "looks"))
	}
	if b := e.Event.Batch; b != nil {
		if rapid.Bool().Draw(t, "no digest") {
			b.SHA256 = rapid.SampledFrom([]string{"", "00ff", "Z"}).Draw(t, "digest")
		}
		if rapid.Bool().Draw(t, "of") {
			b.Series[0].Of = []float64{0.1, 3, 1e300}
		}
		if rapid.Bool().Draw(t, "beyond") {
			b.Series[0].Beyond = []rules.Bound{{Row: 1, Limit: 40, Above: true}}
		}
		if rapid.Bool().Draw(t, "nothing") {
			b.Rows, b.Series, e.Outcomes.Looks = rules.Rows{}, nil, []rules.Look{}
		}
	}
	record, err := encode(&e)
	if err != nil {
		t.Fatal(err)
	}
	switch rapid.IntRange(0, 5).Draw(t, "damage") {
	case 0:
		return rapid.SliceOf(rapid.Byte()).Draw(t, "bytes")
	case 1:
		bit := rapid.IntRange(0, 8*len(record)-1).Draw(t, "bit")
		record[bit/8] ^= 1 << (bit % 8)
	case 2:
		record = record[:rapid.IntRange(0, len(record)).Draw(t, "length")]
	case 3:
		record = append(record, rapid.SliceOf(rapid.Byte()).Draw(t, "more")...)
	}
	return record
}

// A record as the program writes it is cut: kept whole it would take more space.
func TestFrameCutsRecords(t *testing.T) {
	var s streams
	for i := range uint64(20) {
		s.add(encoded(t, batchWithLooks(i, int(i), int(i%4))))
		s.add(encoded(t, Entry{Event: rules.Event{Sealed: &rules.Sealed{From: i, SHA256: fmt.Sprintf("%064x", i)}}}))
		s.add(encoded(t, Entry{Event: rules.Event{Stopped: &rules.Stopped{}}, Outcomes: rules.Outcomes{Looks: []rules.Look{}}}))
		beyond := batchWithLooks(i, 2, 1)
		beyond.Event.Batch.Series[0].Beyond = []rules.Bound{{Row: 1, Limit: 40, Above: true}}
		s.add(encoded(t, beyond))
	}
	for b := s[shapes]; len(b) > 0; {
		shape, n := binary.Uvarint(b)
		if b = b[n:]; shape > 1 {
			t.Fatalf("a record of %d bytes is kept whole", shape-2)
		}
	}
}

// A damaged frame is refused or gives records; it never ends the program. What the records are is
// for the tree to say.
func FuzzFrame(f *testing.F) {
	var records [][]byte
	for i := range uint64(6) {
		records = append(records, encoded(f, batchWithLooks(i, 3, 2)))
	}
	f.Add(packedFrame(records))
	f.Add(packedFrame([][]byte{{}, {1, 2}}))
	f.Fuzz(func(t *testing.T, b []byte) {
		_, _ = unpack(b)
	})
}

// BenchmarkFrame is how many bytes a measured row (serial, time, one value) takes in a frame, plain
// and packed, and what it takes to read it there. Each look takes some 16 bytes: two logarithms.
func BenchmarkFrame(b *testing.B) {
	for _, c := range []struct{ rows, looks int }{{12, 0}, {12, 1}, {12, 2}, {12, 10}, {50, 2}, {200, 2}, {200, 10}} {
		b.Run(fmt.Sprintf("rows=%d/looks=%d", c.rows, c.looks), func(b *testing.B) {
			var records [][]byte
			plain := 0
			for i := 0; i < frameRecords && plain < frameBytes; i++ {
				record := encoded(b, batchWithLooks(uint64(i), c.rows, c.looks))
				records, plain = append(records, record), plain+len(record)
			}
			frame := packedFrame(records)
			for b.Loop() {
				if _, err := unpack(frame); err != nil {
					b.Fatal(err)
				}
			}
			rows := float64(len(records) * c.rows)
			b.ReportMetric(float64(plain)/rows, "B/row-plain")
			b.ReportMetric(float64(len(frame))/rows, "B/row")
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/rows, "ns/row")
		})
	}
}
