package config

import (
	"cmp"
	"fmt"
	"math"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"steelyard/rules"
	"steelyard/rules/claim"
)

func (c *checker) sources(raw *rawFile) {
	folders := map[string]string{}
	for _, name := range inOrder(c, "source.", raw.Source) {
		r, key := raw.Source[name], "source."+name
		c.name(key, name)
		s := Source{Name: name, Files: c.pattern(key+".files", r.Files)}
		if r.Folder == "" {
			c.fault(key+".folder", "", `a folder such as "drop/rig1"`, "the source has no folder")
		}
		s.Folder = c.path(key+".folder", r.Folder, ".")
		if other, ok := folders[s.Folder]; ok {
			c.fault(key+".folder", "", "a folder of its own", "the source %q watches the same folder", other)
		}
		folders[s.Folder] = name
		if rel, err := filepath.Rel(c.cfg.Site.State, s.Folder); err == nil && filepath.IsLocal(rel) {
			c.fault(key+".folder", "", "a folder outside the state folder", "the drop folder %s lies in the state folder", s.Folder)
		}
		ways := []string{"whole", "growing"}
		if s.Arrives = cmp.Or(r.Arrives, "whole"); !slices.Contains(ways, s.Arrives) {
			c.fault(key+".arrives", claim.Nearest(s.Arrives, ways), `"whole", or "growing" where a rig appends to a file`, "read %q", r.Arrives)
		}
		if s.Arrives == "growing" && r.Encoding == "utf-16" {
			c.fault(key+".encoding", "", "utf-8 or windows-1252", "files that grow are not read in UTF-16")
		}
		s.Settle = c.duration(key+".settle", r.Settle, 2*time.Second, 0, time.Hour)
		s.Scan = c.duration(key+".scan", r.Scan, 30*time.Second, 100*time.Millisecond, time.Hour)
		s.Largest = c.size(key+".largest", r.Largest, 64e6)
		s.Resent = c.resent(key+".resent", r.Resent)
		c.form(key, &r, &s.Form)
		c.kindOfRows(key, &r, &s)
		c.columns(key+".columns", r.Columns, &s.Columns, raw)
		c.rowForm(key, &r, &s, raw)
		c.cfg.Sources = append(c.cfg.Sources, s)
	}
	if len(raw.Source) == 0 {
		c.fault("source", "", "a table such as [source.rig1]", "no source is configured")
	}
}

// kindOfRows reads how rows stand in a file, and whether it is compressed.
func (c *checker) kindOfRows(key string, r *rawSource, s *Source) {
	f := &s.Form
	kinds := []string{"csv", "json lines"}
	if f.Rows = cmp.Or(r.Rows, "csv"); !slices.Contains(kinds, f.Rows) {
		c.fault(key+".rows", claim.Nearest(f.Rows, kinds), `"csv" or "json lines"`, "read %q", r.Rows)
	}
	if f.Compressed = r.Compressed; f.Compressed != "" && f.Compressed != "gzip" {
		c.fault(key+".compressed", claim.Nearest(f.Compressed, []string{"gzip"}), `"gzip"`, "read %q", r.Compressed)
	}
	if s.Arrives == "growing" && (f.Rows != "csv" || f.Compressed != "") {
		c.fault(key+".arrives", "", `"whole"`, "only CSV that is not compressed is read while it grows")
	}
	if f.Rows != "json lines" {
		return
	}
	if f.Decimal != '.' || f.Grouping != 0 || f.Preamble != 0 || f.UnitsRow || r.Delimiter != "" {
		c.fault(key+".rows", "", "json lines without delimiter, decimal, grouping, preamble and units_row", "keys that are for CSV stand beside it")
	}
}

