package intake

import (
	"fmt"
	"math"
	"strconv"
)

// numerals is how a source writes numbers.
type numerals struct {
	decimal  byte // '.' or ','
	grouping byte // 0: digits are not grouped
	digits   []byte
}

// exact are the powers of ten that float64 holds exactly.
var exact = [...]float64{
	1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11,
	1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22,
}

// read reads a number: a sign, digits with at most one decimal sign, and an exponent, where
// only digits are a must. What it returns is, bit for bit, what strconv.ParseFloat makes of
// the same digits. Where there is no number, a sentence says what is wrong.
//
// Most numbers are a whole number below 2^53 over a power of ten up to 10^22: both are exact,
// and IEEE 754 rounds their quotient correctly, so one division is enough (W. D. Clinger, How
// to Read Floating Point Numbers Accurately, PLDI 1990).
func (n *numerals) read(text []byte) (x float64, sentence string) {
	i, mantissa, seen, fraction := 0, uint64(0), 0, 0
	if len(text) > 0 && (text[0] == '-' || text[0] == '+') {
		i = 1
	}
	point := -1
	for ; i < len(text); i++ {
		c := text[i]
		if d := c - '0'; d <= 9 {
			mantissa = mantissa*10 + uint64(d)
			seen++
			continue
		}
		if c != n.decimal || point >= 0 {
			return n.slowly(text)
		}
		point = i
	}
	if point >= 0 {
		fraction = len(text) - 1 - point
	}
	if seen == 0 || seen > 18 || mantissa > 1<<53 {
		return n.slowly(text)
	}
	x = float64(mantissa) / exact[fraction] // fraction <= seen <= 18
	if text[0] == '-' {
		x = -x
	}
	return x, ""
}

// slowly reads any number.
func (n *numerals) slowly(text []byte) (float64, string) {
	plain, ok := n.plain(text)
	if !ok {
		return 0, n.notANumber(text)
	}
	x, err := strconv.ParseFloat(string(plain), 64)
	if err != nil {
		return 0, fmt.Sprintf("read %s; expected a number that a float64 can hold, up to %.4g", quote(text), math.MaxFloat64)
	}
	return x, ""
}

// plain is the number with a decimal point and without groups; false where it is none.
func (n *numerals) plain(text []byte) (plain []byte, ok bool) {
	plain = n.digits[:0]
	defer func() { n.digits = plain }()
	i := 0
	at := func() byte {
		if i < len(text) {
			return text[i]
		}
		return 0
	}
	sign := func() {
		if at() == '-' || at() == '+' {
			plain = append(plain, at())
			i++
		}
	}
	run := func() (digits int) {
		for ; at() >= '0' && at() <= '9'; i++ {
			plain = append(plain, at())
			digits++
		}
		return digits
	}
	sign()
	whole := run()
	if whole <= 3 && whole > 0 {
		for n.group(text, &i) {
			if run() != 3 {
				return plain, false
			}
		}
	}
	if at() == n.decimal {
		plain, i = append(plain, '.'), i+1
		whole += run()
	}
	if whole == 0 {
		return plain, false
	}
	if at() == 'e' || at() == 'E' {
		plain, i = append(plain, 'e'), i+1
		sign()
		if run() == 0 {
			return plain, false
		}
	}
	return plain, i == len(text)
}

// group passes over a sign between groups of digits. Where a source declares a blank or an
// apostrophe, their typographic kin count too: the no-break space, the narrow one, and ’.
func (n *numerals) group(text []byte, i *int) bool {
	if n.grouping == 0 || *i >= len(text) {
		return false
	}
	rest := text[*i:]
	if rest[0] == n.grouping {
		*i++
		return true
	}
	for _, k := range kin(n.grouping) {
		if len(rest) >= len(k) && string(rest[:len(k)]) == k {
			*i += len(k)
			return true
		}
	}
	return false
}

func kin(grouping byte) []string {
	switch grouping {
	case ' ':
		return blanks
	case '\'':
		return apostrophes
	}
	return nil
}

var blanks, apostrophes = []string{"\u00a0", "\u202f"}, []string{"\u2019"}

// notANumber says what was expected in place of a text.
func (n *numerals) notANumber(text []byte) string {
	other := byte(',')
	if n.decimal == ',' {
		other = '.'
	}
	swapped := numerals{decimal: other}
	if _, ok := swapped.plain(text); ok && n.grouping != other {
		return fmt.Sprintf("read %s, where %q may be a decimal sign or stand between groups of digits; "+
			"expected a number such as %s, or \"decimal\" or \"grouping\" of the source declared so", quote(text), other, n.example())
	}
	return fmt.Sprintf("read %s; expected a number such as %s", quote(text), n.example())
}

func (n *numerals) example() string { return "33" + string(rune(n.decimal)) + "4" }
