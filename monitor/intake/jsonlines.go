package intake

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
)

// JSON lines: each line is one object (RFC 8259), whose members are named as the mapped columns are. From there on a
// row is a row: numbers are taken from the text, digit for digit, as from CSV; a string is its text, true and
// false are their words, and null, or a measured member that is not there, is an empty field.

// objects reads the rows of a text of JSON lines.
func (p *pass) objects(text []byte) (sentence string) {
	p.recs.reset(text, p.src.Form.Delimiter)
	p.names = p.wanted()
	if sentence := p.place(); sentence != "" {
		return sentence
	}
	p.headed = true
	ignored := map[string]bool{}
	for p.recs.line = 1; p.recs.pos < len(text); p.recs.line++ {
		r := p.recs
		r.from = r.pos
		if n := bytes.IndexByte(text[r.pos:], '\n'); n >= 0 {
			r.to, r.pos = r.pos+n, r.pos+n+1
		} else {
			r.to, r.pos = len(text), len(text)
		}
		row := bytes.TrimSpace(text[r.from:r.to])
		if len(row) == 0 {
			continue
		}
		r.to = r.from + len(bytes.TrimRight(text[r.from:r.to], "\r\n"))
		if sentence := p.object(row, ignored); sentence != "" {
			p.hold(0, "%s", sentence)
		} else if member, missing := p.lacks(); missing {
			p.hold(0, "the object has no member %s; expected one", quote(member))
		} else {
			p.row()
		}
		if sentence := p.tooMuch(); sentence != "" {
			return sentence
		}
	}
	for name := range ignored {
		p.Ignored = append(p.Ignored, strings.ToValidUTF8(name, "\ufffd"))
	}
	slices.Sort(p.Ignored)
	return ""
}

// object takes the members of one line for the fields of the row; a sentence says why it can't be a row.
func (p *pass) object(row []byte, ignored map[string]bool) (sentence string) {
	if len(row) > longestRecord {
		return tooLong(len(row)).sentence
	}
	r := p.recs
	r.undone = r.undone[:0]
	r.fields = slices.Grow(r.fields[:0], len(p.names))[:len(p.names)]
	for i := range r.fields {
		r.fields[i] = span{from: -1, to: -1, apart: true}
	}
	d := json.NewDecoder(bytes.NewReader(row))
	d.UseNumber()
	if open, err := d.Token(); err != nil || open != json.Delim('{') {
		return p.noObject(row, err, d.InputOffset())
	}
	seen := map[string]bool{}
	for d.More() {
		name, err := d.Token()
		if err != nil {
			return p.noObject(row, err, d.InputOffset())
		}
		member := name.(string) // what stands before a colon is a string, or the decoder errs
		if seen[member] {
			return fmt.Sprintf("the object has the member %s twice; expected it once", quote(member))
		}
		seen[member] = true
		var value json.RawMessage
		if err := d.Decode(&value); err != nil {
			return p.noObject(row, err, d.InputOffset())
		}
		at := slices.Index(p.names, member)
		if at < 0 {
			ignored[member] = true
			continue
		}
		if sentence := r.put(at, member, value); sentence != "" {
			return sentence
		}
	}
	if _, err := d.Token(); err != nil {
		return p.noObject(row, err, d.InputOffset())
	}
	if _, err := d.Token(); !errors.Is(err, io.EOF) {
		return fmt.Sprintf("column %d: read more behind the object; expected the end of the line", d.InputOffset())
	}
	return ""
}

// put makes a value the text of a field.
func (r *records) put(at int, member string, value json.RawMessage) (sentence string) {
	from := len(r.undone)
	switch {
	case len(value) > 0 && value[0] == '"':
		var text string
		if err := json.Unmarshal(value, &text); err != nil {
			return fmt.Sprintf("the member %s: %v", quote(member), err)
		}
		r.undone = append(r.undone, text...)
	case string(value) == "null":
	case len(value) > 0 && (value[0] == '{' || value[0] == '['):
		return fmt.Sprintf("the member %s is an object or a list; expected a number or a text", quote(member))
	default:
		r.undone = append(r.undone, value...)
	}
	r.fields[at] = span{from, len(r.undone), true}
	return ""
}

// lacks finds a member that a row can't do without, and makes the others that are not there empty: where no
// fault is named there was none.
func (p *pass) lacks() (member string, missing bool) {
	for i := range p.recs.fields {
		if p.recs.fields[i].from >= 0 {
			continue
		}
		if i == p.at.time || i == p.at.line || i == p.at.serial || i == p.at.variant {
			return p.names[i], true
		}
		n := len(p.recs.undone)
		p.recs.fields[i] = span{n, n, true}
	}
	return "", false
}

// noObject says where a line stops being an object.
func (p *pass) noObject(row []byte, err error, at int64) string {
	var syntax *json.SyntaxError
	if errors.As(err, &syntax) {
		return fmt.Sprintf("column %d: %v; expected one JSON object", syntax.Offset, err)
	}
	if err != nil {
		return fmt.Sprintf("column %d: the object breaks off; expected one JSON object on the line", at+1)
	}
	return fmt.Sprintf("column 1: read %s; expected one JSON object", quote(row[:min(len(row), 20)]))
}
