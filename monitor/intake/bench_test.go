package intake

import (
	"bytes"
	"crypto/sha256"
	"encoding/csv"
	"fmt"
	"io"
	"math/rand/v2"
	"strconv"
	"strings"
	"testing"
	"time"

	"steelyard/monitor/config"
)

// measured is a file as rigs write them: time, serial, value.
func measured(rows int, quoted bool) []byte {
	r := rand.New(rand.NewPCG(1, 2))
	var b bytes.Buffer
	b.WriteString("Tested at,Serial,Head kPa\n")
	at := time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC)
	form := "%s,P-%07d,%.4f\n"
	if quoted {
		form = "%s,\"P-%07d\",%.4f\n"
	}
	for i := range rows {
		at = at.Add(time.Second)
		fmt.Fprintf(&b, form, at.Format("2006-01-02T15:04:05.000Z07:00"), i, 33.4+0.6*r.NormFloat64())
	}
	return b.Bytes()
}

func threeColumns(s *config.Source) {
	s.Columns = config.Columns{Time: "Tested at", Serial: "Serial", LineIs: "L1", Measured: []config.Measured{measuring("head", "Head kPa")}}
}

// plainWay reads the same with the standard library and nothing else: SHA-256, encoding/csv,
// time.Parse, strconv. It checks no more than those do.
func plainWay(content []byte) (times []int64, serials []string, values []float64, err error) {
	_ = sha256.Sum256(content)
	r := csv.NewReader(bytes.NewReader(content))
	r.ReuseRecord = true
	if _, err = r.Read(); err != nil {
		return nil, nil, nil, err
	}
	for {
		record, err := r.Read()
		if err == io.EOF {
			return times, serials, values, nil
		}
		if err != nil {
			return nil, nil, nil, err
		}
		at, err := time.Parse(time.RFC3339, record[0])
		if err != nil {
			return nil, nil, nil, err
		}
		x, err := strconv.ParseFloat(record[2], 64)
		if err != nil {
			return nil, nil, nil, err
		}
		times, serials, values = append(times, at.UnixNano()), append(serials, strings.Clone(record[1])), append(values, x)
	}
}

// BenchmarkRead compares Reader.Read with the plain way on the same bytes in memory.
func BenchmarkRead(b *testing.B) {
	for _, rows := range []int{12, 1000, 1_000_000} {
		for _, quoted := range []bool{false, true} {
			content := measured(rows, quoted)
			name := fmt.Sprintf("rows=%d/quoted=%v/", rows, quoted)
			perRow := func(b *testing.B) {
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(rows), "ns/row")
			}
			b.Run(name+"reader", func(b *testing.B) {
				reader := NewReader(someSource(threeColumns), somePlan())
				b.SetBytes(int64(len(content)))
				b.ReportAllocs()
				for b.Loop() {
					if g := reader.Read("a.csv", written, content); g.Batch == nil || len(g.Batch.Rows.Line) != rows {
						b.Fatal(g.Held)
					}
				}
				perRow(b)
			})
			b.Run(name+"plain", func(b *testing.B) {
				b.SetBytes(int64(len(content)))
				b.ReportAllocs()
				for b.Loop() {
					if _, _, values, err := plainWay(content); err != nil || len(values) != rows {
						b.Fatal(err)
					}
				}
				perRow(b)
			})
		}
	}
}

// TestReaderAgainstPlainWay: the two of BenchmarkRead read the same.
func TestReaderAgainstPlainWay(t *testing.T) {
	for _, quoted := range []bool{false, true} {
		content := measured(1000, quoted)
		times, serials, values, err := plainWay(content)
		if err != nil {
			t.Fatal(err)
		}
		b := NewReader(someSource(threeColumns), somePlan()).Read("a.csv", written, content).Batch
		for i := range times {
			if b.Rows.Time[i] != times[i] || b.Rows.Serial[i] != serials[i] || b.Series[0].Value[i] != values[i] || b.Rows.Line[i] != i+2 {
				t.Fatalf("row %d: %v %q %v, want %v %q %v", i, b.Rows.Time[i], b.Rows.Serial[i], b.Series[0].Value[i], times[i], serials[i], values[i])
			}
		}
	}
}
