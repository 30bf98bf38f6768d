// Package rules is the engine: what an event makes the program believe and say.
//
// An Event is anything that can change what the program believes or says. State.Apply is a
// deterministic function of the state, the event and, where the event takes a batch out, the
// journal before it (History): what was counted can't be subtracted, so the memories are made
// anew of what remains. It reads no clock, no file of its own and no random number, it logs
// nothing, and the same events from the same state give the same Outcomes on any machine. So what was rehearsed is what runs, and what ran can be
// verified: run drives it with live events, verify with the journal, explain over one
// crossing.
//
//	event ──► State.Apply ──► Outcomes
//	              │
//	            State
//
// A Plan is the part of the configuration that the engine reads; adopting one is an event
// like any other. Processes are named characteristic.line, as in head.L4.
//
// What the program says of an alarm is written here too (words.go), from outcomes alone,
// so that a message, the day log and an explanation use the same words.
package rules

import (
	"time"

	"steelyard/rules/evidence"
	"steelyard/rules/posterior"
)

// Plan is what the engine is told to do: the characteristics and the rules over them.
type Plan struct {
	Site            string           `json:"site"`
	Characteristics []Characteristic `json:"characteristics"`
	Offsets         []Offset         `json:"offsets,omitempty"`
	Rules           []Rule           `json:"rules"`
}

// Characteristic is what is measured on each of its lines.
type Characteristic struct {
	Name     string             `json:"name"`
	Title    string             `json:"title,omitempty"` // for people: "delivery head"; Name where empty
	Unit     string             `json:"unit,omitempty"`
	Family   posterior.Family   `json:"family"`
	Lines    []string           `json:"lines"`
	Lower    *float64           `json:"lower,omitempty"` // limits of the characteristic, in Unit
	Upper    *float64           `json:"upper,omitempty"`
	Prior    posterior.Prior    `json:"prior"`
	Remember posterior.Remember `json:"remember"`
	Retests  Retests            `json:"retests,omitzero"`
	Gauge    Gauge              `json:"gauge,omitzero"`
}

// Rule is a claim with its two thresholds, the least evidence, a priority, and who is told.
// Rules spread over the lines of a characteristic are written out before they get here.
type Rule struct {
	Name       string         `json:"name"`
	Claim      string         `json:"claim"`                 // in canonical form
	Raise      float64        `json:"raise"`                 // probability, 0.5 < Raise < 1
	Clear      float64        `json:"clear"`                 // probability, 0 < Clear < Raise
	LeastUnits int            `json:"least_units"`           // of every process of the claim
	LeastOf    map[string]int `json:"least_of,omitempty"`    // of one process, where it differs
	Priority   string         `json:"priority"`              // low, medium, high
	Tell       []string       `json:"tell,omitempty"`        // names of feeds
	FirstCheck string         `json:"first_check,omitempty"` // what to look at first, in the site's words
	SpreadOf   string         `json:"spread_of,omitempty"`   // the rule it was written out from
	Quiet      *Quiet         `json:"quiet,omitempty"`       // in place of a claim, which is then empty
}

// Event is one thing that happened. Exactly one of the pointers is set. Index is the
// event's place in the journal, counted from 0; At is when the program took it in, in UTC.
type Event struct {
	Index        uint64        `json:"index"`
	At           time.Time     `json:"at"`
	Started      *Started      `json:"started,omitempty"`
	Stopped      *Stopped      `json:"stopped,omitempty"`
	Adopted      *Adopted      `json:"adopted,omitempty"`
	Batch        *Batch        `json:"batch,omitempty"`
	Held         *Held         `json:"held,omitempty"`
	Again        *Again        `json:"again,omitempty"`
	Segment      *Segment      `json:"segment,omitempty"`
	Acknowledged *Acknowledged `json:"acknowledged,omitempty"`
	Watching     *Watching     `json:"watching,omitempty"`
	Sealed       *Sealed       `json:"sealed,omitempty"`
	Withdrawn    *Withdrawn    `json:"withdrawn,omitempty"`
	Decided      *Decided      `json:"decided,omitempty"`
	Moment       *Moment       `json:"moment,omitempty"`
	Stepped      *Stepped      `json:"stepped,omitempty"`
}

// Started says that a program began to watch.
type Started struct {
	Program   string    `json:"program"`             // version of the program, with its revision
	Host      string    `json:"host"`                // name of the machine
	LastAlive time.Time `json:"last_alive,omitzero"` // when the program before it was last known to be watching
	Clean     bool      `json:"clean"`               // whether that one had ended in order
}

