// Package feed tells people, from the outbox.
//
// A message is put into the outbox by the transaction that caused it, and taken out once a
// feed has delivered it; so it may be delivered twice, with the same id, and is never
// dropped. Each message is one CloudEvents 1.0 event in the JSON format: an alarm's change,
// with the figures and the words.
//
// A feed is one small interface, Feed; Open makes the one a configuration asks for. A feed
// starts no goroutine: the monitor calls it, one batch of messages at a time.
package feed

import (
	"context"
	"encoding/json"
	"fmt"
	"strconv"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// Feed delivers messages in order. Deliver returns nil once all of them are where they
// should be, durably; after an error any of them may have arrived.
type Feed interface {
	Deliver(ctx context.Context, messages [][]byte) error
}

// Open makes the feed that the configuration describes.
func Open(c config.Feed) (Feed, error) {
	if c.Kind == "file" {
		return &File{Path: c.Path}, nil
	}
	return nil, fmt.Errorf("feed %s: there is no kind %q; file is the one there is", c.Name, c.Kind)
}

// Message is an alarm's change as one CloudEvents 1.0 event.
type Message struct {
	SpecVersion     string    `json:"specversion"`
	ID              string    `json:"id"`     // A7.1: the first step of alarm A7
	Source          string    `json:"source"` // urn:uuid: and the origin of the store
	Type            string    `json:"type"`
	Subject         string    `json:"subject"` // name of the rule
	Time            time.Time `json:"time"`
	DataContentType string    `json:"datacontenttype"`
	Data            Data      `json:"data"`

	// Checkpoint is a signed checkpoint of the journal that covers the record told of: it is added when the
	// message is delivered, and proves later that the journal up to there was not changed.
	Checkpoint string `json:"checkpoint,omitempty"`
}

// Type of every message of this version.
const Type = "steelyard.alarm.changed.v1"

// Data is what a message says.
type Data struct {
	Site        string           `json:"site"`
	Alarm       string           `json:"alarm"` // A7
	Step        int              `json:"step"`
	Journal     uint64           `json:"journal"` // index of the record
	Cause       rules.Cause      `json:"cause"`
	From        rules.AlarmState `json:"from"`
	To          rules.AlarmState `json:"to"`
	Priority    string           `json:"priority,omitempty"`
	Rule        string           `json:"rule"`
	Version     string           `json:"version"`
	Claim       string           `json:"claim,omitempty"`
	Raise       float64          `json:"raise,omitempty"`
	Clear       float64          `json:"clear,omitempty"`
	Probability json.Number      `json:"probability,omitempty"`
	Contrary    json.Number      `json:"contrary,omitempty"`
	Log10Odds   json.Number      `json:"log10_odds,omitempty"`
	Estimate    *Estimate        `json:"estimate,omitempty"`
	Units       []rules.Units    `json:"units,omitempty"`
	BatchOf     string           `json:"source,omitempty"` // the source of the batch that did it
	File        string           `json:"file,omitempty"`
	By          string           `json:"by,omitempty"`
	Note        string           `json:"note,omitempty"`
	Headline    string           `json:"headline"`
	Text        string           `json:"text"`
	Caution     string           `json:"caution"`
}

// Estimate is the median and central 95 % interval of the claim's quantity.
type Estimate struct {
	Median json.Number `json:"median"`
	Lower  json.Number `json:"lower"`
	Upper  json.Number `json:"upper"`
}

// Compose makes the message of one change, under the plan that was in force when it
// happened. Site, the journal's index and the origin of the store say where it comes from.
func Compose(plan *rules.Plan, c *rules.Change, index uint64, origin string, zone *time.Location) ([]byte, error) {
	told := plan.Tell(c, zone)
	data := Data{
		Site: plan.Site, Alarm: AlarmName(c.Alarm), Step: c.Step, Journal: index, Cause: c.Cause, From: c.From, To: c.To,
		Rule: c.Rule, Version: c.Version, Units: c.Units, BatchOf: c.Source, File: c.File, By: c.By, Note: c.Note,
		Headline: strings.TrimSuffix(told[0], "."), Text: strings.Join(told, " "), Caution: rules.ReleaseNote,
	}
	if r, ok := plan.Rule(c.Rule); ok {
		data.Priority, data.Claim, data.Raise, data.Clear = r.Priority, r.Claim, r.Raise, r.Clear
	}
	if c.Look != nil {
		odds := c.Look.Odds()
		data.Probability, data.Contrary = digits17(odds.Probability()), digits17(odds.Contrary())
		data.Log10Odds = digits17(odds.Log10())
	}
	if c.Quantity != nil {
		data.Estimate = &Estimate{digits17(c.Quantity.Median), digits17(c.Quantity.Lower), digits17(c.Quantity.Upper)}
	}
	return json.Marshal(Message{
		SpecVersion: "1.0", ID: ID(c), Source: "urn:uuid:" + origin, Type: Type, Subject: c.Rule,
		Time: c.At.In(zone), DataContentType: "application/json", Data: data,
	})
}

// ID is the stable id of a change's message, one and the same in every feed.
func ID(c *rules.Change) string { return fmt.Sprintf("%s.%d", AlarmName(c.Alarm), c.Step) }

// AlarmName is how people call an alarm: A7.
func AlarmName(number int) string { return "A" + strconv.Itoa(number) }

// digits17 writes a number with 17 significant digits, which read back to the same float64.
func digits17(x float64) json.Number {
	return json.Number(strconv.FormatFloat(x, 'g', 17, 64))
}
