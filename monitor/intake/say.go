package intake

import (
	"strconv"
	"strings"
	"unicode"
	"unicode/utf8"
)

// longestQuoted is how many characters of a text a sentence repeats.
const longestQuoted = 60

// quote is what was read, for a sentence: in quotes, with what can't be printed written out,
// and shortened.
func quote[T string | []byte](text T) string {
	s := string(text[:min(len(text), longestQuoted*utf8.UTFMax)])
	cut := len(s) < len(text)
	n := 0
	for i := range s {
		if n++; n > longestQuoted {
			s, cut = s[:i], true
			break
		}
	}
	q := strconv.Quote(s)
	if cut {
		q += "…"
	}
	return q
}

// quotes is a list for a sentence.
func quotes(list []string) string {
	const most = 12
	var q []string
	for _, s := range list[:min(len(list), most)] {
		q = append(q, quote(s))
	}
	if len(list) > most {
		q = append(q, "…")
	}
	return strings.Join(q, ", ")
}

// shown is the name of a file in a sentence: as it is, where that can't mislead.
func shown(name string) string {
	for _, r := range name {
		if r == utf8.RuneError || r == '"' || !unicode.IsPrint(r) {
			return strconv.Quote(name)
		}
	}
	return name
}

// longestKept is how many bytes of a held row's text are kept beside its reason.
const longestKept = 4 << 10

// kept is the text of a held row: as it was written, with bytes that are not UTF-8 written out
// as \xNN, and cut where it is too long.
func kept(raw []byte) (text string, cut bool) {
	tail := ""
	if cut = len(raw) > longestKept; cut {
		tail = "… (cut: " + strconv.Itoa(len(raw)) + " bytes in all)"
		raw = raw[:longestKept]
		for i := 0; i < utf8.UTFMax && len(raw) > 0 && !utf8.Valid(raw[len(raw)-1:]); i++ {
			raw = raw[:len(raw)-1] // a character is not cut in half
		}
	}
	if utf8.Valid(raw) {
		return string(raw) + tail, cut
	}
	var b strings.Builder
	for len(raw) > 0 {
		r, n := utf8.DecodeRune(raw)
		if r == utf8.RuneError && n == 1 {
			b.WriteString(`\x` + strconv.FormatUint(uint64(raw[0])+0x100, 16)[1:])
		} else {
			b.Write(raw[:n])
		}
		raw = raw[n:]
	}
	return b.String() + tail, cut
}