// Stopped says that a program ended in order.
type Stopped struct {
	Why string `json:"why"`
}

// Adopted puts a plan in force.
type Adopted struct {
	Plan   Plan   `json:"plan"`
	Digest string `json:"digest"` // SHA-256 of the configuration file, hexadecimal
	File   string `json:"file"`   // its name, as given
	By     string `json:"by"`     // who adopted it, as far as the program can tell
}

// Batch is what was accepted from one file, or one stretch of a growing file.
type Batch struct {
	Source  string    `json:"source"`
	File    string    `json:"file"`             // relative to the source's folder
	SHA256  string    `json:"sha256"`           // of the bytes read, hexadecimal
	From    int64     `json:"from"`             // first byte of the stretch
	To      int64     `json:"to"`               // the byte after the last
	Written time.Time `json:"written,omitzero"` // the file's modification time
	Rows    Rows      `json:"rows"`
	Series  []Series  `json:"series"`
	Held    []HeldRow `json:"held,omitempty"`    // rows of the same file that were not counted
	Aside   []Aside   `json:"aside,omitempty"`   // rows of the same file that were left out as declared
	Remarks []string  `json:"remarks,omitempty"` // sentences on what had to be decided to read the file
	Ignored []string  `json:"ignored,omitempty"` // columns of the file that nothing is mapped to

	// Replaces are batches that this one takes the place of: they are withdrawn with it.
	Replaces []uint64 `json:"replaces,omitempty"`
	// Decided is the decision by which what was held is counted after all; nil of all others.
	Decided *Decided `json:"decided,omitempty"`
}

// Rows say where each counted row stands and what it is about; the slices are of one
// length, but for Time and Serial, which are nil where the source has no such column.
type Rows struct {
	Line   []int    `json:"line"`             // line of the file, counted from 1
	Time   []int64  `json:"time,omitempty"`   // when it was measured, ns since 1970 UTC
	Serial []string `json:"serial,omitempty"` // of the unit
}

// Series are the values of one process in a batch. Of is nil where it is 1 throughout. Of an Offset,
// a value is what was read of a reference part minus what that part is certified to be.
type Series struct {
	Process string    `json:"process"`
	Row     []int     `json:"row"`              // index into Rows, ascending
	Value   []float64 `json:"value"`            // normal, lognormal: value; binomial: counted; poisson: count
	Of      []float64 `json:"of,omitempty"`     // binomial: of how many; poisson: exposure
	Beyond  []Bound   `json:"beyond,omitempty"` // readings that the gauge could only bound; Row ascending
}

// Held is a file that was not counted, with the reason.
type Held struct {
	Source string    `json:"source"`
	File   string    `json:"file"`
	SHA256 string    `json:"sha256,omitempty"` // empty where the content could not be read
	Size   int64     `json:"size"`
	Reason string    `json:"reason"`         // a sentence: file, line, column, what was read, what was expected
	Kept   string    `json:"kept,omitempty"` // name of the copy in the state folder
	Rows   []HeldRow `json:"rows,omitempty"`
}

// HeldRow is one row that was not counted, whole.
type HeldRow struct {
	Line   int    `json:"line"`
	Column string `json:"column,omitempty"`
	Text   string `json:"text"` // the row as it was written, decoded to UTF-8
	Reason string `json:"reason"`
}

// Again says that content already taken arrived once more and was not counted.
type Again struct {
	Source string `json:"source"`
	File   string `json:"file"`
	SHA256 string `json:"sha256"`
	First  uint64 `json:"first"` // index of the event that took it
	Name   string `json:"name"`  // the source and file under which it was taken
}

// Segment starts a new segment of processes. Without Since it begins with what is taken in
// after it, whenever that was measured. With Since, a moment before the event and not before
// the segment that it ends, it begins there: what was measured earlier does not count in it,
// also where it arrives later, and what was measured since and has arrived counts.
type Segment struct {
	Processes []string  `json:"processes"`
	Since     time.Time `json:"since,omitzero"`
	Note      string    `json:"note"`
	By        string    `json:"by"`
	How       string    `json:"how"`
}

// Acknowledged answers an alarm.
type Acknowledged struct {
	Alarm int    `json:"alarm"`
	By    string `json:"by"`
	How   string `json:"how"` // how By was established
	Note  string `json:"note,omitempty"`
}

// Watching says that a source could no longer, or could again, be looked at.
type Watching struct {
	Source string `json:"source"`
	Able   bool   `json:"able"`
	Why    string `json:"why"`
}

