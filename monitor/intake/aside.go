package intake

import (
	"bytes"
	"fmt"
	"slices"
	"strings"
	"time"

	"steelyard/rules"
	"steelyard/rules/claim"
)

// aboutRow is what a source declares about whole rows: which are about a fault of the rig, which
// about a variant that is not weighed or that has characteristics of its own, and which about a
// reference part.
type aboutRow struct {
	group    map[string]int // of a variant: 0 as the columns have it, 1 and on its own, passOver
	variants []string       // that are declared, for sentences

	bySerial  map[string][]part
	byVariant map[string][]part
	offsets   []string // the rig's, by name

	arrived func() time.Time // nil where it is not known when files arrive
}

// passOver is the group of variants whose rows are left out.
const passOver = -1

// part is a reference part that a row may be about.
type part struct {
	measure   int // index into Reader.measures
	offset    int // index into aboutRow.offsets
	certified float64
}

// about is what the current row is about, and when it arrived.
type about struct {
	group            int
	parts            []part
	knowsArrival     bool
	arrival          time.Time
	earliest, latest int64 // ns: when a row that arrived then may have been measured
}

// asideRow is one row left out: which, and why.
type asideRow struct{ line, why int } // why is an index into the batch's Aside

// mostAside is how many reasons for leaving rows out are told apart in one file.
const mostAside = 64

// Arriving tells the reader what clock says when a file arrives, so that it can hold rows whose
// time lies too far ahead of it, or behind. It must be called before anything is read.
func (r *Reader) Arriving(now func() time.Time) { r.aboutRow.arrived = now }

// prepare makes ready what the source declares about rows.
func (r *Reader) prepare() {
	a := &r.aboutRow
	v := &r.src.Variants
	if v.Column != "" {
		a.group = map[string]int{}
		for i, variant := range v.Own {
			a.group[variant] = i + 1
		}
		for _, variant := range v.Count {
			a.group[variant] = 0
		}
		for _, variant := range v.PassOver {
			a.group[variant] = passOver
		}
		a.variants = slices.Concat(v.Count, v.Own, v.PassOver)
	}
	for i := range r.measures {
		if variant := r.measures[i].Variant; variant != "" {
			r.measures[i].group = a.group[variant]
		}
	}
	a.bySerial, a.byVariant = map[string][]part{}, map[string][]part{}
	for _, p := range r.src.Parts {
		at := slices.IndexFunc(r.measures, func(m measure) bool { return m.Measured.Characteristic == p.Characteristic && m.Variant == "" })
		if at < 0 {
			r.unfit = fmt.Sprintf("the source measures no %q, of which it is to measure the reference part %q", p.Characteristic, p.Name)
			continue
		}
		offset := slices.Index(a.offsets, p.Offset)
		if offset < 0 {
			offset = len(a.offsets)
			a.offsets = append(a.offsets, p.Offset)
		}
		one := part{measure: at, offset: offset, certified: p.Certified}
		for _, serial := range p.Serials {
			a.bySerial[serial] = append(a.bySerial[serial], one)
		}
		for _, variant := range p.Variants {
			a.byVariant[variant] = append(a.byVariant[variant], one)
		}
	}
}

// arrives notes when the file that is about to be read arrived.
func (p *pass) arrives() {
	if p.aboutRow.arrived == nil {
		return
	}
	p.knowsArrival, p.arrival = true, p.aboutRow.arrived()
	p.latest = p.arrival.Add(p.src.Ahead).UnixNano()
	if p.src.Behind > 0 {
		p.earliest = p.arrival.Add(-p.src.Behind).UnixNano()
	}
}

// untimely says why a row can't have been measured when it says; "" where it can.
func (p *pass) untimely(ns int64, text []byte) string {
	switch {
	case !p.knowsArrival:
		return ""
	case ns > p.latest:
		return fmt.Sprintf("read %s, which is %s after it arrived; expected a time at most %s ahead (\"ahead\" of the source): look at the rig's clock and its zone",
			quote(text), length(time.Duration(ns-p.arrival.UnixNano())), length(p.src.Ahead))
	case p.src.Behind > 0 && ns < p.earliest:
		return fmt.Sprintf("read %s, which is %s before it arrived; expected a time at most %s back (\"behind\" of the source)",
			quote(text), length(time.Duration(p.arrival.UnixNano()-ns)), length(p.src.Behind))
	}
	return ""
}

// length writes a time as a person says it: in seconds, hours, or days.
func length(d time.Duration) string {
	switch {
	case d >= 48*time.Hour:
		return fmt.Sprintf("%d days", d/(24*time.Hour))
	case d >= time.Second:
		text := d.Round(time.Second).String()
		if strings.HasSuffix(text, "m0s") {
			text = strings.TrimSuffix(text, "0s")
		}
		return text
	}
	return d.String()
}

