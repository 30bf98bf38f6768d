package store

import (
	"bytes"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"fmt"
)

// In a volume the bytes of some hundred records stand by kind, because like compresses with
// like: all heads in one stream, all steps of serial numbers in another, the bytes of all
// values by their place in others. A record is cut where its format (record.go, columns.go)
// says that something ends, and each part goes to the end of its stream; read back, the same
// walk takes the parts from the streams. Nothing is written a second time in another way, so
// that what comes back is the record to the bit, whatever it says.
//
// The first stream holds for each record 0, where it is cut so; 1, where its digest is cut out of
// its head besides; or its length + 2 (uvarint), where it does not follow the format and stands
// whole in the stream of heads.
//
// A frame of a volume is the streams in this order: of each its length there (uvarint) and as many
// bytes, which are a zstd frame (RFC 8878, with its checksum) of it, or nothing where it is empty.
const (
	shapes     = iota
	heads      // version, length of the head, the head without its digest
	digests    // what "sha256" says first in the head, 32 bytes
	lineParts  // Line
	timeHeads  // of Time: number of values, unit, first value
	timeSteps  // of Time: the other values
	textSteps  // of Serial: number of values, how each is written
	textParts  // of Serial: bytes that are written
	names      // of the series: their number, Process
	rowParts   // Row
	valueHeads // of Value: number of values, form, smallest, width
	exposures  // Of
	bounds     // Beyond
	lookParts  // Rule and Withheld, and of LogFor and LogAgainst all but the bytes of the values
	valueBytes // of Value by place, the least significant first
	lookBytes  = valueBytes + 8
	manyStream = lookBytes + 8
)

type streams [manyStream][]byte

// walk follows the format of records. Cutting, it takes the parts from a record to the streams;
// joining, from the streams to a record.
type walk struct {
	streams *streams
	record  []byte // cutting: what is left of it; joining: what there is of it
	joining bool
	digest  bool // is cut out of the head
	err     error
}

var errFormat = errors.New("a record does not follow the format")

// take moves n bytes.
func (w *walk) take(stream int, n uint64) []byte {
	from := &w.record
	if w.joining {
		from = &w.streams[stream]
	}
	if w.err != nil || n > uint64(len(*from)) {
		w.err = errFormat
		return nil
	}
	b := (*from)[:n:n]
	*from = (*from)[n:]
	if w.joining {
		w.record = append(w.record, b...)
	} else {
		w.streams[stream] = append(w.streams[stream], b...)
	}
	return b
}

func (w *walk) byte(stream int) byte {
	if b := w.take(stream, 1); b != nil {
		return b[0]
	}
	return 0
}

// uvarint moves a varint and says what it is, unsigned.
func (w *walk) uvarint(stream int) uint64 {
	from := w.record
	if w.joining {
		from = w.streams[stream]
	}
	v, n := binary.Uvarint(from)
	if n <= 0 {
		w.err = errFormat
		return 0
	}
	w.take(stream, uint64(n))
	return v
}

func (w *walk) varints(stream int, n uint64) {
	for ; n > 0 && w.err == nil; n-- {
		w.uvarint(stream)
	}
}

// count moves the number of values of a column.
func (w *walk) count(stream int) uint64 {
	n := w.uvarint(stream)
	return n - min(n, 1)
}

// absent moves the number of values of a column, and says whether there is no such column.
func (w *walk) absent(stream int) (n uint64, isNil bool) {
	n = w.uvarint(stream)
	return n - min(n, 1), n == 0
}

func (w *walk) ints(stream int) { w.varints(stream, w.count(stream)) }

func (w *walk) times() {
	n := w.count(timeHeads)
	if n == 0 {
		return
	}
	w.byte(timeHeads)
	w.uvarint(timeHeads)
	w.varints(timeSteps, n-1)
}

func (w *walk) texts(how, parts int) {
	for n := w.count(how); n > 0 && w.err == nil; n-- {
		if w.uvarint(how) == textWritten {
			w.uvarint(how)
			w.take(parts, w.uvarint(how))
		}
	}
}

// floats moves a column of floats, with the bytes of its values by place from one stream on.
func (w *walk) floats(head, planes int) {
	n := w.count(head)
	if n == 0 {
		return
	}
	width := 8
	if w.byte(head) != bitsForm {
		w.uvarint(head)
		width = int(w.byte(head))
	}
	if width > 8 {
		w.err = errFormat
	}
	for place := width - 1; place >= 0 && w.err == nil; place-- {
		w.take(planes+place, n)
	}
}

// flatFloats moves a column of floats into one stream.
func (w *walk) flatFloats(stream int) {
	n := w.count(stream)
	if n == 0 {
		return
	}
	width := uint64(8)
	if w.byte(stream) != bitsForm {
		w.uvarint(stream)
		width = uint64(w.byte(stream))
	}
	if width > 8 || n > 1<<32 {
		w.err = errFormat
	}
	w.take(stream, n*width)
}

// beyond moves readings beyond a gauge's limits.
func (w *walk) beyond() {
	n, isNil := w.absent(bounds)
	if w.varints(bounds, n); isNil {
		return
	}
	w.flatFloats(bounds)
	w.ints(bounds)
}

var (
	batchMark  = []byte(`"batch":{`) // in a string its quotes would be escaped
	digestMark = []byte(`"sha256":"`)
)

const digestText = 2 * 32 // hexadecimal