// Withdrawn takes batches out: the state is then as if they had never been counted. Batches
// says which; Source, From and To how they were chosen, where that was by a stretch of time.
type Withdrawn struct {
	Batches []uint64  `json:"batches"`          // indexes of the events that counted them, ascending
	Source  string    `json:"source,omitempty"` // every batch of this source
	From    time.Time `json:"from,omitzero"`    // with a measurement made from here on
	To      time.Time `json:"to,omitzero"`      // and before this
	Reason  string    `json:"reason"`
	By      string    `json:"by"`
	How     string    `json:"how"` // how By was established
}

// Decided is a person's decision on something held. One to take it is part of the batch that it
// brings, so that both are one record; one to set it aside for good is an event of its own.
type Decided struct {
	Held   uint64 `json:"held"`            // the event that held it
	Lines  []int  `json:"lines,omitempty"` // rows of a file that was counted, ascending; none: a file held whole
	Take   bool   `json:"take"`
	Reason string `json:"reason"`
	By     string `json:"by"`
	How    string `json:"how"` // how By was established
}

// Sealed says that older records were moved into a volume, a file beside the store, and which bytes it has.
type Sealed struct {
	From   uint64 `json:"from"` // first record
	To     uint64 `json:"to"`   // the record after the last
	File   string `json:"file"`
	SHA256 string `json:"sha256"` // hexadecimal
}

// AlarmState is the state a rule is in, in the words of ISA-18.2 / IEC 62682.
type AlarmState string

// The states.
const (
	Normal         AlarmState = "normal"
	Unacknowledged AlarmState = "unacknowledged"
	Acked          AlarmState = "acknowledged"
	Returned       AlarmState = "returned" // to normal, not yet acknowledged
)

// Outcomes are what followed from one event.
type Outcomes struct {
	Looks   []Look   `json:"looks,omitempty"`
	Changes []Change `json:"changes,omitempty"`
	Remarks []string `json:"remarks,omitempty"` // sentences for the day log
}

// Look is one evaluation of a rule. Withheld says why there was none to make.
type Look struct {
	Rule       int     `json:"rule"`        // index into Plan.Rules
	LogFor     float64 `json:"log_for"`     // log P(claim); LogZero stands for probability 0
	LogAgainst float64 `json:"log_against"` // log P(not claim)
	Withheld   string  `json:"withheld,omitempty"`
}

// LogZero stands for the logarithm of 0 where numbers must be finite.
const LogZero = -1e300

// Odds are the two sides of the look.
func (l Look) Odds() evidence.Odds {
	return evidence.Odds{LogFor: l.LogFor, LogAgainst: l.LogAgainst}
}

// Cause is why an alarm changed.
type Cause string

// The causes.
const (
	Raised          Cause = "raised"           // the probability reached raise
	Cleared         Cause = "cleared"          // the probability fell to clear
	Answered        Cause = "answered"         // a person acknowledged it
	Replaced        Cause = "replaced"         // the rule raised again before this one was answered
	PlanChanged     Cause = "plan changed"     // the rule was edited or taken out
	TakenOut        Cause = "withdrawn"        // batches were withdrawn, and without them it does not stand
	EvidenceRestart Cause = "evidence restart" // a new segment: too few units to weigh the claim
)

// Change is one step of one alarm. It carries what is needed to speak of it.
type Change struct {
	Alarm    int                `json:"alarm"` // A7 is 7: the seventh alarm this store has raised
	Step     int                `json:"step"`  // steps of this alarm, counted from 1
	Rule     string             `json:"rule"`
	Version  string             `json:"version"` // of the rule: see Rule.Version
	From     AlarmState         `json:"from"`
	To       AlarmState         `json:"to"`
	Cause    Cause              `json:"cause"`
	At       time.Time          `json:"at"`
	Look     *Look              `json:"look,omitempty"` // of a raise or clear
	Since    time.Time          `json:"since,omitzero"` // of a quiet rule that raised: when something was last counted
	Quantity *evidence.Interval `json:"quantity,omitempty"`
	Units    []Units            `json:"units,omitempty"`
	Source   string             `json:"source,omitempty"` // of the batch that did it
	File     string             `json:"file,omitempty"`
	By       string             `json:"by,omitempty"` // of an answer, a new segment or a withdrawal
	How      string             `json:"how,omitempty"`
	Note     string             `json:"note,omitempty"`
}

// Units say how many units of a process a look rested on.
type Units struct {
	Process string  `json:"process"`
	N       float64 `json:"n"`
}
