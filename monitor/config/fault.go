package config

import (
	"fmt"
	"slices"
	"strings"
	"unicode/utf8"
)

// Fault is one thing that is wrong with a configuration.
type Fault struct {
	File     string
	Line     int    // counted from 1
	Column   int    // in characters, counted from 1
	Key      string // dotted: source.rig1.settle
	Text     string // the line as it stands in the file
	What     string // what was read
	Expected string
	Nearest  string // the known word nearest to what was read, where there is one
}

func (f *Fault) Error() string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s:%d:%d: ", f.File, f.Line, f.Column)
	if f.Key != "" {
		fmt.Fprintf(&b, "%s: ", f.Key)
	}
	b.WriteString(f.What)
	if f.Expected != "" {
		b.WriteString("; expected " + f.Expected)
	}
	if f.Nearest != "" {
		fmt.Fprintf(&b, " (did you mean %q?)", f.Nearest)
	}
	if f.Text != "" {
		fmt.Fprintf(&b, "\n    %s\n    %s^", f.Text, indent(f.Text, f.Column))
	}
	return b.String()
}

// indent is the white space under which the caret stands at a column.
func indent(text string, column int) string {
	var b strings.Builder
	for i, r := range []rune(text) {
		if i+1 >= column {
			break
		}
		if r != '\t' {
			r = ' '
		}
		b.WriteRune(r)
	}
	return b.String()
}

// Faults is everything that is wrong with a configuration, in the order of the file.
type Faults []*Fault

func (f Faults) Error() string {
	texts := []string{fmt.Sprintf("the configuration has %d faults:", len(f))}
	if len(f) == 1 {
		texts[0] = "the configuration has a fault:"
	}
	for _, fault := range f {
		texts = append(texts, fault.Error())
	}
	return strings.Join(texts, "\n")
}

// sorted puts the faults in the order of the file, each once.
func (f Faults) sorted() Faults {
	slices.SortStableFunc(f, func(a, b *Fault) int {
		if a.Line != b.Line {
			return a.Line - b.Line
		}
		return a.Column - b.Column
	})
	return slices.CompactFunc(f, func(a, b *Fault) bool { return *a == *b })
}

// place is where something stands: a line, and a column in characters.
type place struct{ line, column int }

// sourceText is the text of the file, for the lines that faults show.
type sourceText struct {
	name  string
	lines []string
}

func newSourceText(name string, text []byte) *sourceText {
	return &sourceText{name, strings.Split(strings.ReplaceAll(string(text), "\r\n", "\n"), "\n")}
}

func (s *sourceText) line(n int) string {
	if n < 1 || n > len(s.lines) {
		return ""
	}
	return s.lines[n-1]
}

// characters turns a column counted in bytes into one counted in characters.
func (s *sourceText) characters(line, column int) int {
	text := s.line(line)
	return utf8.RuneCountInString(text[:min(max(column-1, 0), len(text))]) + 1
}