func (c *checker) form(key string, r *rawSource, f *Form) {
	delimiters := map[string]byte{"": ',', ",": ',', ";": ';', "tab": '\t', "\t": '\t'}
	var ok bool
	if f.Delimiter, ok = delimiters[r.Delimiter]; !ok {
		c.fault(key+".delimiter", "", `",", ";" or "tab"`, "read %q", r.Delimiter)
	}
	f.Decimal = '.'
	switch r.Decimal {
	case "", ".":
	case ",":
		f.Decimal = ','
	default:
		c.fault(key+".decimal", "", `"." or ","`, "read %q", r.Decimal)
	}
	switch {
	case r.Grouping == "":
	case len(r.Grouping) == 1 && strings.Contains(" .,'", r.Grouping) && r.Grouping[0] != f.Decimal && r.Grouping[0] != f.Delimiter:
		f.Grouping = r.Grouping[0]
	default:
		c.fault(key+".grouping", "", `a blank, ".", "," or "'", and neither the decimal sign nor the delimiter`, "read %q", r.Grouping)
	}
	f.Encoding = cmp.Or(r.Encoding, "utf-8")
	if encodings := []string{"utf-8", "utf-16", "windows-1252"}; !slices.Contains(encodings, f.Encoding) {
		c.fault(key+".encoding", claim.Nearest(f.Encoding, encodings), strings.Join(encodings, ", "), "there is no encoding %q", r.Encoding)
	}
	if r.Preamble < 0 || r.Preamble > 10000 {
		c.fault(key+".preamble", "", "a number of lines from 0 to 10000", "read %d", r.Preamble)
	}
	f.Preamble, f.UnitsRow, f.NoValue, f.TimeFormat = r.Preamble, r.UnitsRow, r.NoValue, r.TimeFormat
	if !c.has(key + ".no_value") {
		f.NoValue = []string{""}
	}
	if f.TimeFormat == "" {
		f.TimeFormat = "iso"
	}
	if f.TimeFormat != "iso" {
		for _, token := range []string{"YYYY", "MM", "DD", "hh", "mm"} {
			if !strings.Contains(f.TimeFormat, token) {
				c.fault(key+".time_format", "", `"iso", or a pattern of YYYY, MM, DD, hh, mm and ss such as "DD.MM.YYYY hh:mm:ss"`, "the pattern %q has no %s", f.TimeFormat, token)
				break
			}
		}
	}
	f.Zone = c.zone(key+".time_zone", r.TimeZone, c.cfg.Site.Zone)
}

func (c *checker) columns(key string, table map[string]any, out *Columns, raw *rawFile) {
	names := slices.Collect(func(yield func(string) bool) {
		for name := range table {
			if !yield(name) {
				return
			}
		}
	})
	slices.SortFunc(names, func(a, b string) int {
		pa, pb := c.at[key+"."+a], c.at[key+"."+b]
		if pa.line != pb.line {
			return pa.line - pb.line
		}
		return strings.Compare(a, b)
	})
	for _, name := range names {
		k, v := key+"."+name, table[name]
		switch name {
		case "time":
			out.Time = c.text(k, v)
		case "serial":
			out.Serial = c.text(k, v)
		case "line":
			c.line(k, v, out)
		default:
			c.measured(k, name, v, out, raw)
		}
	}
	if out.Line == "" && out.LineIs == "" {
		c.fault(key+".line", "", `the column that names the line, or { fixed = "L1" }`, "the source does not say which line its rows are about")
	}
	if len(out.Measured) == 0 {
		c.fault(key, "", `a key for each characteristic, such as head = "Head kPa"`, "the source measures no characteristic")
	}
}

func (c *checker) text(key string, v any) string {
	s, ok := v.(string)
	if !ok || s == "" {
		c.fault(key, "", "the name of a column", "read %v", v)
	}
	return s
}

