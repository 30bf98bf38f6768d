package intake

import (
	"bytes"
	"fmt"
)

// Bounds that keep one bad file from taking the machine.
const (
	longestRecord = 1 << 20 // bytes of one record
	mostFields    = 10000   // of one record
)

// records splits a text into records and those into fields, as RFC 4180 has it: lines end in
// LF or CRLF, a field in quotes may hold delimiters, line ends and doubled quotes. An empty
// line is no record. It works in place and keeps its memory from record to record.
//
// On text that encoding/csv takes it finds the same fields. On text that it refuses, records
// goes on where that is safe: see flaw.
type records struct {
	text  []byte
	comma byte
	plain bool // there is no quote in the whole text
	pos   int  // where the next record starts
	next  int  // the line that pos stands in, counted from 1

	line     int // of the current record
	from, to int // the current record in text, without its line end
	fields   []span
	undone   []byte // what is left of fields with doubled quotes
	newline  int    // of a record with quotes: where the line that is being read ends, at LF
}

// span is a field: text[from:to], or undone[from:to] where apart is set.
type span struct {
	from, to int
	apart    bool
}

// flaw is why a record can't be split. Where whole is set, what is behind it can't be trusted
// either: a quote that is opened in one line and goes wrong in another may have swallowed rows.
type flaw struct {
	sentence string
	field    int // counted from 1; 0 where it is about the whole record
	whole    bool
	open     bool // more text could close it
}

// reset begins with a text.
func (r *records) reset(text []byte, comma byte) {
	*r = records{
		text: text, comma: comma, plain: bytes.IndexByte(text, '"') < 0, next: 1,
		fields: r.fields[:0], undone: r.undone[:0],
	}
}

// skip passes over a line, whatever is in it.
func (r *records) skip() bool {
	n := bytes.IndexByte(r.text[r.pos:], '\n')
	if n < 0 {
		r.pos = len(r.text)
		return false
	}
	r.pos, r.next = r.pos+n+1, r.next+1
	return true
}

// read moves to the next record; it is false at the end of the text.
func (r *records) read() (ok bool, bad *flaw) {
	for r.pos < len(r.text) {
		rest := r.text[r.pos:]
		n := bytes.IndexByte(rest, '\n')
		after := n + 1
		if n < 0 {
			n, after = len(rest), len(rest)
		}
		row := rest[:n]
		if n > 0 && row[n-1] == '\r' {
			row = row[:n-1]
		}
		r.line = r.next
		if len(row) == 0 {
			r.pos, r.next = r.pos+after, r.next+1
			continue
		}
		if !r.plain && bytes.IndexByte(row, '"') >= 0 {
			r.newline = r.pos + n
			return true, r.quoted()
		}
		r.from, r.to = r.pos, r.pos+len(row)
		r.pos, r.next = r.pos+after, r.next+1
		return true, r.split(row)
	}
	return false, nil
}

// split finds the fields of a record without quotes.
func (r *records) split(row []byte) *flaw {
	r.fields = r.fields[:0]
	if len(row) > longestRecord {
		return tooLong(len(row))
	}
	at := r.from
	for {
		n := bytes.IndexByte(r.text[at:r.to], r.comma)
		if n < 0 {
			r.fields = append(r.fields, span{from: at, to: r.to})
			break
		}
		r.fields = append(r.fields, span{from: at, to: at + n})
		at += n + 1
	}
	return r.tooMany()
}

func tooLong(n int) *flaw {
	return &flaw{sentence: fmt.Sprintf("read a row of %d bytes; no more than %d bytes are expected", n, longestRecord)}
}

func (r *records) tooMany() *flaw {
	if len(r.fields) > mostFields {
		return &flaw{sentence: fmt.Sprintf("read %d fields; no more than %d are expected", len(r.fields), mostFields)}
	}
	return nil
}

// quoted finds the fields of a record that has quotes somewhere, and so may go over many lines.
func (r *records) quoted() *flaw {
	r.fields, r.undone = r.fields[:0], r.undone[:0]
	r.from = r.pos
	for at := r.pos; ; at++ {
		var bad *flaw
		if at < len(r.text) && r.text[at] == '"' {
			at, bad = r.inQuotes(at + 1)
		} else {
			at, bad = r.bare(at)
		}
		if bad != nil {
			bad.field = len(r.fields) + 1
			r.passOver(at)
			return bad
		}
		if at < len(r.text) && r.text[at] == r.comma {
			continue
		}
		r.end(at)
		if r.to-r.from > longestRecord {
			return tooLong(r.to - r.from)
		}
		return r.tooMany()
	}
}

