// Package intake notices the files in drop folders, waits until they have settled, and reads
// them: each row is either counted or held with a reason. It never writes into a drop folder,
// follows no link out of one, and opens no device or pipe in one.
//
// Reading is pure: Reader turns the bytes of one file into a Reading, with no clock and no
// disk. Watch does the noticing for one source. What becomes of a Reading is for the monitor.
package intake

import (
	"bytes"
	"crypto/sha256"
	"encoding/csv"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"time"
	"unicode/utf8"

	"steelyard/monitor/config"
	"steelyard/rules"
	"steelyard/rules/claim"
)

// Reading is what one file comes to: a Batch where any row counts, with the rows beside them
// that are held; else Held, the file whole with the reason. Never both.
type Reading struct {
	SHA256 [32]byte
	Batch  *rules.Batch
	Held   *rules.Held
}

// Reader reads the files of one source. It may be used by several goroutines.
type Reader struct {
	src   *config.Source
	plan  *rules.Plan
	times timeReader
}

// NewReader makes the reader of a source under a plan. Both must come from one checked
// configuration.
func NewReader(src *config.Source, plan *rules.Plan) *Reader {
	return &Reader{src: src, plan: plan, times: newTimeReader(&src.Form)}
}

// Bounds that keep one bad file from taking the machine.
const (
	longestRecord = 1 << 20 // bytes of one record
	longestShown  = 4 << 10 // bytes of a held row's text that are kept beside its reason
	mostHeldRows  = 10000   // rows held one by one; beyond, the file is held whole
)

// Read reads the content of a file, which was last written at a moment.
func (r *Reader) Read(file string, written time.Time, content []byte) *Reading {
	reading := &Reading{SHA256: sha256.Sum256(content)}
	sum := hex.EncodeToString(reading.SHA256[:])
	f := &fileReader{Reader: r, file: file, content: content}
	f.batch = &rules.Batch{Source: r.src.Name, File: file, SHA256: sum, To: int64(len(content)), Written: written.UTC()}
	reason := f.read()
	if reason == "" && len(f.batch.Series) > 0 {
		reading.Batch = f.batch
		return reading
	}
	if reason == "" {
		reason = f.nothing()
	}
	reading.Held = &rules.Held{
		Source: r.src.Name, File: file, SHA256: sum, Size: int64(len(content)), Reason: reason, Rows: f.batch.Held,
	}
	return reading
}

// fileReader reads one file.
type fileReader struct {
	*Reader
	file    string
	content []byte
	batch   *rules.Batch
	columns []int // of each mapped column, its place in the header
	names   []string
	width   int // fields of the header
	series  map[string]int
	last    time.Time // of the row before
}

// nothing says why a file without a fault has nothing to count.
func (f *fileReader) nothing() string {
	if n := len(f.batch.Held); n > 0 {
		return fmt.Sprintf("%s: none of its rows can be counted; the first, %s", f.file, f.batch.Held[0].Reason)
	}
	return fmt.Sprintf("%s: it holds no row with a value to count", f.file)
}

// read fills the batch; a text says why the file is held whole.
func (f *fileReader) read() (reason string) {
	text := bytes.TrimPrefix(f.content, []byte("\xef\xbb\xbf"))
	if len(bytes.TrimSpace(text)) == 0 {
		return f.at(1, "the file is empty; a header and rows were expected")
	}
	if i := bytes.IndexByte(text, 0); i >= 0 {
		return f.at(1+bytes.Count(text[:i], []byte("\n")),
			"read a zero byte; text in UTF-8 was expected (the file may be in another encoding, or the end of a broken copy)")
	}
	if line := longLine(text); line > 0 {
		return f.at(line, fmt.Sprintf("read a line of more than %d bytes; rows were expected", longestRecord))
	}
	skipped := 0
	for range f.src.Form.Preamble {
		_, rest, found := bytes.Cut(text, []byte("\n"))
		if !found {
			return f.at(skipped+1, fmt.Sprintf("the file ends within the %d lines before the header", f.src.Form.Preamble))
		}
		text, skipped = rest, skipped+1
	}
	return f.records(text, skipped)
}

// longLine is the first line longer than a record may be; 0 where there is none.
func longLine(text []byte) int {
	for line := 1; len(text) > longestRecord; line++ {
		i := bytes.IndexByte(text, '\n')
		if i < 0 || i > longestRecord {
			return line
		}
		text = text[i+1:]
	}
	return 0
}

func (f *fileReader) at(line int, sentence string) string {
	return fmt.Sprintf("%s, line %d: %s", f.file, line, sentence)
}

