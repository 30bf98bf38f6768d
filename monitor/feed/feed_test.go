package feed

import (
	"encoding/json"
	"os"
	"path/filepath"
	"testing"
	"time"

	"steelyard/rules"
	"steelyard/rules/evidence"
)

// What a crash left of a line goes before the next one is written; whole lines stay.
func TestFileAfterACrash(t *testing.T) {
	path := filepath.Join(t.TempDir(), "sub", "leads.jsonl")
	f := &File{Path: path}
	if err := f.Deliver(t.Context(), [][]byte{[]byte(`{"a":1}`)}); err != nil {
		t.Fatal(err)
	}
	for _, rest := range []string{`{"half`, "\x00\x00\x00"} {
		file, err := os.OpenFile(path, os.O_APPEND|os.O_WRONLY, 0)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := file.WriteString(rest); err != nil {
			t.Fatal(err)
		}
		if err := file.Close(); err != nil {
			t.Fatal(err)
		}
		if err := f.Deliver(t.Context(), [][]byte{[]byte(`{"b":2}`)}); err != nil {
			t.Fatal(err)
		}
	}
	text, err := os.ReadFile(path)
	if want := "{\"a\":1}\n{\"b\":2}\n{\"b\":2}\n"; err != nil || string(text) != want {
		t.Errorf("%q, want %q, %v", text, want, err)
	}
}

// The attributes that CloudEvents 1.0 requires are there (section "Required attributes"), and
// numbers carry 17 digits.
func TestCloudEvent(t *testing.T) {
	plan := &rules.Plan{Site: "Tessmoor Pumpworks", Rules: []rules.Rule{{Name: "r", Claim: "mean(head.L1) > 1", Raise: 0.99, Clear: 0.8, Tell: []string{"leads"}}}}
	c := &rules.Change{Alarm: 7, Step: 1, Rule: "r", To: rules.Unacknowledged, Cause: rules.Raised, At: time.Unix(1e9, 0).UTC(),
		Look: &rules.Look{LogFor: -0.0069, LogAgainst: -4.98}, Quantity: &evidence.Interval{Median: 0.1, Lower: 1. / 3, Upper: 2}}
	body, err := Compose(plan, c, 12, "11111111-2222-4333-8444-555555555555", time.UTC)
	if err != nil {
		t.Fatal(err)
	}
	var event map[string]any
	if err := json.Unmarshal(body, &event); err != nil {
		t.Fatal(err)
	}
	for key, want := range map[string]string{
		"specversion": "1.0", "id": "A7.1", "source": "urn:uuid:11111111-2222-4333-8444-555555555555", "type": Type, "time": "2001-09-09T01:46:40Z",
	} {
		if event[key] != want {
			t.Errorf("%s: %v, want %s", key, event[key], want)
		}
	}
	var m Message
	if err := json.Unmarshal(body, &m); err != nil {
		t.Fatal(err)
	}
	if m.Data.Estimate.Lower != "0.33333333333333331" || m.Data.Caution != rules.ReleaseNote || m.Data.Alarm != "A7" {
		t.Errorf("%+v", m.Data)
	}
}