// end closes the current record at a line end or the end of the text.
func (r *records) end(at int) {
	r.to, r.pos, r.next = at, at, r.next+1
	if r.pos < len(r.text) && r.text[r.pos] == '\r' {
		r.pos++
	}
	if r.pos < len(r.text) {
		r.pos++
	}
}

// passOver ends a record with a flaw at the line end behind a place in it.
func (r *records) passOver(at int) {
	n := bytes.IndexByte(r.text[at:], '\n')
	if n < 0 {
		r.end(len(r.text))
		return
	}
	r.end(at + n)
	if r.to > r.from && r.text[r.to-1] == '\r' {
		r.to--
	}
}

// bare reads a field that is not in quotes; it returns where the field ends.
func (r *records) bare(from int) (int, *flaw) {
	to := r.newline
	if n := bytes.IndexByte(r.text[from:to], r.comma); n >= 0 {
		to = from + n
	} else if to > from && r.text[to-1] == '\r' {
		to--
	}
	if n := bytes.IndexByte(r.text[from:to], '"'); n >= 0 {
		return from + n, &flaw{sentence: fmt.Sprintf("read a quote inside a field that does not begin with one; "+
			"expected %q or the end of the row (a field that holds quotes stands in quotes itself, and has them doubled)", r.comma)}
	}
	r.fields = append(r.fields, span{from: from, to: to})
	return to, nil
}

// lineEnds says whether a line ends at a place in the text.
func (r *records) lineEnds(at int) bool {
	switch {
	case at == len(r.text) || r.text[at] == '\n':
		return true
	case r.text[at] == '\r':
		return at+1 == len(r.text) || r.text[at+1] == '\n'
	}
	return false
}

// inQuotes reads a field from behind its opening quote; it returns what is behind the closing
// one.
func (r *records) inQuotes(from int) (int, *flaw) {
	lines, at, doubled := 0, from, false
	for {
		n := bytes.IndexByte(r.text[at:], '"')
		if n < 0 {
			return len(r.text), &flaw{whole: true, open: true, sentence: "read a quote that opens a field and is not closed; " +
				"expected a closing quote before the end of the file"}
		}
		at += n
		if at-from > longestRecord {
			return at, &flaw{whole: true, sentence: fmt.Sprintf("read a quote that opens a field and is not closed within %d bytes; "+
				"expected a closing quote", longestRecord)}
		}
		if at+1 == len(r.text) || r.text[at+1] != '"' {
			break
		}
		at, doubled = at+2, true
	}
	if at > r.newline {
		lines = bytes.Count(r.text[from:at], []byte("\n"))
		if r.next += lines; lines > 0 {
			r.newline = len(r.text)
			if n := bytes.IndexByte(r.text[at:], '\n'); n >= 0 {
				r.newline = at + n
			}
		}
	}
	if after := at + 1; after < len(r.text) && r.text[after] != r.comma && !r.lineEnds(after) {
		return after, &flaw{whole: lines > 0, sentence: fmt.Sprintf("read a closing quote and behind it %s; "+
			"expected %q or the end of the row", quote(r.text[after:after+1]), r.comma)}
	}
	if doubled || lines > 0 {
		r.fields = append(r.fields, r.undo(r.text[from:at]))
	} else {
		r.fields = append(r.fields, span{from: from, to: at})
	}
	return at + 1, nil
}

// undo takes back the doubling of quotes, and makes each line end LF.
func (r *records) undo(field []byte) span {
	from := len(r.undone)
	for i := 0; i < len(field); i++ {
		if field[i] == '\r' && i+1 < len(field) && field[i+1] == '\n' {
			continue
		}
		r.undone = append(r.undone, field[i])
		if field[i] == '"' {
			i++
		}
	}
	return span{from, len(r.undone), true}
}

// field is a field of the current record, as it was meant: without quotes around it.
func (r *records) field(i int) []byte {
	s := r.fields[i]
	if s.apart {
		return r.undone[s.from:s.to]
	}
	return r.text[s.from:s.to]
}

// raw is the current record as it is written.
func (r *records) raw() []byte { return r.text[r.from:r.to] }
