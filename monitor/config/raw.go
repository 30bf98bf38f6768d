package config

import (
	"errors"
	"fmt"
	"reflect"
	"strings"

	"github.com/pelletier/go-toml/v2"

	"steelyard/rules/claim"
)

// What the file holds, before it is checked. A value that may be written in more than one way
// is any.
type rawFile struct {
	Site           rawSite                      `toml:"site"`
	Characteristic map[string]rawCharacteristic `toml:"characteristic"`
	Source         map[string]rawSource         `toml:"source"`
	Reference      map[string]rawReference      `toml:"reference"`
	Line           map[string]rawLine           `toml:"line"`
	Rule           []rawRule                    `toml:"rule"`
	Feed           map[string]rawFeed           `toml:"feed"`
	Marks          *rawMarks                    `toml:"marks"`
}

type rawSite struct {
	Name      string `toml:"name"`
	TimeZone  string `toml:"time_zone"`
	DayStarts string `toml:"day_starts"`
	State     string `toml:"state"`
	DayLogs   string `toml:"day_logs"`

	DiskWarning string `toml:"disk_warning"`
}

type rawCharacteristic struct {
	Title     string    `toml:"title"`
	Family    string    `toml:"family"`
	Unit      string    `toml:"unit"`
	Lines     []string  `toml:"lines"`
	Limits    rawLimits `toml:"limits"`
	Plausible rawLimits `toml:"plausible"`
	Remember  any       `toml:"remember"`
	Prior     any       `toml:"prior"`
	Retests   string    `toml:"retests"`
	Serials   any       `toml:"serials"`

	CensoredAtMost *float64 `toml:"censored_at_most"`
	Stuck          any      `toml:"stuck"`
	Far            *float64 `toml:"far"`
}

type rawLimits struct {
	Lower *float64 `toml:"lower"`
	Upper *float64 `toml:"upper"`
}

type rawSource struct {
	Folder     string         `toml:"folder"`
	Files      string         `toml:"files"`
	Arrives    string         `toml:"arrives"`
	Settle     string         `toml:"settle"`
	Scan       string         `toml:"scan"`
	Largest    string         `toml:"largest"`
	Resent     string         `toml:"resent"`
	Rows       string         `toml:"rows"`
	Compressed string         `toml:"compressed"`
	Delimiter  string         `toml:"delimiter"`
	Decimal    string         `toml:"decimal"`
	Grouping   string         `toml:"grouping"`
	Encoding   string         `toml:"encoding"`
	UnitsRow   bool           `toml:"units_row"`
	Preamble   int            `toml:"preamble"`
	NoValue    []string       `toml:"no_value"`
	TimeFormat string         `toml:"time_format"`
	TimeZone   string         `toml:"time_zone"`
	Columns    map[string]any `toml:"columns"`

	Faults   rawFaults   `toml:"faults"`
	Variants rawVariants `toml:"variants"`
	Ahead    string      `toml:"ahead"`
	Behind   string      `toml:"behind"`
	Present  string      `toml:"present"`
}

type rawMarks struct {
	Folder string `toml:"folder"`
	Files  string `toml:"files"`
	Settle string `toml:"settle"`
	Scan   string `toml:"scan"`
}

type rawRule struct {
	Name       string   `toml:"name"`
	Claim      string   `toml:"claim"`
	Spread     string   `toml:"spread"`
	Raise      *float64 `toml:"raise"`
	Clear      *float64 `toml:"clear"`
	LeastUnits any      `toml:"least_units"`
	Priority   string   `toml:"priority"`
	Tell       []string `toml:"tell"`
	FirstCheck string   `toml:"first_check"`

	Quiet   string `toml:"quiet"`
	Line    string `toml:"line"`
	Source  string `toml:"source"`
	Process string `toml:"process"`
}

type rawFeed struct {
	Kind string `toml:"kind"`
	Path string `toml:"path"`
}

// decode reads the text strictly. What the TOML library finds is put into plain words.
func decode(src *sourceText, text []byte) (*rawFile, Faults) {
	raw := &rawFile{}
	err := toml.NewDecoder(strings.NewReader(string(text))).DisallowUnknownFields().Decode(raw)
	var (
		strict *toml.StrictMissingError
		bad    *toml.DecodeError
	)
	switch {
	case err == nil:
		return raw, nil
	case errors.As(err, &strict):
		var faults Faults
		for i := range strict.Errors {
			e := &strict.Errors[i]
			key := []string(e.Key())
			f := faultAt(src, e)
			f.What = fmt.Sprintf("the key %q is not known", key[len(key)-1])
			known := knownKeys(reflect.TypeFor[rawFile](), key[:len(key)-1])
			f.Expected = "one of " + strings.Join(known, ", ")
			f.Nearest = claim.Nearest(key[len(key)-1], known)
			faults = append(faults, f)
		}
		return raw, faults
	case errors.As(err, &bad):
		f := faultAt(src, bad)
		f.What = plainWords(bad.Error())
		return nil, Faults{f}
	}
	return nil, Faults{{File: src.name, Line: 1, Column: 1, What: err.Error()}}
}

func faultAt(src *sourceText, e *toml.DecodeError) *Fault {
	line, column := e.Position()
	return &Fault{
		File: src.name, Line: line, Column: src.characters(line, column), Key: strings.Join(e.Key(), "."), Text: src.line(line),
	}
}

// knownKeys are the keys that may stand in the table of a path.
func knownKeys(t reflect.Type, path []string) []string {
	for _, part := range path {
		switch t.Kind() {
		case reflect.Map, reflect.Slice, reflect.Pointer:
			if t = t.Elem(); t.Kind() == reflect.Struct {
				if next, ok := fieldOf(t, part); ok {
					t = next
				}
			}
		case reflect.Struct:
			next, ok := fieldOf(t, part)
			if !ok {
				return nil
			}
			t = next
		}
	}
	for t.Kind() == reflect.Slice || t.Kind() == reflect.Pointer || t.Kind() == reflect.Map {
		t = t.Elem()
	}
	if t.Kind() != reflect.Struct {
		return nil
	}
	var keys []string
	for i := range t.NumField() {
		keys = append(keys, t.Field(i).Tag.Get("toml"))
	}
	return keys
}

func fieldOf(t reflect.Type, key string) (reflect.Type, bool) {
	for i := range t.NumField() {
		if t.Field(i).Tag.Get("toml") == key {
			return t.Field(i).Type, true
		}
	}
	return nil, false
}

// plainWords takes the library's and Go's own words out of a message.
func plainWords(message string) string {
	message = strings.TrimPrefix(message, "toml: ")
	if i := strings.Index(message, "cannot decode TOML "); i >= 0 {
		rest := message[i+len("cannot decode TOML "):]
		read, into, _ := strings.Cut(rest, " into ")
		want := "another kind of value"
		for _, w := range []struct{ in, out string }{
			{"[]string", "a list of texts"}, {"string", "a text in quotes"}, {"float64", "a number"}, {"int", "a whole number"}, {"bool", "true or false"},
			{"struct", "a table"}, {"map", "a table"},
		} {
			if strings.Contains(into, w.in) {
				want = w.out
				break
			}
		}
		return fmt.Sprintf("this is of the kind %s; %s is expected", read, want)
	}
	return message
}
