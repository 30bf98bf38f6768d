package monitor

import (
	"bytes"
	"encoding/json"
	"time"

	"steelyard/monitor/config"
	"steelyard/store"
)

// signEvery is how often a running daemon signs what was added to the journal, whether or not a message or a
// day log asks for it.
const signEvery = time.Minute

// withCheckpoint adds the signed checkpoint to a message, as an extension attribute of CloudEvents. It is added
// when the message is delivered, and not when it is composed, so that it covers the record that the
// message tells of; the id is the same however often it is delivered.
func withCheckpoint(body, signed []byte) ([]byte, error) {
	text, err := json.Marshal(string(signed))
	if err != nil {
		return nil, err
	}
	open, ok := bytes.CutSuffix(bytes.TrimSpace(body), []byte("}"))
	if !ok {
		return body, nil // no JSON object: nothing of ours
	}
	out := append(bytes.Clone(open), `,"checkpoint":`...)
	return append(append(out, text...), '}'), nil
}

// sign keeps the checkpoint beside the store near the end of the journal.
func (d *Desk) sign() {
	if _, err := d.store.Checkpoint(); err != nil {
		d.log.Error().Err(err).Msg("sign a checkpoint of the journal")
	}
}

// BeginOrigin has the store of a configuration go on under a new origin and key, which is noted in it for good: the way on
// where it is not what was signed.
func BeginOrigin(cfg *config.Config, why string) error {
	s, err := store.Open(cfg.Site.State, store.Options{NewOrigin: &store.NewOrigin{Why: why, By: Whoever(), At: time.Now().UTC()}})
	if err != nil {
		return err
	}
	return s.Close()
}

// Backedup is what came of a backup.
type Backedup struct {
	Type    string    `json:"type"` // "backed up"
	Folder  string    `json:"folder"`
	At      time.Time `json:"at"`
	Records uint64    `json:"records"`
}

// Backup writes a consistent copy of the store into a new folder, while the daemon goes on.
func (d *Desk) Backup(folder string) (*Backedup, error) {
	records := d.store.Next()
	if err := d.store.Backup(folder); err != nil {
		return nil, err
	}
	return &Backedup{Type: "backed up", Folder: folder, At: d.now().UTC(), Records: records}, nil
}

func (r *remote) Backup(folder string) (*Backedup, error) {
	b := &Backedup{}
	return b, r.call("POST", "/backup", struct{ Folder string }{folder}, b)
}
