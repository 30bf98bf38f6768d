package monitor

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"regexp"
	"runtime/debug"
	"slices"
	"strings"
	"time"

	"steelyard/rules"
	"steelyard/store"
)

// ErrNotVerified is wrapped where a record is not what was signed, or not what the engine makes of its event.
var ErrNotVerified = errors.New("the record did not verify")

// verifyMemory is from where on Verify collects what it threw away as often as is needed to stay below.
const verifyMemory = 128 << 20

// Verification is what Verify is asked for.
type Verification struct {
	Folder   string   // of the store, or of a copy of it
	Key      string   // file with the key to verify with; "" for the one that the store names
	Against  []string // files that carry checkpoints: feed files, day logs, checkpoints themselves
	Progress func(done, all uint64)
}

// Verified is what Verify found.
type Verified struct {
	Type        string   `json:"type"` // "verified"
	Folder      string   `json:"folder"`
	Records     uint64   `json:"records"`
	Batches     int      `json:"batches"`
	Rows        int      `json:"rows"`
	Looks       int      `json:"looks"`
	Changes     int      `json:"changes"`
	Signed      uint64   `json:"signed"` // records under the checkpoint beside the store; 0 where there is none
	Checkpoints int      `json:"checkpoints"`
	Origin      string   `json:"origin"`
	Root        string   `json:"root"`
	Key         string   `json:"key"`
	KeyHandedIn bool     `json:"key_handed_in"`
	NewOrigins  []string `json:"new_origins,omitempty"` // why the store went on under a new origin, each
	TookSeconds float64  `json:"took_seconds"`
	Caution     string   `json:"caution"`
	NotCompared string   `json:"not_compared,omitempty"` // what this verification can't tell
}

// Verify counts the tree of a journal anew, checks it against every checkpoint there is, drives a fresh
// engine with the events, and compares what follows with each record and with the state that
// the store holds, to the last bit. The error wraps ErrNotVerified and says in words what is different first.
func Verify(v Verification) (*Verified, error) {
	begun := time.Now()
	// Little lives long here, and much is thrown away: collecting as seldom as some memory allows is half of the time.
	defer debug.SetGCPercent(debug.SetGCPercent(800))
	defer debug.SetMemoryLimit(debug.SetMemoryLimit(verifyMemory))
	s, err := store.OpenToRead(v.Folder)
	if err != nil {
		return nil, notVerified(err)
	}
	found, err := verify(s, v)
	if err = errors.Join(err, s.Close()); err != nil {
		return nil, notVerified(err)
	}
	found.TookSeconds = time.Since(begun).Seconds()
	return found, nil
}

// notVerified marks what means that the record is not what it was.
func notVerified(err error) error {
	if errors.Is(err, store.ErrNotAsSigned) || errors.Is(err, store.ErrStorage) {
		return fmt.Errorf("%w: %w", ErrNotVerified, err)
	}
	return err
}

func verify(s *store.Store, v Verification) (*Verified, error) {
	found := &Verified{Type: "verified", Folder: v.Folder, Key: s.Verifying(), Signed: s.LastSigned(), Caution: rules.ReleaseNote}
	check := store.Verification{}
	if v.Key != "" {
		text, err := os.ReadFile(v.Key)
		if err != nil {
			return nil, fmt.Errorf("the key to verify with: %w", err)
		}
		check.Verifying, found.KeyHandedIn = strings.Fields(string(text)), true
	}
	for _, path := range v.Against {
		signed, err := checkpointsIn(path)
		if err != nil {
			return nil, err
		}
		check.Signed = append(check.Signed, signed...)
	}
	found.Checkpoints = len(check.Signed)
	r := &replay{found: found, state: rules.NewState(), all: s.Next(), progress: v.Progress}
	r.state.Consult(&history{store: s})
	check.Visit = r.record
	head, err := s.Verify(check)
	if err != nil {
		return nil, err
	}
	found.Records, found.Origin, found.Root = head.Size, head.Origin, head.Root.String()
	if err := r.compareState(s); err != nil {
		return nil, err
	}
	origins, err := s.Origins()
	if err != nil {
		return nil, err
	}
	for _, o := range origins {
		if o.Because.Why != "" {
			found.NewOrigins = append(found.NewOrigins, fmt.Sprintf("from record %d on, %s, by %s: %s", o.From, o.Because.At.Format(time.RFC3339), o.Because.By, o.Because.Why))
		}
	}
	if found.Checkpoints == 0 && found.Signed == 0 {
		found.NotCompared = "no checkpoint was there to compare with: a journal that was written anew as a whole can't be told"
	} else if found.Checkpoints == 0 {
		found.NotCompared = "only the checkpoint beside the store was compared: hand in a day log or a message that left the machine, with --against"
	}
	return found, nil
}

