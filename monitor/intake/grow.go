package intake

import (
	"bytes"
	"crypto/sha256"
	"encoding"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"io"
	"slices"
	"time"

	"steelyard/rules"
)

// Progress is how far a growing file has been read: what must be committed in the transaction
// that takes its rows, and given back after a start. It is by content only: a file is the one
// whose first Offset bytes have this digest, whatever it is called.
type Progress struct {
	File    string    `json:"file"`
	Size    int64     `json:"size"`    // of the file when it was last looked at
	Written time.Time `json:"written"` // and its modification time
	Offset  int64     `json:"offset"`  // bytes dealt with: whole records, with the header before them
	Lines   int       `json:"lines"`   // lines in them
	Head    []byte    `json:"head"`    // the bytes up to the end of the header (and of the row of units)
	Digest  []byte    `json:"digest"`  // state of SHA-256 after Offset bytes
	Tail    string    `json:"tail"`    // SHA-256 of the last bytes before Offset, at most tailLength; hexadecimal
	Marks   []Mark    `json:"marks"`   // places before Offset, the first at the end of the first stretch
	Last    int64     `json:"last"`    // time of the last row, ns; 0 where there is none
	Stopped string    `json:"stopped"` // why nothing more is taken; "" where it is
	Broken  bool      `json:"broken"`  // it is stopped since it can't be read on

	// Files that had this name before, the latest first, without Earlier of their own: one may
	// turn up under another name.
	Earlier []Progress `json:"earlier,omitempty"`
}

// mostEarlier is how many files that had a name before are remembered.
const mostEarlier = 8

// Mark is the digest of the first bytes of a file.
type Mark struct {
	Offset int64  `json:"offset"`
	SHA256 string `json:"sha256"`
}

// growth is what a look at a growing file came to.
type growth struct {
	Reading *Reading // nil where there is nothing to tell
	Now     *Progress
	More    bool // the look ended before the end of what can be read
}

// Bounds of one look at a growing file.
const (
	longestStretch = 4 << 20
	tailLength     = 4 << 10
	longestHead    = 1 << 20
)

// errUnsettled says that a growing file is not what it was, and that it must stand still before
// it can be said what it is.
var errUnsettled = errors.New("the file is not what it was")

// sight is a growing file as it is looked at.
type sight struct {
	file     string
	content  io.ReaderAt
	size     int64 // bytes that can be read
	written  time.Time
	settled  bool // it has stood still
	thorough bool // all that was dealt with is to be compared, and not only the end of it
}

// grow looks at a growing file and reads the whole records that it has gained, up to a bound.
// Was is the progress under this name, nil where there is none; others are those under other
// names. What it decides is told at Follow; what must not be said of a file that still moves is
// errUnsettled.
func (r *Reader) grow(s *sight, was *Progress, others []*Progress) (*growth, error) {
	now := &Progress{File: s.file}
	if r.src.Form.Encoding == "utf-16" {
		return r.stop(now, s, "a file that grows is expected in UTF-8 or windows-1252, and this source declares UTF-16"), nil
	}
	var err error
	if was != nil {
		now, err = was.compare(s)
	}
	if err == nil && now.Offset == 0 && now.Stopped == "" {
		now, err = now.find(s, others)
	}
	if err != nil {
		return nil, err
	}
	now.Size, now.Written = s.size, s.written
	g := r.stop(now, s, "%s", now.Stopped)
	if now.Stopped == "" {
		if g, err = r.gain(now, s); err != nil {
			return nil, err
		}
	}
	if was != nil && was.Stopped != "" && was.Stopped == g.Now.Stopped {
		g.Reading = nil // it was told of
	}
	return g, nil
}

// stop is a growth that holds the file.
func (r *Reader) stop(now *Progress, s *sight, format string, args ...any) *growth {
	now.Size, now.Written, now.Stopped = s.size, s.written, fmt.Sprintf(format, args...)
	return &growth{Now: now, Reading: &Reading{Held: &rules.Held{
		Source: r.src.Name, File: now.File, Size: s.size, Reason: shown(now.File) + ": " + now.Stopped,
	}}}
}

// compare says what has become of a file: the progress to go on from.
func (was *Progress) compare(s *sight) (*Progress, error) {
	now := *was
	if !was.Broken {
		now.Stopped = ""
	}
	if was.Offset == 0 {
		return &Progress{File: was.File, Earlier: was.Earlier}, nil
	}
	if s.size >= was.Offset && was.Stopped == "" && !s.thorough {
		tail, err := tailOf(s.content, was.Offset)
		if err != nil || tail == was.Tail {
			return &now, err
		}
	}
	marks, err := was.allMarks()
	if err != nil {
		return nil, err
	}
	same, err := matched(s.content, s.size, marks)
	if err != nil {
		return nil, err
	}
	switch {
	case same == len(marks):
		return &now, nil
	case same == 0 && s.size < marks[0].Offset:
		return nil, errUnsettled // too little to say
	case same == 0:
		old := *was
		old.Earlier = nil
		earlier := append([]Progress{old}, was.Earlier...)
		return &Progress{File: was.File, Earlier: earlier[:min(len(earlier), mostEarlier)]}, nil
	case !s.settled:
		return nil, errUnsettled
	case s.size < marks[same].Offset:
		now.Stopped = fmt.Sprintf("the file has %d bytes, and rows up to byte %d were dealt with before: "+
			"rows that counted are no longer in it; expected rows to be added only. "+
			"Nothing of it is taken until they are back, or it begins with other rows", s.size, was.Offset)
	default:
		now.Stopped = fmt.Sprintf("the file was changed between byte %d and byte %d, in rows that were dealt with before; "+
			"expected rows to be added only. Nothing of it is taken until it is as it was, or begins with other rows",
			marks[same-1].Offset, marks[same].Offset)
	}
	return &now, nil
}

