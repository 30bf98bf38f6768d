package store

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
)

// Columns hold what there is much of in a record, so that it is small and compresses well.
// Every column begins with the number of its values + 1, or 0 for nil (uvarint). A varint is
// that of encoding/binary, signed ones in zigzag.
//
//	whole numbers  each as the difference from the one before (varint), the first from 0
//	times          where there is any: the unit, 0, 1, 2 or 3 for ns, µs, ms or s, the largest
//	               that divides them all (1 byte); then whole numbers of that unit
//	texts          each by what it shares with the one before, the first with an empty one:
//	               0           the same
//	               1 s n text  the first s ≤ 255 bytes of it, then n bytes more (uvarint each)
//	               k ≥ 2       it ends in up to 18 digits, is at most 64 bytes long, and this one
//	                           has k - 1 more there, in as many digits (uvarint)
//	floats         where there is any, a form (1 byte), then:
//	               0 … 15      they are whole numbers divided by that power of ten, exactly:
//	                           the smallest (varint), how many bytes what is above it takes at
//	                           most, 1 to 8 (1 byte), and those bytes
//	               255         IEEE 754 bits, 8 bytes each
//	               the bytes of all values stand together by place, the most significant first
//
// No column takes more than some 64 times its own length in memory, whatever its bytes say.
const (
	mostPlaces   = 15
	bitsForm     = 255
	mostShared   = 255
	mostCounted  = 64 // bytes of a text that is counted on from
	mostDigits   = 18
	exactWhole   = 1 << 53 // up to here every whole number is a float64
	secondsUnit  = 3
	textSame     = 0
	textWritten  = 1
	textsCounted = 1 // what a counted text's step is raised by
)

var (
	powers = [mostPlaces + 1]float64{1, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15}
	units  = [secondsUnit + 1]int64{1, 1e3, 1e6, 1e9}
)

func appendCount(b []byte, n int, isNil bool) []byte {
	if isNil {
		return append(b, 0)
	}
	return binary.AppendUvarint(b, uint64(n)+1)
}

func appendInts(b []byte, values []int) []byte {
	b = appendCount(b, len(values), values == nil)
	before := 0
	for _, v := range values {
		b = binary.AppendVarint(b, int64(v-before)) // wraps, as it does when read
		before = v
	}
	return b
}

func appendTimes(b []byte, values []int64) []byte {
	b = appendCount(b, len(values), values == nil)
	if len(values) == 0 {
		return b
	}
	unit := secondsUnit
	for _, v := range values {
		for v%units[unit] != 0 {
			unit--
		}
	}
	b = append(b, byte(unit))
	before := int64(0)
	for _, v := range values {
		v /= units[unit]
		b = binary.AppendVarint(b, v-before)
		before = v
	}
	return b
}

func appendTexts(b []byte, values []string) []byte {
	b = appendCount(b, len(values), values == nil)
	before := ""
	for _, v := range values {
		if step := counted(before, v); v == before {
			b = append(b, textSame)
		} else if step > 0 {
			b = binary.AppendUvarint(b, step+textsCounted)
		} else {
			shared := 0
			for shared < min(len(v), len(before), mostShared) && v[shared] == before[shared] {
				shared++
			}
			b = binary.AppendUvarint(append(b, textWritten), uint64(shared))
			b = binary.AppendUvarint(b, uint64(len(v)-shared))
			b = append(b, v[shared:]...)
		}
		before = v
	}
	return b
}

// counted is by how much the number at the end of a text is above that of the one before it;
// 0 where they differ in more than this number.
func counted(before, v string) uint64 {
	if len(v) != len(before) || len(v) > mostCounted {
		return 0
	}
	at, old := lastNumber(before)
	vAt, now := lastNumber(v)
	if at != vAt || before[:at] != v[:at] || now < old {
		return 0
	}
	return now - old
}

// lastNumber is where the digits at the end of a text begin, at most 18, and their number.
func lastNumber(s string) (at int, n uint64) {
	at = len(s)
	for place := uint64(1); at > 0 && len(s)-at < mostDigits && '0' <= s[at-1] && s[at-1] <= '9'; place *= 10 {
		at--
		n += uint64(s[at]-'0') * place
	}
	return at, n
}

func appendFloats(b []byte, values []float64) []byte {
	b = appendCount(b, len(values), values == nil)
	if len(values) == 0 {
		return b
	}
	whole := make([]uint64, len(values))
	places, ok := decimal(values, whole)
	if !ok {
		for i, v := range values {
			whole[i] = math.Float64bits(v)
		}
		return appendPlanes(append(b, bitsForm), whole, 8)
	}
	least, most := int64(math.MaxInt64), int64(math.MinInt64)
	for _, w := range whole {
		least, most = min(least, int64(w)), max(most, int64(w))
	}
	width := 1
	for uint64(most-least)>>(8*width) > 0 {
		width++
	}
	for i := range whole {
		whole[i] -= uint64(least)
	}
	b = binary.AppendVarint(append(b, byte(places)), least)
	return appendPlanes(append(b, byte(width)), whole, width)
}