// digestAt is where the text of the first digest begins in a head; -1 where there is none.
func digestAt(head []byte) int {
	at := bytes.Index(head, digestMark)
	if at < 0 {
		return -1
	}
	at += len(digestMark)
	if len(head) < at+digestText {
		return -1
	}
	for _, c := range head[at : at+digestText] {
		if (c < '0' || c > '9') && (c < 'a' || c > 'f') {
			return -1
		}
	}
	return at
}

// head moves a head of n bytes, and returns it, perhaps without its digest.
func (w *walk) head(n uint64) []byte {
	switch {
	case !w.digest:
		return w.take(heads, n)
	case w.joining && n >= digestText:
		short := w.take(heads, n-digestText)
		w.record = w.record[:len(w.record)-len(short)]
		at := bytes.Index(short, digestMark) + len(digestMark)
		digest := w.streams[digests]
		if at < len(digestMark) || len(digest) < digestText/2 {
			break
		}
		w.record = append(w.record, short[:at]...)
		w.record = hex.AppendEncode(w.record, digest[:digestText/2])
		w.record = append(w.record, short[at:]...)
		w.streams[digests] = digest[digestText/2:]
		return short
	case n <= uint64(len(w.record)):
		at := digestAt(w.record[:n])
		digest, err := hex.AppendDecode(w.streams[digests], w.record[at:at+digestText])
		if err != nil {
			break
		}
		w.streams[digests] = digest
		head := w.record[:n]
		w.streams[heads] = append(append(w.streams[heads], head[:at]...), head[at+digestText:]...)
		w.record = w.record[n:]
		return head
	}
	w.err = errFormat
	return nil
}

// all moves a record. It follows versions 2 to 4.
func (w *walk) all() error {
	version := w.byte(heads)
	head := w.head(w.uvarint(heads))
	if w.err == nil && bytes.Contains(head, batchMark) {
		w.ints(lineParts)
		w.times()
		w.texts(textSteps, textParts)
		for n := w.count(names); n > 0 && w.err == nil; n-- {
			w.texts(names, names)
			w.ints(rowParts)
			w.floats(valueHeads, valueBytes)
			w.flatFloats(exposures)
			if version == rowsVersion {
				w.beyond()
			}
		}
	}
	n, isNil := w.absent(lookParts)
	if w.varints(lookParts, n); !isNil {
		w.texts(lookParts, lookParts)
		w.floats(lookParts, lookBytes)
		w.floats(lookParts, lookBytes)
	}
	return w.err
}

// add cuts a record into the streams.
func (s *streams) add(record []byte) {
	before := *s
	shape := uint64(0)
	if n, size := headLength(record); n > 0 && digestAt(record[size:size+n]) >= 0 {
		shape = 1
	}
	w := walk{streams: s, record: record, digest: shape == 1}
	if err := w.all(); err != nil || len(w.record) > 0 {
		*s = before // what was added lies beyond the ends
		shape = uint64(len(record)) + 2
		s[heads] = append(s[heads], record...)
	}
	s[shapes] = binary.AppendUvarint(s[shapes], shape)
}

// headLength is how long the head of a record is, and where it begins; 0 where there is none.
func headLength(record []byte) (length, begins int) {
	if len(record) == 0 {
		return 0, 0
	}
	n, size := binary.Uvarint(record[1:])
	if size <= 0 || n > uint64(len(record)-1-size) {
		return 0, 0
	}
	return int(n), 1 + size
}

// next takes the next record from the streams, and appends it to all.
func (s *streams) next(all []byte) ([]byte, error) {
	shape, n := binary.Uvarint(s[shapes])
	if n <= 0 {
		return nil, errFormat
	}
	s[shapes] = s[shapes][n:]
	w := walk{streams: s, record: all, joining: true, digest: shape == 1}
	if shape >= 2 {
		w.take(heads, shape-2)
		return w.record, w.err
	}
	err := w.all()
	return w.record, err
}

// mostPlain is what a frame may take in memory, whatever a damaged file says.
const mostPlain = 1 << 30

// pack appends the streams to b as a frame, and empties them.
func (s *streams) pack(b []byte) []byte {
	var packed []byte
	for i := range s {
		packed = packed[:0]
		if len(s[i]) > 0 {
			packed = packer().EncodeAll(s[i], packed)
		}
		b = append(binary.AppendUvarint(b, uint64(len(packed))), packed...)
		s[i] = s[i][:0]
	}
	return b
}

// unpack reads the records of a frame.
func unpack(b []byte) (records [][]byte, err error) {
	var s streams
	c, plain := &columns{rest: b}, 0
	for i := range s {
		packed := c.take(c.uvarint())
		if c.err != nil {
			return nil, c.err
		}
		if len(packed) == 0 {
			continue
		}
		if s[i], err = unpacker().DecodeAll(packed, nil); err != nil {
			return nil, err
		}
		if plain += len(s[i]); plain > mostPlain {
			return nil, fmt.Errorf("a frame of more than %d bytes", mostPlain)
		}
	}
	if len(c.rest) > 0 {
		return nil, fmt.Errorf("%d bytes follow a frame", len(c.rest))
	}
	return s.join(plain + len(s[digests])) // a digest has two characters a byte
}

// join makes the records that the streams hold.
func (s *streams) join(size int) (records [][]byte, err error) {
	b := make([]byte, 0, size)
	var ends []int
	for len(s[shapes]) > 0 {
		if b, err = s.next(b); err != nil {
			return nil, err
		}
		ends = append(ends, len(b))
	}
	for i := range s {
		if len(s[i]) > 0 {
			return nil, fmt.Errorf("%d bytes of stream %d belong to no record", len(s[i]), i)
		}
	}
	begin := 0
	for _, end := range ends {
		records = append(records, b[begin:end:end])
		begin = end
	}
	return records, nil
}