// records reads the header and the rows behind it.
func (f *fileReader) records(text []byte, skipped int) string {
	records := csv.NewReader(bytes.NewReader(text))
	records.Comma = rune(f.src.Form.Delimiter)
	records.FieldsPerRecord = -1
	records.ReuseRecord = true
	header, err := records.Read()
	if err != nil {
		return f.broken(err, skipped)
	}
	if reason := f.header(header, skipped+1); reason != "" {
		return reason
	}
	f.series = map[string]int{}
	for first := true; ; first = false {
		from := records.InputOffset()
		record, err := records.Read()
		if errors.Is(err, io.EOF) {
			return ""
		}
		if err != nil {
			return f.broken(err, skipped)
		}
		if first && f.src.Form.UnitsRow {
			continue
		}
		line, _ := records.FieldPos(0)
		raw := text[from:records.InputOffset()]
		if held := f.row(line+skipped, record); held != nil {
			held.Line, held.Text = line+skipped, shown(raw)
			if f.batch.Held = append(f.batch.Held, *held); len(f.batch.Held) > mostHeldRows {
				f.batch.Held = f.batch.Held[:1]
				return fmt.Sprintf("%s: more than %d rows can't be counted; the first, %s", f.file, mostHeldRows, f.batch.Held[0].Reason)
			}
		}
	}
}

// broken puts an error of the CSV syntax into words.
func (f *fileReader) broken(err error, skipped int) string {
	var bad *csv.ParseError
	switch {
	case errors.Is(err, io.EOF):
		return f.at(skipped+1, "the file ends before its header")
	case !errors.As(err, &bad):
		return f.at(skipped+1, err.Error())
	case errors.Is(bad.Err, csv.ErrBareQuote):
		return f.at(bad.Line+skipped, fmt.Sprintf("column %d: read a quote inside a field that is not quoted; fields with quotes must be quoted whole, with quotes doubled", bad.Column))
	}
	return f.at(bad.StartLine+skipped, fmt.Sprintf("read a quoted field that is not closed in order (noticed in line %d, column %d); a closing quote and then a %q or the end of the line were expected",
		bad.Line+skipped, bad.Column, f.src.Form.Delimiter))
}

// shown is the text of a row, as it was written, of bearable length.
func shown(raw []byte) string {
	raw = bytes.TrimRight(raw, "\r\n")
	if len(raw) > longestShown {
		return strings.ToValidUTF8(string(raw[:longestShown]), "\ufffd") + " … (cut)"
	}
	return strings.ToValidUTF8(string(raw), "\ufffd")
}

// header finds the mapped columns by name, in any order.
func (f *fileReader) header(header []string, line int) string {
	var names []string
	for _, h := range header {
		names = append(names, strings.TrimSpace(h))
	}
	f.width = len(names)
	wanted := []string{f.src.Columns.Time, f.src.Columns.Line, f.src.Columns.Serial}
	for _, m := range f.src.Columns.Measured {
		wanted = append(wanted, m.Column, m.Of)
	}
	for _, name := range wanted {
		at := -1
		if name != "" {
			if at = slices.Index(names, name); at < 0 {
				return f.at(line, fmt.Sprintf("the header has no column %q; it has %s%s", name, quoted(names), didYouMean(name, names)))
			}
			if slices.Contains(names[at+1:], name) {
				return f.at(line, fmt.Sprintf("the header has the column %q twice; once was expected", name))
			}
		}
		f.columns = append(f.columns, at)
	}
	f.names = names
	return ""
}

func quoted(names []string) string {
	var q []string
	for _, n := range names[:min(len(names), 20)] {
		q = append(q, fmt.Sprintf("%.60q", n))
	}
	if len(names) > 20 {
		q = append(q, "…")
	}
	return strings.Join(q, ", ")
}

func didYouMean(word string, words []string) string {
	if near := claim.Nearest(word, words); near != "" {
		return fmt.Sprintf(" (did you mean %q?)", near)
	}
	return ""
}

// measurement is one value of a row.
type measurement struct {
	process   string
	value, of float64
}

