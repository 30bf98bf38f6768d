package posterior

import (
	"encoding/binary"
	"errors"
	"math"
)

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
