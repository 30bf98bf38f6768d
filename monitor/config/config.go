// Package config reads the configuration: TOML in, one checked Config out, or every fault
// at once, each with its file, line, column, the text, what was expected and the nearest
// known word.
//
// What the engine reads of it is Config.Plan; the rest is for the daemon around the engine.
// A Config is complete: defaults are filled in, names are resolved, rules that are spread
// over lines are written out, claims are in canonical form, paths are absolute.
package config

import (
	"time"

	"steelyard/rules"
)

// Config is a whole checked configuration.
type Config struct {
	File    string // as it was given
	Digest  string // SHA-256 of the file, hexadecimal
	Site    Site
	Plan    rules.Plan
	Sources []Source          // in the order of the file
	Feeds   []Feed            // in the order of the file
	Runs    map[string]Rhythm // when a line runs; a line that is not named runs always

	// Marks is the folder of marks, watched as a source is; nil where there is none. Nothing in
	// it is measured: its Columns are empty.
	Marks *Source
}

// MarksName is what the folder of marks is called among the sources.
const MarksName = "marks"

// Site is where the program stands.
type Site struct {
	Name      string
	Zone      *time.Location // of the production day, and of files that do not say
	DayStarts Clock          // when a production day starts, by the clock on the wall
	State     string         // folder of the store, the journal's volumes and held files; absolute
	DayLogs   string         // folder of the day logs; absolute

	DiskWarning int64 // bytes: with less room on the disk of State there is a warning
}

// Clock is a time of day.
type Clock struct{ Hour, Minute int }

// Feed is one way of telling people.
type Feed struct {
	Name string
	Kind string // "file"
	Path string // absolute
}

// Source is a drop folder and how its files are read.
type Source struct {
	Name    string
	Folder  string        // absolute
	Files   string        // pattern of file names, as path.Match has it: "*.csv"
	Arrives string        // "whole"; "growing" where a rig appends to a file
	Settle  time.Duration // a file is read once it has not changed for this long; 0..1h
	Scan    time.Duration // the folder is looked through this often whatever the watcher says
	Largest int64         // bytes; a larger file is held unread
	Resent  string        // other content under a name that was counted: "hold", "add" or "replace"
	Form    Form
	Columns Columns

	Faults   FaultCodes
	Variants Variants
	Parts    []Part        // reference parts that the source may measure
	Ahead    time.Duration // a row measured later than this beyond its arrival is held; above 0
	Behind   time.Duration // a row measured longer than this before its arrival is held; 0: none is
	Present  string        // name of a file that is always in the folder: without it, it is another; "": none
}

// Form is how the text of a file is to be taken.
type Form struct {
	Rows       string   // "csv", or "json lines": one object a line, its members named as columns
	Compressed string   // "", or "gzip"
	Delimiter  byte     // ',', ';' or '\t'
	Decimal    byte     // '.' or ','
	Grouping   byte     // 0, or the character between groups of three digits: ' ', '.', ',', '\''
	Encoding   string   // "utf-8" (a mark at the start is taken off), "utf-16", "windows-1252"
	Preamble   int      // lines before the header, passed over
	UnitsRow   bool     // the line after the header holds units, not measurements
	NoValue    []string // field texts that stand for "no value": "", "NaN", "9999"
	TimeFormat string   // "iso" or a pattern such as "DD.MM.YYYY hh:mm:ss"
	Zone       *time.Location
}

// Columns say which column holds what; a name stands for itself in the header.
type Columns struct {
	Time     string // "" where there is none: the time of arrival is used
	Line     string // "" where LineIs is set
	LineIs   string // the fixed line
	Serial   string // "" where there is none
	Measured []Measured
}

// Measured is one characteristic in the file. A measured value is Value*Scale + Offset,
// in the characteristic's unit.
type Measured struct {
	Characteristic string
	Column         string   // value (normal, lognormal), counted (binomial) or count (poisson)
	Of             string   // column of the number looked at, or of the exposure; "" where OfIs is set
	OfIs           float64  // the fixed number looked at or exposure; 1 by default
	Scale, Offset  float64  // 1 and 0 by default
	Lower, Upper   float64  // plausible values, in the characteristic's unit; -Inf, +Inf where not declared
	Pass, Fail     []string // binomial by words: texts that count 0 and 1; nil where numbers are written
	Beyond         bool     // ">200" is a reading beyond the gauge's limit
	Variant        string   // of the rows it is read from; "": of those that Variants.Count names, or all
}
