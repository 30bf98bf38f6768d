package monitor

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
	"steelyard/rules/claim"
)

// Mark is what a person asks to start a segment of. Exactly one of Line, Characteristic,
// Process and Source is set.
type Mark struct {
	Line           string
	Characteristic string
	Process        string
	Source         string    // every process that the rig feeds
	At             time.Time // when it was; zero: now
	Note           string
	By, How        string
}

// Marked is what followed from a mark.
type Marked struct {
	Type      string    `json:"type"` // "marked"
	Record    uint64    `json:"record"`
	At        time.Time `json:"at"`
	Since     time.Time `json:"since"`
	Processes []string  `json:"processes"`
	Note      string    `json:"note"`
	By        string    `json:"by"`
	How       string    `json:"how"`
	Changes   []Step    `json:"changes"` // of alarms, that followed
	Caution   string    `json:"caution"`
}

// Mark starts a segment: what was measured before no longer counts, and stays in the journal.
func (d *Desk) Mark(m Mark) (*Marked, error) {
	segment, err := d.segment(&m)
	if err != nil {
		return nil, err
	}
	list := []happening{{event: rules.Event{Segment: segment}}}
	outcomes, refused, err := d.commit(list)
	if err = errors.Join(err, refusal(refused)); err != nil {
		return nil, err
	}
	e := &list[0].event
	d.report(e, &outcomes[0])
	a := &Marked{
		Type: "marked", Record: e.Index, At: e.At, Since: segment.Since, Processes: segment.Processes, Note: m.Note, By: m.By, How: m.How,
		Changes: d.stepsOf(e, &outcomes[0]), Caution: rules.ReleaseNote,
	}
	if a.Since.IsZero() {
		a.Since = e.At
	}
	return a, nil
}

// segment is the event that a mark asks for.
func (d *Desk) segment(m *Mark) (*rules.Segment, error) {
	if m.Note = strings.TrimSpace(m.Note); m.Note == "" {
		return nil, errors.New("a mark needs a note: what was changed, such as \"new boring insert\"")
	}
	processes, err := processesOf(d.cfg, m)
	if err != nil {
		return nil, err
	}
	return &rules.Segment{Processes: processes, Since: m.At.UTC(), Note: m.Note, By: m.By, How: m.How}, nil
}

// processesOf are the processes that a mark is about, in the order of the plan.
func processesOf(cfg *config.Config, m *Mark) ([]string, error) {
	named := 0
	for _, name := range []string{m.Line, m.Characteristic, m.Process, m.Source} {
		if name != "" {
			named++
		}
	}
	if named != 1 {
		return nil, fmt.Errorf("a mark is about one line, one characteristic, one process or one source; %d are named", named)
	}
	what, name, known := "line", m.Line, []string(nil)
	var chosen []string
	for i := range cfg.Plan.Characteristics {
		c := &cfg.Plan.Characteristics[i]
		for _, line := range c.Lines {
			process := rules.ProcessName(c.Name, line)
			if m.Line == line || m.Characteristic == c.Name || m.Process == process || m.Source != "" && feeds(cfg, m.Source, c.Name, line) {
				chosen = append(chosen, process)
			}
			switch {
			case m.Process != "":
				known = append(known, process)
			case m.Characteristic != "":
				known = append(known, c.Name)
			default:
				known = append(known, line)
			}
		}
	}
	for _, o := range cfg.Plan.Offsets { // a rig that is calibrated has another offset, too
		if m.Source == o.Source || m.Process == o.Name {
			chosen = append(chosen, o.Name)
		}
		if m.Process != "" {
			known = append(known, o.Name)
		}
	}
	switch {
	case m.Characteristic != "":
		what, name = "characteristic", m.Characteristic
	case m.Process != "":
		what, name = "process", m.Process
	case m.Source != "":
		what, name, known = "source", m.Source, nil
		for _, s := range cfg.Sources {
			known = append(known, s.Name)
		}
	}
	if len(chosen) == 0 {
		near := ""
		if n := claim.Nearest(name, known); n != "" {
			near = fmt.Sprintf("; did you mean %q?", n)
		}
		return nil, fmt.Errorf("there is no %s %q in the configuration%s", what, name, near)
	}
	return chosen, nil
}

// feeds says whether a source can bring measurements of a process.
func feeds(cfg *config.Config, source, characteristic, line string) bool {
	i := slices.IndexFunc(cfg.Sources, func(s config.Source) bool { return s.Name == source })
	if i < 0 {
		return false
	}
	columns := &cfg.Sources[i].Columns
	return (columns.LineIs == "" || columns.LineIs == line) &&
		slices.ContainsFunc(columns.Measured, func(m config.Measured) bool { return m.Characteristic == characteristic })
}
