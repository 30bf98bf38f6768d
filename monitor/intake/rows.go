package intake

import (
	"fmt"
	"slices"
	"unicode"
	"unicode/utf8"

	"steelyard/rules"
	"steelyard/rules/claim"
)

// longestSerial is how many bytes a serial may have.
const longestSerial = 256

// desk is the memory that a reading works on, kept from file to file.
type desk struct {
	recs    *records
	clock   clock
	numbers numerals
	at      columns
	now     []cell // of the current row, by measure

	// The rows that count, column by column.
	line    []int
	time    []int64
	serials []byte
	ends    []int    // of each serial in serials
	series  []column // by measure, and within it by line
	offsets []column // of the rig: by index into aboutRow.offsets
}

// cell is one measurement of the current row.
type cell struct {
	text      []byte // nil where it stands for "no value"
	value, of float64
	side      int // 1 where the reading lies above value, beyond the gauge's limit; -1 below; else 0
}

// column collects the measurements of one process.
type column struct {
	row       []int
	value, of []float64 // of is empty where it is 1 throughout
	beyond    []rules.Bound
}

func newDesk(r *Reader) *desk {
	return &desk{
		recs:    &records{},
		numbers: numerals{decimal: r.src.Form.Decimal, grouping: r.src.Form.Grouping},
		at:      columns{value: make([]int, len(r.measures)), of: make([]int, len(r.measures))},
		now:     make([]cell, len(r.measures)),
		series:  make([]column, len(r.measures)*len(r.lines)),
		offsets: make([]column, len(r.aboutRow.offsets)),
	}
}

// begin clears the desk.
func (p *pass) begin() {
	d := p.desk
	d.clock = p.still
	d.line, d.time, d.serials, d.ends = d.line[:0], d.time[:0], d.serials[:0], d.ends[:0]
	for i := range d.series {
		d.series[i].clear()
	}
	for i := range d.offsets {
		d.offsets[i].clear()
	}
	p.arrives()
}

func (s *column) clear() {
	s.row, s.value, s.of, s.beyond = s.row[:0], s.value[:0], s.of[:0], s.beyond[:0]
}

// leave gives the desk back, without the content that was read.
func (p *pass) leave() {
	p.recs.text = nil
	clear(p.now)
	p.desks.Put(p.desk)
}

// row counts the current record, or holds it.
func (p *pass) row() {
	if len(p.recs.fields) != len(p.names) {
		if !p.isBlank() {
			p.hold(0, "read %d fields; expected %d, as many as the header has", len(p.recs.fields), len(p.names))
		}
		return
	}
	if p.doubtful && !p.isText() {
		return
	}
	if !p.weighed() {
		return
	}
	if !p.cells() {
		if !p.isBlank() {
			p.NoValue = append(p.NoValue, p.recs.line)
		}
		return
	}
	on, ok := 0, true
	if len(p.parts) == 0 {
		if on, ok = p.onLine(); !ok {
			return
		}
	}
	var ns int64
	if p.at.time >= 0 {
		if ns, ok = p.time(); !ok {
			return
		}
	}
	var serial []byte
	if p.at.serial >= 0 {
		if serial, ok = p.serial(); !ok {
			return
		}
	}
	for i := range p.now {
		if p.now[i].text != nil && !p.measurement(i) {
			return
		}
	}
	if len(p.parts) > 0 {
		p.countParts(ns, serial)
		return
	}
	p.count(on, ns, serial)
}

// time is when the row was measured.
func (p *pass) time() (ns int64, ok bool) {
	text := trim(p.recs.field(p.at.time))
	ns, sentence := p.clock.read(text, p.recs.line)
	if sentence == "" {
		sentence = p.untimely(ns, text)
	}
	if sentence != "" {
		p.hold(p.at.time+1, "%s", sentence)
	}
	return ns, sentence == ""
}

// isBlank says whether the current record is nothing but blanks and delimiters.
func (p *pass) isBlank() bool {
	for _, b := range p.recs.raw() {
		if b != ' ' && b != '\t' && b != p.recs.comma {
			return false
		}
	}
	return true
}

// isText holds a row with bytes that are not UTF-8.
func (p *pass) isText() bool {
	if utf8.Valid(p.recs.raw()) {
		return true
	}
	at := 0
	for i := range p.recs.fields {
		if !utf8.Valid(p.recs.field(i)) {
			at = i + 1
			break
		}
	}
	p.hold(at, `read bytes that are not UTF-8; expected text in UTF-8, or another "encoding" of the source`)
	return false
}