// weighed finds out what the row is about; it is false where that is nothing to be weighed, and then
// the row is dealt with.
func (p *pass) weighed() bool {
	p.group, p.parts = 0, nil
	if p.at.fault >= 0 {
		if code := trim(p.recs.field(p.at.fault)); slices.Contains(p.src.Faults.Codes, string(code)) {
			p.leaveOut(rules.Fault, code)
			return false
		}
	}
	if len(p.aboutRow.offsets) > 0 && p.at.serial >= 0 {
		p.parts = p.aboutRow.bySerial[string(trim(p.recs.field(p.at.serial)))]
	}
	if p.at.variant < 0 {
		return true
	}
	variant := trim(p.recs.field(p.at.variant))
	if p.parts == nil {
		p.parts = p.aboutRow.byVariant[string(variant)]
	}
	if p.parts != nil {
		return true
	}
	group, known := p.aboutRow.group[string(variant)]
	switch {
	case known && group != passOver:
		p.group = group
		return true
	case p.isBlank():
	case known || p.src.Variants.Others == "pass over":
		p.leaveOut(rules.Variant, variant)
	default:
		near := ""
		if n := claim.Nearest(string(variant), p.aboutRow.variants); n != "" {
			near = fmt.Sprintf(" (did you mean %q?)", n)
		}
		p.hold(p.at.variant+1, "read the variant %s; expected one of %s%s", quote(variant), quotes(p.aboutRow.variants), near)
	}
	return false
}

// leaveOut numbers a row that is left out as declared.
func (p *pass) leaveOut(kind string, text []byte) {
	if len(text) > longestQuoted {
		text = bytes.ToValidUTF8(text[:longestQuoted], nil)
	}
	why := slices.IndexFunc(p.asideSums, func(a rules.Aside) bool { return a.Kind == kind && a.Text == string(text) })
	if why < 0 {
		if why = len(p.asideSums); why >= mostAside {
			why, text = mostAside, []byte("…") // all that are left
		}
		if why == len(p.asideSums) {
			p.asideSums = append(p.asideSums, rules.Aside{Kind: kind, Text: string(text), First: p.recs.line})
		}
	}
	p.asideSums[why].Rows++
	p.asideSums[why].Last = p.recs.line
	p.aside = append(p.aside, asideRow{p.recs.line, why})
}

// asksPart says whether a measure is wanted of the row: of one about a reference part, only what the
// part is certified for.
func (p *pass) asksPart(measure int) bool {
	return p.parts == nil || slices.ContainsFunc(p.parts, func(one part) bool { return one.measure == measure })
}

// countParts adds what was read of a reference part to the rig's offsets.
func (p *pass) countParts(ns int64, serial []byte) {
	for i := range p.now {
		if c := &p.now[i]; c.text != nil && c.side != 0 {
			p.hold(p.at.value[i]+1, "read %s of a reference part; expected a value within the gauge's limits", quote(c.text))
			return
		}
	}
	row := p.countRow(ns, serial)
	for _, one := range p.parts {
		if c := &p.now[one.measure]; c.text != nil {
			p.desk.offsets[one.offset].add(row, c.value-one.certified, 1)
		}
	}
}

// signs stand before a limit that a reading lies beyond.
var signs = []struct {
	text string
	side int
}{{">=", 1}, {"<=", -1}, {">", 1}, {"<", -1}, {"≥", 1}, {"≤", -1}}

// beyond takes the sign off a reading that the gauge could only bound: ">200".
func beyond(text []byte) (limit []byte, side int) {
	for _, s := range signs {
		if rest, ok := bytes.CutPrefix(text, []byte(s.text)); ok {
			return trim(rest), s.side
		}
	}
	return text, 0
}

// joined makes one series of those of one process: a characteristic may be that of several variants.
func joined(list []rules.Series) []rules.Series {
	for i := 0; i < len(list); i++ {
		for j := i + 1; j < len(list); j++ {
			if list[i].Process == list[j].Process {
				list[i] = join(list[i], list[j])
				list = slices.Delete(list, j, j+1)
				j--
			}
		}
	}
	return list
}

// join merges two series of one process in the order of their rows.
func join(a, b rules.Series) rules.Series {
	all := rules.Series{Process: a.Process}
	of := func(s *rules.Series, i int) float64 {
		if s.Of == nil {
			return 1
		}
		return s.Of[i]
	}
	isOne := a.Of == nil && b.Of == nil
	take := func(s *rules.Series, i int) {
		all.Row, all.Value = append(all.Row, s.Row[i]), append(all.Value, s.Value[i])
		if !isOne {
			all.Of = append(all.Of, of(s, i))
		}
	}
	i, j := 0, 0
	for i < len(a.Row) || j < len(b.Row) {
		if j == len(b.Row) || i < len(a.Row) && a.Row[i] < b.Row[j] {
			take(&a, i)
			i++
		} else {
			take(&b, j)
			j++
		}
	}
	all.Beyond = append(slices.Clone(a.Beyond), b.Beyond...)
	slices.SortFunc(all.Beyond, func(x, y rules.Bound) int { return x.Row - y.Row })
	return all
}
