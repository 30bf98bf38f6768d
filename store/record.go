package store

import (
	"encoding/json"
	"fmt"
)

// recordVersion begins every record. A reader refuses a version it does not know; within one
// version, it ignores names that it does not know.
const recordVersion = 1

// encode writes a record: the version byte, then the event and the outcomes as one JSON array
// of two objects, with the names of package rules, floats in the shortest form that reads
// back to the same bits, and times in RFC 3339 with nanoseconds, UTC.
func encode(e *Entry) ([]byte, error) {
	text, err := json.Marshal([]any{&e.Event, &e.Outcomes})
	if err != nil {
		return nil, err
	}
	return append([]byte{recordVersion}, text...), nil
}

// decode reads a record.
func decode(b []byte) (*Entry, error) {
	if len(b) == 0 || b[0] != recordVersion {
		return nil, fmt.Errorf("its version is not the %d that this program reads", recordVersion)
	}
	e := &Entry{}
	parts := []any{&e.Event, &e.Outcomes}
	if err := json.Unmarshal(b[1:], &parts); err != nil {
		return nil, err
	}
	return e, nil
}