// find looks for a file under the other names: a new name may be that of a file that was dealt
// with, or of a copy of it that is still being made.
func (p *Progress) find(s *sight, others []*Progress) (*Progress, error) {
	best := &Progress{File: p.File, Earlier: p.Earlier}
	for _, o := range withEarlier(p, others) {
		if o.Offset <= best.Offset {
			continue
		}
		marks, err := o.allMarks()
		if err != nil {
			return nil, err
		}
		same, err := matched(s.content, s.size, marks)
		switch {
		case err != nil:
			return nil, err
		case same == len(marks):
			found := *o
			found.File, found.Earlier, best = p.File, p.Earlier, &found
		case same == 0 || best.Offset > 0:
		case s.size < marks[same].Offset || !s.settled:
			return nil, errUnsettled
		default:
			best.Stopped = fmt.Sprintf("the file begins with rows that were dealt with as %s, "+
				"and differs from that between byte %d and byte %d; expected a file of its own, or a whole copy",
				shown(o.File), marks[same-1].Offset, marks[same].Offset)
		}
	}
	if best.Offset > 0 && !best.Broken {
		best.Stopped = ""
	}
	return best, nil
}

// withEarlier are all files whose rows were dealt with, but for the one under p's name.
func withEarlier(p *Progress, others []*Progress) []*Progress {
	var all []*Progress
	for _, o := range append(slices.Clip(others), p) {
		if o != p {
			all = append(all, o)
		}
		for i := range o.Earlier {
			all = append(all, &o.Earlier[i])
		}
	}
	return all
}

// allMarks are the marks, with the last at Offset.
func (p *Progress) allMarks() ([]Mark, error) {
	sum, err := hashOf(p.Digest)
	if err != nil {
		return nil, err
	}
	return append(slices.Clone(p.Marks), Mark{p.Offset, hex.EncodeToString(sum.Sum(nil))}), nil
}

// matched says how many of the marks, from the first on, a content of a size agrees with.
func matched(content io.ReaderAt, size int64, marks []Mark) (n int, err error) {
	within := slices.IndexFunc(marks, func(m Mark) bool { return m.Offset > size })
	if within < 0 {
		within = len(marks)
	}
	err = along(content, marks[:within], func(i int, same bool) bool {
		if same {
			n = i + 1
		}
		return same
	})
	return n, err
}

// along hashes a content up to each mark in turn, and tells whether it agrees, until it is told
// to end.
func along(content io.ReaderAt, marks []Mark, tell func(i int, same bool) bool) error {
	sum, at := sha256.New(), int64(0)
	for i, m := range marks {
		if _, err := io.Copy(sum, io.NewSectionReader(content, at, m.Offset-at)); err != nil {
			return err
		}
		at = m.Offset
		if !tell(i, hex.EncodeToString(sum.Sum(nil)) == m.SHA256) {
			return nil
		}
	}
	return nil
}

func tailOf(content io.ReaderAt, offset int64) (string, error) {
	from := max(0, offset-tailLength)
	tail := make([]byte, offset-from)
	if _, err := content.ReadAt(tail, from); err != nil && !errors.Is(err, io.EOF) {
		return "", err
	}
	sum := sha256.Sum256(tail)
	return hex.EncodeToString(sum[:]), nil
}

func hashOf(digest []byte) (hash.Hash, error) {
	sum := sha256.New()
	if len(digest) > 0 {
		if err := sum.(encoding.BinaryUnmarshaler).UnmarshalBinary(digest); err != nil {
			return nil, fmt.Errorf("the state of SHA-256 that was kept of a growing file can't be used: %w", err)
		}
	}
	return sum, nil
}