// decimal finds the fewest decimal places with which all values are whole numbers divided by
// a power of ten. The division is exact to the last bit because both are exact and it rounds
// once, as reading the decimal does: what a rig wrote as 33.412 comes back as that float.
func decimal(values []float64, whole []uint64) (places int, ok bool) {
	for places = range powers {
		ok = true
		for i, v := range values {
			m := math.RoundToEven(v * powers[places])
			if !(math.Abs(m) <= exactWhole) || math.Float64bits(m/powers[places]) != math.Float64bits(v) {
				ok = false
				break
			}
			whole[i] = uint64(int64(m))
		}
		if ok {
			return places, true
		}
	}
	return 0, false
}

func appendPlanes(b []byte, values []uint64, width int) []byte {
	for shift := 8 * (width - 1); shift >= 0; shift -= 8 {
		for _, v := range values {
			b = append(b, byte(v>>shift))
		}
	}
	return b
}

// columns reads columns. After the first fault it gives empty ones.
type columns struct {
	rest []byte
	err  error
}

var errShort = errors.New("it ends too soon")

func (c *columns) fail(format string, values ...any) {
	if c.err == nil {
		c.err = fmt.Errorf(format, values...)
	}
	c.rest = nil
}

func (c *columns) uvarint() uint64 {
	v, n := binary.Uvarint(c.rest)
	if n <= 0 {
		c.fail("%w", errShort)
		return 0
	}
	c.rest = c.rest[n:]
	return v
}

func (c *columns) varint() int64 {
	v, n := binary.Varint(c.rest)
	if n <= 0 {
		c.fail("%w", errShort)
		return 0
	}
	c.rest = c.rest[n:]
	return v
}

func (c *columns) take(n uint64) []byte {
	if n > uint64(len(c.rest)) {
		c.fail("%w", errShort)
		return nil
	}
	b := c.rest[:n]
	c.rest = c.rest[n:]
	return b
}

func (c *columns) byte() byte {
	if b := c.take(1); b != nil {
		return b[0]
	}
	return 0
}

// count is how many values a column has. Each takes a byte at least, so that a false count
// makes no room that the record does not pay for.
func (c *columns) count() (n int, isNil bool) {
	v := c.uvarint()
	if v == 0 {
		return 0, true
	}
	if v-1 > uint64(len(c.rest)) {
		c.fail("%w", errShort)
		return 0, true
	}
	return int(v - 1), false
}

func (c *columns) ints() []int {
	n, isNil := c.count()
	if isNil {
		return nil
	}
	values, before := make([]int, n), 0
	for i := range values {
		before += int(c.varint())
		values[i] = before
	}
	return values
}

func (c *columns) times() []int64 {
	n, isNil := c.count()
	if isNil {
		return nil
	}
	values := make([]int64, n)
	if n == 0 {
		return values
	}
	unit := c.byte()
	if unit > secondsUnit {
		c.fail("a column of times has the unknown unit %d", unit)
		return nil
	}
	before := int64(0)
	for i := range values {
		before += c.varint()
		values[i] = before * units[unit]
	}
	return values
}

func (c *columns) texts() []string {
	n, isNil := c.count()
	if isNil {
		return nil
	}
	values, before := make([]string, n), ""
	for i := range values {
		switch how := c.uvarint(); {
		case how == textSame:
		case how == textWritten:
			shared := c.uvarint()
			rest := c.take(c.uvarint())
			if shared > uint64(min(len(before), mostShared)) {
				c.fail("a text shares %d bytes with one of %d", shared, len(before))
				return nil
			}
			before = before[:shared] + string(rest)
		default:
			before = c.countOn(before, how-textsCounted)
		}
		if c.err != nil {
			return nil
		}
		values[i] = before
	}
	return values
}

// countOn is a text with its last number raised by a step.
func (c *columns) countOn(s string, step uint64) string {
	at, n := lastNumber(s)
	digits := len(s) - at
	if len(s) > mostCounted || digits == 0 || step >= 1e18 {
		c.fail("a text is counted on from one that ends in no number")
		return ""
	}
	b := []byte(s)
	n += step
	for i := len(b) - 1; i >= at; i-- {
		b[i] = '0' + byte(n%10)
		n /= 10
	}
	if n > 0 {
		c.fail("a text is counted on beyond its %d digits", digits)
	}
	return string(b)
}

func (c *columns) floats() []float64 {
	n, isNil := c.count()
	if isNil {
		return nil
	}
	values := make([]float64, n)
	if n == 0 {
		return values
	}
	form := c.byte()
	if form == bitsForm {
		c.planes(n, 8, func(i int, bits uint64) { values[i] = math.Float64frombits(bits) })
		return values
	}
	if form > mostPlaces {
		c.fail("a column of floats has the unknown form %d", form)
		return nil
	}
	least, width := c.varint(), int(c.byte())
	if width < 1 || width > 8 {
		c.fail("a column of floats has values of %d bytes", width)
		return nil
	}
	c.planes(n, width, func(i int, above uint64) {
		values[i] = float64(int64(uint64(least)+above)) / powers[form]
	})
	return values
}

func (c *columns) planes(n, width int, give func(i int, v uint64)) {
	b := c.take(uint64(n) * uint64(width))
	if b == nil {
		return
	}
	for i := range n {
		v := uint64(0)
		for at := range width {
			v = v<<8 | uint64(b[at*n+i])
		}
		give(i, v)
	}
}
