package intake

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"unicode/utf16"
	"unicode/utf8"

	"steelyard/monitor/config"
)

// The marks at the start of a text that say how it is written.
var (
	markUTF8  = []byte("\xef\xbb\xbf")
	markLower = []byte("\xff\xfe") // UTF-16, the lower byte first
	markUpper = []byte("\xfe\xff") // UTF-16, the upper byte first
)

// decode turns the bytes of a file into UTF-8 without a mark; a text in UTF-8 is not copied,
// nor is it checked. A sentence says why the bytes can't be what the source declares.
//
// A mark of UTF-16 is taken at its word in a source that declares UTF-8: in UTF-8 those bytes
// are not possible.
func decode(f *config.Form, content []byte) (text []byte, sentence string) {
	marked16 := bytes.HasPrefix(content, markLower) || bytes.HasPrefix(content, markUpper)
	switch f.Encoding {
	case "windows-1252":
		if bytes.HasPrefix(content, markUTF8) {
			return nil, `the file begins with the mark of UTF-8; expected windows-1252, as "encoding" of the source declares`
		}
		return decode1252(content)
	case "utf-16":
		if !marked16 {
			return nil, `the file begins with no mark; expected one of UTF-16 (bytes FF FE or FE FF), as "encoding" of the source declares`
		}
	}
	if marked16 {
		return decode16(content)
	}
	return bytes.TrimPrefix(content, markUTF8), ""
}

func decode16(content []byte) (text []byte, sentence string) {
	var order binary.ByteOrder = binary.LittleEndian
	if bytes.HasPrefix(content, markUpper) {
		order = binary.BigEndian
	}
	content = content[2:]
	if len(content)%2 != 0 {
		return nil, "the file has an odd number of bytes; expected UTF-16, two bytes a character: the end is missing"
	}
	text = make([]byte, 0, len(content)/2+len(content)/16)
	for i := 0; i < len(content); i += 2 {
		r := rune(order.Uint16(content[i:]))
		if r < utf8.RuneSelf {
			text = append(text, byte(r))
			continue
		}
		if utf16.IsSurrogate(r) {
			var low rune
			if i+4 <= len(content) {
				low = rune(order.Uint16(content[i+2:]))
			}
			if r = utf16.DecodeRune(r, low); r == utf8.RuneError {
				// Half a character: a byte that is never UTF-8 marks the place, so the row is held.
				text = append(text, 0xff)
				continue
			}
			i += 2
		}
		text = utf8.AppendRune(text, r)
	}
	return text, ""
}

// upper1252 are the characters of windows-1252 from 0x80 to 0x9f; 0 where it has none. All
// others are those of Unicode with the same number. Source: the table CP1252.TXT of the Unicode
// Consortium.
var upper1252 = [32]rune{
	0x20ac, 0, 0x201a, 0x0192, 0x201e, 0x2026, 0x2020, 0x2021, 0x02c6, 0x2030, 0x0160, 0x2039, 0x0152, 0, 0x017d, 0,
	0, 0x2018, 0x2019, 0x201c, 0x201d, 0x2022, 0x2013, 0x2014, 0x02dc, 0x2122, 0x0161, 0x203a, 0x0153, 0, 0x017e, 0x0178,
}

func decode1252(content []byte) (text []byte, sentence string) {
	text = make([]byte, 0, len(content)+len(content)/8)
	for i, b := range content {
		switch {
		case b < 0x80:
			text = append(text, b)
		case b >= 0xa0:
			text = utf8.AppendRune(text, rune(b))
		case upper1252[b-0x80] != 0:
			text = utf8.AppendRune(text, upper1252[b-0x80])
		default:
			line := 1 + bytes.Count(content[:i], []byte("\n"))
			return nil, fmt.Sprintf("line %d holds the byte %02X, which windows-1252 does not have; "+
				`expected another encoding, declared as "encoding" of the source`, line, b)
		}
	}
	return text, ""
}