// row takes one row, or says why it is held. A row is held whole when any of its mapped fields
// can't be read: nothing of it is counted.
func (f *fileReader) row(line int, record []string) *rules.HeldRow {
	bad := func(column, sentence string) *rules.HeldRow {
		return &rules.HeldRow{Column: column, Reason: f.at(line, sentence)}
	}
	if len(record) != f.width {
		return bad("", fmt.Sprintf("read %d fields; the header has %d", len(record), f.width))
	}
	for i, field := range record {
		if !utf8.ValidString(field) {
			return bad(f.names[i], fmt.Sprintf("column %d (%q): read bytes that are not UTF-8", i+1, f.names[i]))
		}
	}
	cell := func(i int) (text, where string) {
		at := f.columns[i]
		return strings.TrimSpace(record[at]), fmt.Sprintf("column %d (%q): ", at+1, f.names[at])
	}
	var at time.Time
	if f.src.Columns.Time != "" {
		text, where := cell(0)
		t, sentence := f.times.read(text, f.last)
		if sentence != "" {
			return bad(f.src.Columns.Time, where+sentence)
		}
		at = t
	}
	on := f.src.Columns.LineIs
	if f.src.Columns.Line != "" {
		on, _ = cell(1)
	}
	var found []measurement
	for i := range f.src.Columns.Measured {
		m := &f.src.Columns.Measured[i]
		text, where := cell(3 + 2*i)
		if slices.Contains(f.src.Form.NoValue, text) {
			continue
		}
		ch, _ := f.plan.Characteristic(m.Characteristic)
		if !slices.Contains(ch.Lines, on) {
			sentence := fmt.Sprintf("read the line %q; %s is measured on %s%s", on, m.Characteristic, quoted(ch.Lines), didYouMean(on, ch.Lines))
			if f.src.Columns.Line != "" {
				_, where := cell(1)
				return bad(f.src.Columns.Line, where+sentence)
			}
			return bad("", sentence)
		}
		of := ""
		if m.Of != "" {
			of, _ = cell(4 + 2*i)
		}
		value, exposure, sentence := f.value(m, ch, text, of)
		if sentence != "" {
			return bad(m.Column, where+sentence)
		}
		found = append(found, measurement{rules.ProcessName(ch.Name, on), value, exposure})
	}
	if len(found) == 0 {
		return nil
	}
	f.last = at
	f.count(line, at, record, found)
	return nil
}

// count adds a row's measurements to the batch.
func (f *fileReader) count(line int, at time.Time, record []string, found []measurement) {
	b := f.batch
	row := len(b.Rows.Line)
	b.Rows.Line = append(b.Rows.Line, line)
	if f.src.Columns.Time != "" {
		b.Rows.Time = append(b.Rows.Time, at.UnixNano())
	}
	if f.src.Columns.Serial != "" {
		b.Rows.Serial = append(b.Rows.Serial, strings.Clone(strings.TrimSpace(record[f.columns[2]])))
	}
	for _, m := range found {
		i, ok := f.series[m.process]
		if !ok {
			i = len(b.Series)
			f.series[m.process] = i
			b.Series = append(b.Series, rules.Series{Process: m.process})
		}
		s := &b.Series[i]
		s.Row, s.Value = append(s.Row, row), append(s.Value, m.value)
		switch {
		case s.Of != nil:
			s.Of = append(s.Of, m.of)
		case m.of != 1:
			s.Of = append(slices.Repeat([]float64{1}, len(s.Value)-1), m.of)
		}
	}
}

// value reads the value of a characteristic; a sentence says what is wrong with it.
func (f *fileReader) value(m *config.Measured, ch *rules.Characteristic, text, of string) (value, exposure float64, sentence string) {
	exposure = m.OfIs
	if m.Of != "" {
		if exposure, sentence = f.number(of); sentence != "" {
			return 0, 0, fmt.Sprintf("in the column %q beside it, %s", m.Of, sentence)
		}
	}
	switch {
	case m.Pass != nil && slices.Contains(m.Pass, text):
		return 0, exposure, ""
	case m.Pass != nil && slices.Contains(m.Fail, text):
		return 1, exposure, ""
	case m.Pass != nil:
		return 0, 0, fmt.Sprintf("read %.60q; one of %s or %s was expected", text, quoted(m.Pass), quoted(m.Fail))
	}
	if value, sentence = f.number(text); sentence != "" {
		return 0, 0, sentence
	}
	value = float64(value*m.Scale) + m.Offset
	if !(value >= m.Lower && value <= m.Upper) {
		return 0, 0, fmt.Sprintf("read %.60q, which is %v %s; a plausible value between %v and %v was expected",
			text, value, ch.Unit, m.Lower, m.Upper)
	}
	if err := ch.Family.Accepts(value, exposure); err != nil {
		return 0, 0, fmt.Sprintf("read %.60q: %v", text, err)
	}
	return value, exposure, ""
}