// replay drives the engine with the records.
type replay struct {
	found    *Verified
	state    *rules.State
	all      uint64
	progress func(done, all uint64)
}

func (r *replay) record(index uint64, record []byte) error {
	entry, err := store.Decode(record)
	if err != nil {
		return fmt.Errorf("%w: record %d: %w", ErrNotVerified, index, err)
	}
	out, err := r.state.Apply(&entry.Event)
	if err != nil {
		return fmt.Errorf("%w: record %d: the engine refuses what was recorded: %w", ErrNotVerified, index, err)
	}
	again, err := store.Encode(&store.Entry{Event: entry.Event, Outcomes: out})
	if err != nil {
		return err
	}
	if !bytes.Equal(again, record) {
		return fmt.Errorf("%w: record %d of %s: %s", ErrNotVerified, index, entry.Event.At.Format(time.RFC3339), difference(&entry.Outcomes, &out))
	}
	r.count(entry)
	if r.progress != nil && (index%64 == 0 || index+1 == r.all) {
		r.progress(index+1, r.all)
	}
	return nil
}

func (r *replay) count(e *store.Entry) {
	if b := e.Event.Batch; b != nil {
		r.found.Batches++
		r.found.Rows += len(b.Rows.Line)
	}
	r.found.Looks += len(e.Outcomes.Looks)
	r.found.Changes += len(e.Outcomes.Changes)
}

// difference says in words how what was recorded differs from what follows.
func difference(recorded, follows *rules.Outcomes) string {
	if len(recorded.Looks) != len(follows.Looks) {
		return fmt.Sprintf("%d looks are recorded, and %d follow", len(recorded.Looks), len(follows.Looks))
	}
	for i, l := range recorded.Looks {
		if f := follows.Looks[i]; l != f {
			return fmt.Sprintf("the look at rule %d is recorded with log-probabilities %.17g and %.17g %s, and %.17g and %.17g %s follow",
				l.Rule+1, l.LogFor, l.LogAgainst, l.Withheld, f.LogFor, f.LogAgainst, f.Withheld)
		}
	}
	a, errA := json.Marshal(recorded)
	b, errB := json.Marshal(follows)
	if errA != nil || errB != nil || bytes.Equal(a, b) {
		return "the event itself is written otherwise than this program writes it"
	}
	at := 0
	for at < len(a) && at < len(b) && a[at] == b[at] {
		at++
	}
	around := func(t []byte) string { return string(t[max(at-40, 0):min(at+60, len(t))]) }
	return fmt.Sprintf("recorded is …%s…, and what follows is …%s…", around(a), around(b))
}

// compareState holds the state that the store goes on from against the one that follows.
func (r *replay) compareState(s *store.Store) error {
	kept, err := s.Pieces()
	if err != nil {
		return err
	}
	follows, err := r.state.Pieces()
	if err != nil {
		return err
	}
	var names []string
	for name := range kept {
		names = append(names, name)
	}
	for name, piece := range follows {
		if _, ok := kept[name]; !ok && piece != nil {
			names = append(names, name)
		}
	}
	slices.Sort(names)
	for _, name := range names {
		if !bytes.Equal(kept[name], follows[name]) {
			return fmt.Errorf("%w: the state of %s that the store holds is not the one that follows from the journal", ErrNotVerified, name)
		}
	}
	return nil
}

// signedText is a signed checkpoint as it stands in a text (C2SP signed-note).
var signedText = regexp.MustCompile(`steelyard/[0-9a-f-]{36}\n\d+\n[A-Za-z0-9+/]+=*\n\n— \S+ [A-Za-z0-9+/]+=*\n`)

// checkpointsIn finds the signed checkpoints in a file: a checkpoint itself, a day log as Markdown or JSON, or
// a feed file.
func checkpointsIn(path string) (signed [][]byte, err error) {
	text, err := os.ReadFile(path)
	if err != nil {
		return nil, err
	}
	signed = signedText.FindAll(text, -1)
	// In JSON the lines stand in one string.
	for _, found := range jsonText.FindAll(text, -1) {
		var plain string
		if json.Unmarshal(found, &plain) == nil && signedText.MatchString(plain) {
			signed = append(signed, []byte(plain))
		}
	}
	if len(signed) == 0 {
		return nil, fmt.Errorf("%s carries no signed checkpoint; a day log, a feed file or a file %s is expected", path, filepath.Join("state", "*.checkpoint"))
	}
	return signed, nil
}

var jsonText = regexp.MustCompile(`"steelyard/[0-9a-f-]{36}\\n[^"]*"`)
