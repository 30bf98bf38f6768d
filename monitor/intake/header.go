package intake

import (
	"bytes"
	"fmt"
	"slices"
	"strings"

	"steelyard/rules/claim"
)

// columns are the places of the mapped columns in a file's header, counted from 0; -1 where a
// column is not mapped.
type columns struct {
	time, line, serial int
	fault, variant     int
	value, of          []int // by measure
}

// header reads the header and finds the mapped columns in it, by name and in any order. A
// sentence says what is missing.
func (p *pass) header() (sentence string) {
	ok, bad := p.recs.read()
	if !ok {
		return fmt.Sprintf("the file ends before its header; expected columns named %s", quotes(p.wanted()))
	}
	p.where = fmt.Sprintf(", line %d", p.recs.line)
	if bad != nil {
		return p.column(bad.field) + bad.sentence + " (this is the header)"
	}
	for i := range p.recs.fields {
		p.names = append(p.names, string(trim(p.recs.field(i))))
	}
	if sentence := p.place(); sentence != "" {
		return sentence
	}
	p.where = ""
	wanted := p.wanted()
	for _, name := range p.names {
		if name != "" && !slices.Contains(wanted, name) {
			p.Ignored = append(p.Ignored, strings.ToValidUTF8(name, "\ufffd"))
		}
	}
	return ""
}

// wanted are the names of the mapped columns.
func (p *pass) wanted() []string {
	c := &p.src.Columns
	list := []string{c.Time, c.Line, c.Serial, p.src.Faults.Column, p.src.Variants.Column}
	for _, m := range c.Measured {
		list = append(list, m.Column, m.Of)
	}
	var names []string
	for _, name := range list {
		if name != "" && !slices.Contains(names, name) {
			names = append(names, name)
		}
	}
	return names
}

// place finds each mapped column once.
func (p *pass) place() (sentence string) {
	var missing []string
	find := func(name string) int {
		if name == "" {
			return -1
		}
		at := slices.Index(p.names, name)
		if at < 0 {
			if q := quote(name); !slices.ContainsFunc(missing, func(m string) bool { return strings.HasPrefix(m, q) }) {
				missing = append(missing, q+p.near(name))
			}
		} else if next := slices.Index(p.names[at+1:], name); next >= 0 && sentence == "" {
			sentence = fmt.Sprintf("the header has the column %q twice, as column %d and column %d; expected it once",
				name, at+1, at+next+2)
		}
		return at
	}
	at, c := &p.at, &p.src.Columns
	at.time, at.line, at.serial = find(c.Time), find(c.Line), find(c.Serial)
	at.fault, at.variant = find(p.src.Faults.Column), find(p.src.Variants.Column)
	for i := range p.measures {
		at.value[i], at.of[i] = find(p.measures[i].Column), find(p.measures[i].Of)
	}
	if len(missing) > 0 {
		return fmt.Sprintf("the header has no column %s; it reads %s", strings.Join(missing, " and no column "), p.reads())
	}
	return sentence
}

// near names the column that a missing one may have become.
func (p *pass) near(name string) string {
	if near := claim.Nearest(name, p.names); near != "" {
		return fmt.Sprintf(" (did you mean %s?)", quote(near))
	}
	return ""
}

// reads shows a header. One that is a single field is perhaps delimited by something else.
func (p *pass) reads() string {
	text := quotes(p.names)
	if len(p.names) > 1 {
		return text
	}
	most, by := 0, byte(0)
	for _, d := range []byte(",;\t") {
		if n := bytes.Count(p.recs.raw(), []byte{d}); d != p.recs.comma && n > most {
			most, by = n, d
		}
	}
	if most > 0 {
		text += fmt.Sprintf(", one field when divided by %q: perhaps the \"delimiter\" of the source is to be %q",
			p.recs.comma, by)
	}
	return text
}

// column names a column for a sentence: by number, counted from 1, and by its name.
func (p *pass) column(number int) string {
	if number < 1 {
		return ""
	}
	if number > len(p.names) {
		return fmt.Sprintf("column %d: ", number)
	}
	return fmt.Sprintf("column %d (%s): ", number, quote(p.names[number-1]))
}

// trim takes blanks and tabs off the ends of a cell.
func trim(cell []byte) []byte {
	for len(cell) > 0 && (cell[0] == ' ' || cell[0] == '\t') {
		cell = cell[1:]
	}
	for n := len(cell); n > 0 && (cell[n-1] == ' ' || cell[n-1] == '\t'); n-- {
		cell = cell[:n-1]
	}
	return cell
}
