package monitor

import (
	"bytes"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/monitor/intake"
	"steelyard/rules"
	"steelyard/store"
)

// writtenMark is one line of a file in the folder of marks.
type writtenMark struct {
	Line           string `json:"line"`
	Characteristic string `json:"characteristic"`
	Process        string `json:"process"`
	Source         string `json:"source"`
	At             string `json:"at"` // RFC 3339 with an offset
	Note           string `json:"note"`
	By             string `json:"by"`
}

// takeMarks turns a file from the folder of marks into segments, one for each line that can be
// understood; the others are held. A mark is about the moment at which it arrives, so two files
// may say the same and both count; under a name that was dealt with nothing counts twice.
func (d *Desk) takeMarks(a *intake.Arrival, known *knownFiles) error {
	old, seen, err := d.store.File(a.Source, a.File)
	if err != nil {
		return err
	}
	memory := store.FileMemory{
		Source: a.Source, File: a.File, Size: a.Size, Written: a.Written.UnixNano(), SHA256: a.Reading.SHA256, Counted: old.Counted,
	}
	held := &rules.Held{Source: a.Source, File: a.File, Size: a.Size}
	var list []happening
	switch {
	case a.Content == nil: // it was not read; intake says why
		held = a.Reading.Held
	case seen && old.Counted && old.SHA256 == a.Reading.SHA256:
		list = append(list, happening{event: rules.Event{Again: &rules.Again{
			Source: a.Source, File: a.File, SHA256: hex.EncodeToString(a.Reading.SHA256[:]), First: old.Index, Name: a.Source + " " + a.File,
		}}})
	case seen && old.Counted:
		held.Reason = fmt.Sprintf("%s: a file of marks of this name was taken before with other content (record %d); "+
			"drop new marks under a new name", a.File, old.Index)
	default:
		list = d.readMarks(a, held)
		memory.Counted = len(list) > 0
	}
	if a.Content != nil && (held.Reason != "" || len(held.Rows) > 0) {
		held.SHA256 = hex.EncodeToString(a.Reading.SHA256[:])
		if held.Kept, err = intake.Keep(d.heldFolder(), a.Reading.SHA256, a.Content); err != nil {
			return fmt.Errorf("%w: %w", store.ErrStorage, err)
		}
	}
	if held.Reason != "" || len(held.Rows) > 0 {
		list = append(list, happening{event: rules.Event{Held: held}})
	}
	for i := range list {
		list[i].files = []store.FileMemory{memory}
	}
	outcomes, refused, err := d.commit(list)
	if err != nil {
		return err
	}
	for i := range list {
		if refused[i] != nil {
			// It passed a moment ago: another mark came between.
			d.log.Error().Err(refused[i]).Str("file", a.File).Msg("a mark was not taken")
			continue
		}
		d.report(&list[i].event, &outcomes[i])
	}
	known.note(memory)
	return nil
}

// readMarks reads the lines of a file of marks. What can't be taken goes to held.
func (d *Desk) readMarks(a *intake.Arrival, held *rules.Held) (list []happening) {
	at := d.now().UTC()
	for i, line := range strings.Split(strings.TrimPrefix(string(a.Content), "\ufeff"), "\n") {
		line = strings.TrimSuffix(line, "\r")
		if strings.TrimSpace(line) == "" {
			continue
		}
		segment, err := d.readMark(line, a.File)
		if err == nil {
			d.mu.Lock()
			err = d.state.CheckSegment(&rules.Event{At: at, Segment: segment})
			d.mu.Unlock()
		}
		if err != nil {
			held.Rows = append(held.Rows, rules.HeldRow{Line: i + 1, Text: line, Reason: fmt.Sprintf("%s, line %d: %v", a.File, i+1, err)})
			continue
		}
		list = append(list, happening{event: rules.Event{Segment: segment}})
	}
	switch {
	case len(list) == 0 && len(held.Rows) == 0:
		held.Reason = a.File + `: the file holds no mark; expected lines such as {"line":"L3","note":"new boring insert","by":"the setter"}`
	case len(held.Rows) > 0:
		held.Reason = fmt.Sprintf("%s: %d of its lines can't be taken as marks; %d are taken", a.File, len(held.Rows), len(list))
	}
	return list
}

func (d *Desk) readMark(line, file string) (*rules.Segment, error) {
	var w writtenMark
	decoder := json.NewDecoder(bytes.NewReader([]byte(line)))
	decoder.DisallowUnknownFields()
	if err := decoder.Decode(&w); err != nil {
		return nil, fmt.Errorf(`read what is no mark (%s); expected one object such as {"line":"L3","note":"new boring insert","by":"the setter"}`, plainJSONError(err))
	}
	if _, err := decoder.Token(); !errors.Is(err, io.EOF) {
		return nil, errors.New("something follows the object; expected one mark a line")
	}
	m := Mark{
		Line: w.Line, Characteristic: w.Characteristic, Process: w.Process, Source: w.Source,
		Note: w.Note, By: w.By, How: "as written in file " + file + " of the folder of marks",
	}
	if strings.TrimSpace(w.By) == "" {
		return nil, errors.New(`the mark does not say who sets it; expected "by"`)
	}
	if w.At != "" {
		var err error
		if m.At, err = time.Parse(time.RFC3339, w.At); err != nil {
			return nil, fmt.Errorf(`read the time %q; expected one with an offset, such as "2026-03-02T14:00:00+00:00"`, w.At)
		}
	}
	return d.segment(&m)
}

// plainJSONError takes the library's name off an error.
func plainJSONError(err error) string { return strings.TrimPrefix(err.Error(), "json: ") }

// watchMarks gives the source that the folder of marks is watched as.
func watchMarks(cfg *config.Config) []*config.Source {
	if cfg.Marks == nil {
		return nil
	}
	return []*config.Source{cfg.Marks}
}