// cells finds the cells of the row that hold a value; it is false where none does.
func (p *pass) cells() (any bool) {
	for i := range p.now {
		if p.measures[i].group != p.group || !p.asksPart(i) {
			p.now[i].text = nil
			continue
		}
		text := trim(p.recs.field(p.at.value[i]))
		if p.standsForNone(text) {
			p.now[i].text = nil
			continue
		}
		if len(text) == 0 {
			text = empty
		}
		p.now[i].text = text
		any = true
	}
	return any
}

var empty = []byte{}

func (p *pass) standsForNone(text []byte) bool {
	for _, none := range p.noValue {
		if string(text) == none {
			return true
		}
	}
	return false
}

// onLine is the line that the row is about, as an index.
func (p *pass) onLine() (on int, ok bool) {
	on = p.fixed
	if p.at.line >= 0 {
		text := trim(p.recs.field(p.at.line))
		if on, ok = p.lineOf[string(text)]; !ok {
			near := ""
			if n := claim.Nearest(string(text), p.lines); n != "" {
				near = fmt.Sprintf(" (did you mean %q?)", n)
			}
			p.hold(p.at.line+1, "read the line %s; expected one of %s%s", quote(text), quotes(p.lines), near)
			return 0, false
		}
	}
	for i := range p.now {
		if p.measures[i].everywhere {
			continue
		}
		if m := &p.measures[i]; p.now[i].text != nil && !m.on[on] {
			p.hold(p.at.value[i]+1, "read %s for the line %q; expected no value, or a line on which %s is measured: %s",
				quote(p.now[i].text), p.lines[on], m.Characteristic.Name, quotes(m.Lines))
			return 0, false
		}
	}
	return on, true
}

// serial is the serial of the row's unit: a short text without signs that can't be shown.
func (p *pass) serial() (serial []byte, ok bool) {
	serial = trim(p.recs.field(p.at.serial))
	if len(serial) > longestSerial {
		p.hold(p.at.serial+1, "read %s, which is %d bytes long; expected a serial of at most %d",
			quote(serial), len(serial), longestSerial)
		return nil, false
	}
	for i, b := range serial {
		if b >= ' ' && b < 0x7f {
			continue
		}
		if r, _ := utf8.DecodeRune(serial[i:]); b >= utf8.RuneSelf && (r == utf8.RuneError || unicode.IsPrint(r)) {
			continue // a printable character, or the inside of one: the row is known to be UTF-8
		}
		p.hold(p.at.serial+1, "read %s; expected a serial of signs that can be printed", quote(serial))
		return nil, false
	}
	return serial, true
}

// measurement reads one value of the row, or holds the row.
func (p *pass) measurement(i int) bool {
	m, c := &p.measures[i], &p.now[i]
	c.of, c.side = m.OfIs, 0
	text := c.text
	if m.Beyond {
		text, c.side = beyond(c.text)
	}
	var sentence string
	if at := p.at.of[i]; at >= 0 {
		if c.of, sentence = p.numbers.read(trim(p.recs.field(at))); sentence != "" {
			p.hold(at+1, "%s", sentence)
			return false
		}
	}
	if m.Pass != nil {
		switch {
		case slices.Contains(m.Pass, string(c.text)):
			c.value = 0
		case slices.Contains(m.Fail, string(c.text)):
			c.value = 1
		default:
			p.hold(p.at.value[i]+1, "read %s; expected %s where the unit passed or %s where it failed",
				quote(c.text), quotes(m.Pass), quotes(m.Fail))
			return false
		}
	} else if c.value, sentence = p.numbers.read(text); sentence != "" {
		p.hold(p.at.value[i]+1, "%s", sentence)
		return false
	}
	if m.Scale != 1 || m.Offset != 0 {
		// The conversion keeps a machine that can from doing both in one step: it would round
		// otherwise.
		c.value = float64(c.value*m.Scale) + m.Offset
		if m.Scale < 0 {
			c.side = -c.side
		}
	}
	if sentence = p.unfitValue(m, c); sentence != "" {
		p.hold(p.at.value[i]+1, "%s", sentence)
		return false
	}
	return true
}

