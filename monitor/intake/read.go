// Package intake notices the files in drop folders, waits until they have settled, and reads
// them: each row is either counted or held with a reason. It never writes into a drop folder,
// follows no link out of one, and opens no device or pipe in one.
//
//	folder ──► Watch ──► settled? ──► Reader.Read ──► Arrival ──► the one writer
//
// Reading is pure: a Reader turns the bytes of one file into a Reading, with no clock and no
// disk. Watch does the noticing for one source. What becomes of a Reading is for the monitor.
//
// A file that can't be understood as a whole is held whole: its header lacks a column, a quote
// never closes, it is empty. Else each row stands for itself. It counts when its line, its
// time, its serial and every mapped cell of it that is not "no value" can be read, and is held
// otherwise, all of it: no half of a row counts. A row in which every measured cell is "no
// value", or which is blank, is neither counted nor held. A file of which no row counts is
// held whole, with its rows.
//
// Where things are: read.go the Reader; text.go, records.go, numeral.go, clock.go and stamp.go
// how encodings, records, numbers and times are read; gzip.go and
// jsonlines.go two other forms; header.go and rows.go what they mean;
// aside.go which rows are about something else: a fault of the rig, another variant, a reference part;
// account.go the account row by row; say.go how sentences show what was read; watch.go,
// folder.go, look.go the watching; grow.go and follow.go files that grow; keep.go the copies of
// what is held.
package intake

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"slices"
	"sync"
	"time"
	"unicode/utf8"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// Reading is what one file comes to: a Batch where any row counts, with the rows beside them
// that are held; else Held, the file whole with the reason. Never both. It shares no memory
// with the content that was read.
type Reading struct {
	SHA256  [32]byte // of the bytes as they were read; zero where they were not
	Batch   *rules.Batch
	Held    *rules.Held
	NoValue []int    // lines of rows in which every measured cell stands for "no value"
	Ignored []string // columns of the file that nothing is mapped to
	Remarks []string // sentences on what had to be decided: times that the clock showed twice
	Cut     bool     // the text of a held row was too long to be kept beside its reason

	aside     []asideRow    // rows left out as declared
	asideSums []rules.Aside // and how many for which reason
	headed    bool          // the header was understood
	broken    bool          // what is behind the last row can't be read
	last      int64         // the time of the last row, ns; 0 where there is none
}

// Reader reads the files of one source. It may be used by several goroutines.
type Reader struct {
	src      *config.Source
	lines    []string       // every line that a mapped characteristic has
	lineOf   map[string]int // index into lines
	fixed    int            // index of the fixed line; -1 where a column says it
	measures []measure
	noValue  []string
	still    clock // as it is before a file
	unfit    string
	desks    sync.Pool // of *desk
	aboutRow aboutRow
}

// measure is one characteristic of the source.
type measure struct {
	config.Measured
	*rules.Characteristic
	on         []bool // by index into Reader.lines: whether it is measured on that line
	everywhere bool   // on all of them
	group      int    // of the rows it is read from: see aboutRow
}

// NewReader makes the reader of a source under a plan. Both must come from one checked
// configuration: a source that does not fit its plan holds every file, with a sentence.
func NewReader(src *config.Source, plan *rules.Plan) *Reader {
	r := &Reader{
		src: src, lineOf: map[string]int{}, fixed: -1, noValue: src.Form.NoValue, still: newClock(&src.Form),
	}
	r.desks.New = func() any { return newDesk(r) }
	for i := range src.Columns.Measured {
		m := &src.Columns.Measured[i]
		ch, ok := plan.Characteristic(m.Characteristic)
		if !ok {
			r.unfit = fmt.Sprintf("the source measures %q, which is no characteristic of the plan", m.Characteristic)
			continue
		}
		for _, line := range ch.Lines {
			if _, ok := r.lineOf[line]; !ok {
				r.lineOf[line] = len(r.lines)
				r.lines = append(r.lines, line)
			}
		}
		r.measures = append(r.measures, measure{Measured: *m, Characteristic: ch})
	}
	for i := range r.measures {
		r.measures[i].on = make([]bool, len(r.lines))
		for _, line := range r.measures[i].Lines {
			r.measures[i].on[r.lineOf[line]] = true
		}
		r.measures[i].everywhere = !slices.Contains(r.measures[i].on, false)
	}
	if src.Columns.Line == "" {
		var ok bool
		if r.fixed, ok = r.lineOf[src.Columns.LineIs]; !ok {
			r.unfit = fmt.Sprintf("the source is about the line %q, on which none of its characteristics is measured",
				src.Columns.LineIs)
		}
	}
	r.prepare()
	return r
}

// Read reads the content of a file, which was last written at a moment.
func (r *Reader) Read(file string, written time.Time, content []byte) *Reading {
	return r.read(&Reading{SHA256: sha256.Sum256(content)}, file, written, content, 0, 0)
}