func (c *checker) line(key string, v any, out *Columns) {
	table, ok := v.(map[string]any)
	if !ok {
		out.Line = c.text(key, v)
		return
	}
	fixed, ok := table["fixed"].(string)
	if !ok || len(table) != 1 {
		c.fault(key, "", `{ fixed = "L1" }`, "read %v", v)
		return
	}
	out.LineIs = fixed
	known := false
	var lines []string
	for _, ch := range c.cfg.Plan.Characteristics {
		known = known || slices.Contains(ch.Lines, fixed)
		lines = append(lines, ch.Lines...)
	}
	if !known {
		c.fault(key+".fixed", claim.Nearest(fixed, lines), "a line of some characteristic", "there is no line %q", fixed)
	}
}

// measured reads the column of a characteristic: its name, or a table that says more.
func (c *checker) measured(key, name string, v any, out *Columns, raw *rawFile) {
	ch, ok := c.cfg.Plan.Characteristic(name)
	if !ok {
		known := append(c.characteristicNames(), "time", "line", "serial")
		c.fault(key, claim.Nearest(name, known), "time, line, serial or a characteristic", "there is no characteristic %q", name)
		return
	}
	m := Measured{Characteristic: name, OfIs: 1, Scale: 1}
	m.Lower, m.Upper = plausible(raw.Characteristic[name].Plausible)
	if table, isTable := v.(map[string]any); isTable {
		c.measuredTable(key, table, ch, &m)
	} else {
		m.Column = c.text(key, v)
	}
	out.Measured = append(out.Measured, m)
}

func (c *checker) measuredTable(key string, table map[string]any, ch *rules.Characteristic, m *Measured) {
	known := []string{"column", "scale", "offset", "beyond"}
	switch ch.Family {
	case "binomial":
		known = []string{"column", "of", "pass", "fail"}
	case "poisson":
		known = []string{"column", "exposure"}
	}
	for name, v := range table {
		k := key + "." + name
		switch {
		case !slices.Contains(known, name):
			c.fault(k, claim.Nearest(name, known), "one of "+strings.Join(known, ", "), "the key %q is not known here", name)
		case name == "column":
			m.Column = c.text(k, v)
		case name == "pass":
			m.Pass = c.texts(k, v)
		case name == "fail":
			m.Fail = c.texts(k, v)
		case name == "of" || name == "exposure":
			if column, ok := v.(string); ok {
				m.Of = column
			} else {
				m.OfIs = c.number(k, v)
			}
		case name == "beyond":
			m.Beyond = c.boolean(k, v)
		case name == "scale":
			m.Scale = c.number(k, v)
		case name == "offset":
			m.Offset = c.number(k, v)
		}
	}
	if m.Column == "" {
		c.fault(key+".column", "", "the name of a column", "the characteristic has no column")
	}
	if m.Scale == 0 || m.Of == "" && !(m.OfIs > 0) {
		c.fault(key, "", "a number that is not 0", "read a scale, number or exposure that can't be")
	}
	if (m.Pass == nil) != (m.Fail == nil) {
		c.fault(key, "", `both: pass = ["OK"] and fail = ["NOK"]`, "one of pass and fail is missing")
	}
}

// plausible are the values that a row may have, infinite where none is declared.
func plausible(l rawLimits) (lower, upper float64) {
	lower, upper = math.Inf(-1), math.Inf(1)
	if l.Lower != nil {
		lower = *l.Lower
	}
	if l.Upper != nil {
		upper = *l.Upper
	}
	return lower, upper
}

func (c *checker) number(key string, v any) float64 {
	switch x := v.(type) {
	case int64:
		return float64(x)
	case float64:
		if c.finite(key, x) {
			return x
		}
		return 1
	}
	c.fault(key, "", "a number", "read %v", v)
	return 1
}

func (c *checker) texts(key string, v any) []string {
	list, ok := v.([]any)
	var out []string
	for _, x := range list {
		s, isText := x.(string)
		ok = ok && isText
		out = append(out, s)
	}
	if !ok || len(out) == 0 {
		c.fault(key, "", `a list of texts such as ["OK", "PASS"]`, "read %v", fmt.Sprint(v))
	}
	return out
}