// gain reads the records that a file has gained.
func (r *Reader) gain(now *Progress, s *sight) (*growth, error) {
	from := now.Offset
	text := make([]byte, min(s.size-from, longestStretch))
	n, err := s.content.ReadAt(text, from)
	if err != nil && !errors.Is(err, io.EOF) {
		return nil, err
	}
	text = text[:n]
	whole := from+int64(n) >= s.size
	zero := bytes.IndexByte(text, 0)
	if zero >= 0 {
		text = text[:zero]
	}
	e := r.extent(text, from == 0)
	g := &growth{Now: now}
	switch {
	case e.end > 0:
	case len(text) > longestHead+longestRecord:
		return r.stop(now, s, "no record ends within %d bytes behind line %d; expected rows", len(text), now.Lines), nil
	case zero >= 0 && !s.settled:
		return nil, errUnsettled
	case zero >= 0:
		return r.stop(now, s, "the file has zero bytes behind byte %d, which are no text; expected rows. "+
			"What is behind line %d waits until they have turned into text", from+int64(zero), now.Lines), nil
	default:
		return g, nil // nothing whole yet
	}
	before := now.Lines
	if from == 0 {
		now.Head = slices.Clone(text[:e.head])
		before = bytes.Count(now.Head, []byte("\n"))
	}
	reading := &Reading{}
	r.read(reading, now.File, s.written, append(slices.Clip(now.Head), text[e.head:e.end]...), before, now.Last)
	if reading.headed && e.end == e.head {
		return g, nil // a header, and no row yet
	}
	switch {
	case reading.Batch != nil || len(reading.Held.Rows) > 0:
		g.Reading = reading
	case !reading.headed || reading.broken:
		g.Reading = reading
	}
	if reading.Held != nil && (!reading.headed || reading.broken) {
		now.Stopped, now.Broken = reading.Held.Reason, true
	}
	now.Last = reading.last
	if err := now.advance(text[:e.end], int64(e.first), s.content); err != nil {
		return nil, err
	}
	g.More = (!whole || zero >= 0) && now.Stopped == ""
	return g, r.seal(g, from)
}

// extent is what of a text is whole: the header (from the start of a file only), the first
// record behind it, and all of them.
type extent struct{ head, first, end int }

// extent finds the records of a text, as they are written, that have ended.
func (r *Reader) extent(text []byte, start bool) (e extent) {
	offset := 0
	if start && bytes.HasPrefix(text, markUTF8) {
		offset = len(markUTF8)
	}
	var recs records
	recs.reset(text[offset:], r.src.Form.Delimiter)
	ended := func() bool { return recs.pos > 0 && recs.text[recs.pos-1] == '\n' }
	if start {
		for range r.src.Form.Preamble {
			if !recs.skip() {
				return e
			}
		}
		heads := 1
		if r.src.Form.UnitsRow {
			heads = 2
		}
		for range heads {
			ok, bad := recs.read()
			if !ok || bad != nil && bad.open || !ended() {
				return e
			}
		}
		e.head = offset + recs.pos
		e.end = e.head
	}
	for {
		ok, bad := recs.read()
		switch {
		case !ok || bad != nil && bad.open || !ended():
			return e
		case bad != nil && bad.whole:
			// It takes all that is behind it along, and so is a stretch of its own.
			if e.end == e.head {
				e.end = offset + 1 + bytes.LastIndexByte(recs.text, '\n')
			}
			return e
		}
		e.end = offset + recs.pos
		if e.first == 0 {
			e.first = e.end
		}
	}
}

// seal puts the place of a stretch into its reading. Its digest is that of the file up to the
// end of the stretch: two stretches may read the same, and yet both count.
func (r *Reader) seal(g *growth, from int64) error {
	if g.Reading == nil {
		return nil
	}
	sum, err := hashOf(g.Now.Digest)
	if err != nil {
		return err
	}
	copy(g.Reading.SHA256[:], sum.Sum(nil))
	text := hex.EncodeToString(g.Reading.SHA256[:])
	if b := g.Reading.Batch; b != nil {
		b.SHA256, b.From, b.To = text, from, g.Now.Offset
	} else {
		g.Reading.Held.SHA256, g.Reading.Held.Size = text, g.Now.Size
	}
	return nil
}

// advance takes the bytes of a stretch as dealt with; first is where its first record ends.
func (p *Progress) advance(stretch []byte, first int64, content io.ReaderAt) error {
	sum, err := hashOf(p.Digest)
	if err != nil {
		return err
	}
	p.Lines += bytes.Count(stretch, []byte("\n"))
	mark := func(offset int64) {
		p.Marks = thinned(append(slices.Clone(p.Marks), Mark{offset, hex.EncodeToString(sum.Sum(nil))}))
	}
	if p.Offset > 0 {
		mark(p.Offset)
	} else if first > 0 && first < int64(len(stretch)) {
		sum.Write(stretch[:first])
		mark(first)
		p.Offset, stretch = first, stretch[first:]
	}
	sum.Write(stretch)
	if p.Digest, err = sum.(encoding.BinaryMarshaler).MarshalBinary(); err != nil {
		return err
	}
	p.Offset += int64(len(stretch))
	if p.Tail, err = tailOf(content, p.Offset); err != nil {
		return err
	}
	return nil
}

// thinned keeps the first mark, and of the others ever fewer the farther back they are, so that
// their number grows with the logarithm of the file's size.
func thinned(marks []Mark) []Mark {
	end := marks[len(marks)-1].Offset
	kept, least := []Mark{marks[len(marks)-1]}, int64(tailLength)
	for i := len(marks) - 2; i > 0; i-- {
		if d := end - marks[i].Offset; d >= least {
			kept, least = append(kept, marks[i]), 2*d
		}
	}
	if len(marks) > 1 {
		kept = append(kept, marks[0])
	}
	slices.Reverse(kept)
	return kept
}
