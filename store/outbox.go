package store

import (
	"bytes"
	"encoding/json"
	"time"

	bolt "go.etcd.io/bbolt"
)

// Message is one message in the outbox.
type Message struct {
	Feed   string    `json:"feed"`
	Number uint64    `json:"number"` // given by Commit; grows
	ID     string    `json:"id"`
	At     time.Time `json:"at"`
	Body   []byte    `json:"body"`
}

func writeMessage(tx *bolt.Tx, m Message) (err error) {
	outbox := tx.Bucket(outboxBucket)
	if m.Number, err = outbox.NextSequence(); err != nil {
		return err
	}
	text, err := json.Marshal(m)
	if err != nil {
		return err
	}
	return outbox.Put(joined(m.Feed, number(m.Number)), text)
}

// Pending are the oldest messages of a feed that are not delivered, at most most of them, and
// how many there are in all.
func (s *Store) Pending(feed string, most int) (messages []Message, all int, err error) {
	prefix := joined(feed, nil)
	err = s.view("read the outbox", func(tx *bolt.Tx) error {
		c := tx.Bucket(outboxBucket).Cursor()
		for k, v := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, v = c.Next() {
			if all++; all > most {
				continue
			}
			var m Message
			if err := json.Unmarshal(v, &m); err != nil {
				return err
			}
			messages = append(messages, m)
		}
		return nil
	})
	return messages, all, err
}

// Delivered takes messages out of the outbox.
func (s *Store) Delivered(messages []Message) error {
	return s.guard("note a delivery", func() error {
		return s.db.Update(func(tx *bolt.Tx) error {
			for _, m := range messages {
				if err := tx.Bucket(outboxBucket).Delete(joined(m.Feed, number(m.Number))); err != nil {
					return err
				}
			}
			return nil
		})
	})
}