// read reads a content into a reading that has its digest. Where lines is set, what is behind
// the header in it stands behind so many lines of the file, and the row before it had the time
// last.
func (r *Reader) read(g *Reading, file string, written time.Time, content []byte, lines int, last int64) *Reading {
	p := pass{Reader: r, Reading: g, file: file, desk: r.desks.Get().(*desk)}
	defer p.leave()
	p.begin()
	p.before, p.clock.last, p.clock.lasted = lines, last, last != 0
	sum := hex.EncodeToString(g.SHA256[:])
	sentence := r.unfit
	if sentence == "" {
		sentence = p.read(content)
	}
	g.last = p.clock.last
	if sentence == "" && len(p.line) == 0 && len(p.asideSums) == 0 {
		sentence = p.nothing()
	}
	if sentence != "" {
		g.Held = &rules.Held{
			Source: r.src.Name, File: file, SHA256: sum, Size: int64(len(content)),
			Reason: shown(file) + p.where + ": " + sentence, Rows: p.held,
		}
		return g
	}
	g.Batch = &rules.Batch{
		Source: r.src.Name, File: file, SHA256: sum, To: int64(len(content)), Written: written.UTC(),
		Rows: p.rows(), Series: p.allSeries(), Held: p.held, Aside: g.asideSums, Ignored: g.Ignored,
	}
	if remark := p.clock.remark(); remark != "" {
		g.Remarks = append(g.Remarks, shown(file)+": "+remark)
	}
	g.Batch.Remarks = g.Remarks
	return g
}

// pass is one reading of one file.
type pass struct {
	*Reader
	*Reading
	*desk
	file     string
	doubtful bool   // somewhere there are bytes that are not UTF-8
	where    string // of a sentence that holds the whole file: ", line 3"
	names    []string
	held     []rules.HeldRow
	heldText int
	before   int    // lines of the file that were read before, with the header
	about           // of the current row
	first    string // why the first row is held, without the file's name
}

// Bounds on the rows of a file that are held one by one; beyond, the file is held whole.
const (
	mostHeldRows = 10000
	mostHeldText = 8 << 20 // bytes
	fewHeldRows  = 20      // that are listed of a file held whole for that
)

// read reads a file; a sentence says why it is held whole.
func (p *pass) read(content []byte) (sentence string) {
	if len(content) == 0 {
		return "the file is empty; expected a header and rows"
	}
	if p.src.Form.Compressed == "gzip" {
		if content, sentence = unpacked(content, p.src.Largest); sentence != "" {
			return sentence
		}
	}
	text, sentence := decode(&p.src.Form, content)
	if sentence != "" {
		return sentence
	}
	if len(bytes.TrimSpace(text)) == 0 {
		return "the file is empty but for blanks; expected a header and rows"
	}
	if i := bytes.IndexByte(text, 0); i >= 0 {
		return p.zero(text, i)
	}
	p.doubtful = !utf8.Valid(text)
	if p.src.Form.Rows == "json lines" {
		return p.objects(text)
	}
	p.recs.reset(text, p.src.Form.Delimiter)
	for i := range p.src.Form.Preamble {
		if !p.recs.skip() {
			return fmt.Sprintf("the file ends after %d lines; expected a header behind %d lines that come first (\"preamble\")",
				i+1, p.src.Form.Preamble)
		}
	}
	if sentence := p.header(); sentence != "" {
		return sentence
	}
	p.headed = true
	return p.records()
}

// records reads the rows behind the header.
func (p *pass) records() (sentence string) {
	if p.src.Form.UnitsRow {
		if _, bad := p.recs.read(); bad != nil && bad.whole {
			return p.misread(bad)
		}
	}
	if p.before > 0 {
		p.recs.next = p.before + 1
	}
	for {
		ok, bad := p.recs.read()
		switch {
		case !ok:
			return ""
		case bad != nil && bad.whole:
			return p.misread(bad)
		case bad != nil:
			p.hold(bad.field, "%s", bad.sentence)
		default:
			p.row()
		}
		if sentence := p.tooMuch(); sentence != "" {
			return sentence
		}
	}
}

// zero is the sentence for a file with zero bytes. They are no text: a file system leaves them
// where a file was not written to its end before the power failed, and a copy where it broke
// off. Such a file may come again whole, so no part of it counts.
func (p *pass) zero(text []byte, at int) string {
	p.where = fmt.Sprintf(", line %d", 1+bytes.Count(text[:at], []byte("\n")))
	kind := "which are no text; expected text to the end"
	if len(bytes.TrimRight(text, "\x00")) == at {
		kind = "up to its end; expected text: the file may not have been written to its end"
	}
	return fmt.Sprintf("the file has zero bytes from here (%d in all), %s", bytes.Count(text, []byte{0}), kind)
}

// misread is the sentence for a file that can't be read on.
func (p *pass) misread(bad *flaw) string {
	p.broken = true
	p.where = fmt.Sprintf(", line %d", p.recs.line)
	return p.column(bad.field) + bad.sentence + "; rows behind it could be misread, so the file is held whole"
}

// tooMuch ends a reading when more is held than a person can go through.
func (p *pass) tooMuch() string {
	if len(p.held) <= mostHeldRows && p.heldText <= mostHeldText {
		return ""
	}
	n := len(p.held)
	p.broken = true
	p.held = p.held[:min(n, fewHeldRows)]
	return fmt.Sprintf("%d rows up to line %d can't be counted, which is too many to hold one by one; the first: %s",
		n, p.recs.line, p.first)
}

// nothing says why a file without a fault has nothing to count.
func (p *pass) nothing() string {
	switch n := len(p.held); {
	case n == 1:
		return "no row counts; one is held: " + p.first
	case n > 1:
		return fmt.Sprintf("no row counts; %d are held, the first of them: %s", n, p.first)
	case len(p.NoValue) > 0:
		return fmt.Sprintf("none of its %d rows has a value in a column that is measured", len(p.NoValue))
	}
	return "the file has a header and no rows; expected rows"
}
