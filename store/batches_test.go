package store

import (
	"slices"
	"testing"
	"time"

	"steelyard/rules"
)

func TestBatchesByName(t *testing.T) {
	s, err := Open(t.TempDir(), Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	at := time.Date(2026, 3, 2, 10, 0, 0, 0, time.UTC)
	var step Step
	add := func(e rules.Event) {
		e.Index, e.At = uint64(len(step.Entries)), at
		step.Entries = append(step.Entries, Entry{Event: e})
	}
	for _, name := range [][2]string{{"rig1", "b.csv"}, {"rig1", "a.csv"}, {"rig1", "b.csv"}, {"rig11", "b.csv"}, {"rig1", "b.csv2"}} {
		add(rules.Event{Batch: &rules.Batch{Source: name[0], File: name[1]}})
	}
	add(rules.Event{Held: &rules.Held{Source: "rig1", File: "b.csv"}})
	if err := s.Commit(step); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		source, file string
		want         []uint64
	}{
		{"rig1", "b.csv", []uint64{0, 2}}, {"rig1", "a.csv", []uint64{1}}, {"rig1", "", []uint64{1, 0, 2, 4}},
		{"rig11", "", []uint64{3}}, {"rig1", "c.csv", nil}, {"rig", "", nil},
	} {
		got, err := s.Batches(c.source, c.file)
		if err != nil || !slices.Equal(got, c.want) {
			t.Errorf("%s %s: %v, %v, want %v", c.source, c.file, got, err, c.want)
		}
	}
}

// A record has the least version that says it, so that older programs read what they understand
// and refuse what they don't.
func TestRecordVersions(t *testing.T) {
	zone := time.FixedZone("", 3600)
	from := time.Date(2026, 3, 2, 10, 0, 0, 0, zone)
	for _, c := range []struct {
		event rules.Event
		want  byte
	}{
		{rules.Event{Batch: &rules.Batch{}}, recordVersion},
		{rules.Event{Batch: &rules.Batch{Replaces: []uint64{3}}}, correctedVersion},
		{rules.Event{Withdrawn: &rules.Withdrawn{Batches: []uint64{3}, From: from, To: from, Reason: "r"}}, correctedVersion},
	} {
		b, err := encode(&Entry{Event: c.event})
		if err != nil || b[0] != c.want {
			t.Errorf("%+v: version %d, %v", c.event, b[0], err)
		}
		back, err := decode(b)
		if err != nil {
			t.Fatal(err)
		}
		if w := back.Event.Withdrawn; w != nil && (w.From != from.UTC() || w.To != from.UTC()) {
			t.Errorf("times are not in UTC: %+v", w)
		}
	}
}

func TestWhatWaits(t *testing.T) {
	s, err := Open(t.TempDir(), Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	for i, c := range []struct {
		event rules.Event
		want  []Waiting
	}{
		{rules.Event{Held: &rules.Held{}}, []Waiting{{0, 0}}},
		{rules.Event{Batch: &rules.Batch{}}, []Waiting{{0, 0}}},
		{rules.Event{Batch: &rules.Batch{Held: make([]rules.HeldRow, 3)}}, []Waiting{{0, 0}, {2, 3}}},
		{rules.Event{Decided: &rules.Decided{Held: 2, Lines: []int{5, 7}}}, []Waiting{{0, 0}, {2, 1}}},
		{rules.Event{Batch: &rules.Batch{Decided: &rules.Decided{Held: 0}, Held: make([]rules.HeldRow, 1)}}, []Waiting{{2, 1}, {4, 1}}},
		{rules.Event{Batch: &rules.Batch{Decided: &rules.Decided{Held: 2, Lines: []int{9}}}}, []Waiting{{4, 1}}},
	} {
		c.event.Index, c.event.At = uint64(i), time.Unix(1e9, 0)
		if err := s.Commit(Step{Entries: []Entry{{Event: c.event}}}); err != nil {
			t.Fatal(err)
		}
		if got, err := s.Waiting(); err != nil || !slices.Equal(got, c.want) {
			t.Errorf("after %d: %v, %v, want %v", i, got, err, c.want)
		}
	}
}