// unfitValue says why a value can't be one of its characteristic; "" where it can.
func (p *pass) unfitValue(m *measure, c *cell) string {
	if err := m.Family.Accepts(c.value, c.of); err != nil {
		return fmt.Sprintf("read %s: %v", quote(c.text), err)
	}
	if c.value < m.Measured.Lower || c.value > m.Measured.Upper {
		return fmt.Sprintf("read %s, which is %v %s; expected a plausible value, %v to %v",
			quote(c.text), c.value, m.Unit, m.Measured.Lower, m.Measured.Upper)
	}
	return ""
}

// count adds the row's measurements to what counts.
func (p *pass) count(on int, ns int64, serial []byte) {
	row := p.countRow(ns, serial)
	for i := range p.now {
		if c := &p.now[i]; c.text != nil {
			s := &p.desk.series[i*len(p.lines)+on]
			if c.side != 0 {
				s.beyond = append(s.beyond, rules.Bound{Row: row, Limit: c.value, Above: c.side > 0})
				continue
			}
			s.add(row, c.value, c.of)
		}
	}
}

// countRow notes where a row that counts stands and what it is about; it returns its index.
func (p *pass) countRow(ns int64, serial []byte) (row int) {
	d := p.desk
	row = len(d.line)
	d.line = append(d.line, p.recs.line)
	if p.at.time >= 0 {
		d.time = append(d.time, ns)
	}
	if p.at.serial >= 0 {
		d.serials = append(d.serials, serial...)
		d.ends = append(d.ends, len(d.serials))
	}
	return row
}

// add adds a measurement to a column.
func (s *column) add(row int, value, of float64) {
	s.row, s.value = append(s.row, row), append(s.value, value)
	switch {
	case len(s.of) > 0:
		s.of = append(s.of, of)
	case of != 1:
		for range len(s.value) - 1 {
			s.of = append(s.of, 1)
		}
		s.of = append(s.of, of)
	}
}

// hold holds the current record for a reason in one of its columns, counted from 1; 0 where it
// is about the whole record.
func (p *pass) hold(number int, format string, args ...any) {
	name := ""
	if number > 0 && number <= len(p.names) {
		name = p.names[number-1]
	}
	text, cut := kept(p.recs.raw())
	p.Cut = p.Cut || cut
	reason := fmt.Sprintf("line %d: %s%s", p.recs.line, p.column(number), fmt.Sprintf(format, args...))
	if len(p.held) == 0 {
		p.first = reason
	}
	p.heldText += len(text)
	p.held = append(p.held, rules.HeldRow{
		Line: p.recs.line, Column: name, Text: text, Reason: shown(p.file) + ", " + reason,
	})
}

// handOver takes numbers off the desk: by a copy, or, where there are many, the desk's own.
func handOver[T int | int64 | float64](from *[]T) []T {
	const many = 1 << 15
	if len(*from) < many {
		return slices.Clone(*from)
	}
	list := slices.Clip(*from)
	*from = nil
	return list
}

// rows takes the rows that count off the desk.
func (p *pass) rows() rules.Rows {
	d := p.desk
	rows := rules.Rows{Line: handOver(&d.line)}
	if p.at.time >= 0 {
		rows.Time = handOver(&d.time)
	}
	if p.at.serial >= 0 {
		all, from := string(d.serials), 0
		rows.Serial = make([]string, len(d.ends))
		for i, to := range d.ends {
			rows.Serial[i], from = all[from:to], to
		}
	}
	return rows
}

// allSeries takes the measurements off the desk: in the order of the source's characteristics,
// and of their lines.
func (p *pass) allSeries() []rules.Series {
	var list []rules.Series
	for i := range p.measures {
		m := &p.measures[i]
		for _, line := range m.Lines {
			s := &p.desk.series[i*len(p.lines)+p.lineOf[line]]
			if len(s.row)+len(s.beyond) > 0 {
				list = append(list, s.take(rules.ProcessName(m.Characteristic.Name, line)))
			}
		}
	}
	for i, name := range p.aboutRow.offsets {
		if s := &p.desk.offsets[i]; len(s.row) > 0 {
			list = append(list, s.take(name))
		}
	}
	return joined(list)
}

// take takes the column off the desk.
func (s *column) take(process string) rules.Series {
	series := rules.Series{Process: process, Row: handOver(&s.row), Value: handOver(&s.value)}
	if len(s.of) > 0 {
		series.Of = handOver(&s.of)
	}
	if len(s.beyond) > 0 {
		series.Beyond = slices.Clone(s.beyond)
	}
	return series
}
