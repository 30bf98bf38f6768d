package posterior

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"slices"
)

// AppendBinary writes the memory: a version byte, then by what is remembered
//
//	segment, discount  Sums
//	units              first (uvarint), count (uvarint), a byte that says whether `of` follows, values, of
//	hours              now (varint), count (uvarint), then for each step its number (varint) and Sums
//
// with every float64 as 8 bytes, big-endian. A reader refuses a version it does not know.
func (m *Memory) AppendBinary(b []byte) ([]byte, error) {
	b = append(b, memoryVersion)
	switch {
	case m.remember.Units != 0:
		b = slices.Grow(b, 32+16*len(m.values))
		b = appendUvarint(b, uint64(m.first))
		b = appendUvarint(b, uint64(len(m.values)))
		ones := !slices.ContainsFunc(m.of, func(o float64) bool { return o != 1 })
		b = append(b, map[bool]byte{true: 0, false: 1}[ones])
		b = appendFloats(b, m.values...)
		if !ones {
			b = appendFloats(b, m.of...)
		}
	case m.remember.Hours != 0:
		b = appendVarint(b, m.now)
		b = appendUvarint(b, uint64(len(m.steps)))
		for _, t := range m.steps {
			b = appendSums(appendVarint(b, t.at), t.sums)
		}
	default:
		b = appendSums(b, m.sums)
	}
	return b, nil
}

const memoryVersion = 1

// UnmarshalBinary takes what AppendBinary of a memory with the same family and Remember wrote.
func (m *Memory) UnmarshalBinary(b []byte) error {
	r := &reader{b: b}
	if v := r.byte(); v != memoryVersion {
		return fmt.Errorf("memory of version %d: version %d is what this program reads", v, memoryVersion)
	}
	*m = *NewMemory(m.family, m.remember)
	switch {
	case m.remember.Units != 0:
		m.readUnits(r)
	case m.remember.Hours != 0:
		m.readSteps(r)
	default:
		m.sums = r.sums()
	}
	if r.err == nil && len(r.b) > 0 {
		r.err = fmt.Errorf("memory: %d bytes too many", len(r.b))
	}
	if r.err != nil {
		*m = *NewMemory(m.family, m.remember)
	}
	return r.err
}

func (m *Memory) readUnits(r *reader) {
	first, n := r.uvarint(), r.count(8)
	isCounted := r.byte() == 1
	values, of := r.floats(n), slices.Repeat([]float64{1}, n)
	if isCounted {
		of = r.floats(n)
	}
	if r.err == nil && (first > math.MaxInt64/2 || n > m.remember.Units) {
		r.err = fmt.Errorf("memory: %d observations from place %d on do not fit a window of %d", n, first, m.remember.Units)
	}
	m.first = int64(first)
	for i := 0; i < n && r.err == nil; i++ {
		if r.err = m.family.Accepts(values[i], of[i]); r.err == nil {
			m.keep(values[i], of[i])
		}
	}
	if r.err == nil {
		m.trim()
	}
}

func (m *Memory) readSteps(r *reader) {
	m.now = r.varint()
	last := m.now - windowSteps
	for n := r.count(1); n > 0 && r.err == nil; n-- {
		t := step{r.varint(), r.sums()}
		if r.err == nil && (t.at <= last || t.at > m.now) {
			r.err = fmt.Errorf("memory: step %d of time is out of its order or its window", t.at)
		}
		m.steps, last = append(m.steps, t), t.at
	}
	if r.err == nil && m.now < beforeTime {
		r.err = fmt.Errorf("memory: step %d of time is before all time", m.now)
	}
}

func appendUvarint(b []byte, x uint64) []byte { return binary.AppendUvarint(b, x) }
func appendVarint(b []byte, x int64) []byte   { return binary.AppendVarint(b, x) }

func appendFloats(b []byte, xs ...float64) []byte {
	for _, x := range xs {
		b = binary.BigEndian.AppendUint64(b, math.Float64bits(x))
	}
	return b
}

func appendSums(b []byte, s Sums) []byte {
	return appendFloats(b, s.N, s.Mean, s.MeanLow, s.SS, s.SSLow, s.Total, s.Exposure)
}

var errShort = errors.New("memory: the bytes end too soon")

// reader takes values off the front of b; after the first error it gives zeros.
type reader struct {
	b   []byte
	err error
}

func (r *reader) take(n int) []byte {
	if r.err != nil || n > len(r.b) {
		r.err = errShort
		return make([]byte, min(n, 8))
	}
	taken := r.b[:n]
	r.b = r.b[n:]
	return taken
}

func (r *reader) byte() byte { return r.take(1)[0] }

func (r *reader) uvarint() uint64 {
	x, n := binary.Uvarint(r.b)
	if n <= 0 || r.err != nil {
		r.err = errShort
		return 0
	}
	r.b = r.b[n:]
	return x
}

func (r *reader) varint() int64 {
	x, n := binary.Varint(r.b)
	if n <= 0 || r.err != nil {
		r.err = errShort
		return 0
	}
	r.b = r.b[n:]
	return x
}

// count reads how many things of at least size bytes follow.
func (r *reader) count(size int) int {
	n := r.uvarint()
	if n > uint64(len(r.b)/size) {
		r.err = errShort
		return 0
	}
	return int(n)
}

func (r *reader) floats(n int) []float64 {
	if r.err != nil || n > len(r.b)/8 {
		r.err = errShort
		return nil
	}
	xs := make([]float64, n)
	for i := range xs {
		xs[i] = math.Float64frombits(binary.BigEndian.Uint64(r.take(8)))
	}
	return xs
}

func (r *reader) sums() Sums {
	x := r.floats(7)
	if x == nil {
		return Sums{}
	}
	s := Sums{N: x[0], Mean: x[1], MeanLow: x[2], SS: x[3], SSLow: x[4], Total: x[5], Exposure: x[6]}
	if !finiteSums(s) {
		r.err = errors.New("memory: a statistic is not a finite number")
	}
	return s
}

// finiteSums says whether sums could have come from measurements.
func finiteSums(s Sums) bool {
	for _, x := range []float64{s.N, s.Mean, s.MeanLow, s.SS, s.SSLow, s.Total, s.Exposure} {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return false
		}
	}
	return true
}
