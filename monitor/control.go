package monitor

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"strings"
	"time"

	"steelyard/monitor/config"
	"steelyard/monitor/daylog"
	"steelyard/rules"
	"steelyard/store"
)

// Counter is what the verbs ask and answer through: a Desk, or a running daemon.
type Counter interface {
	Status() (*Status, error)
	Explain(alarm int) (*Explanation, error)
	Acknowledge(alarm int, by, how, note string) (*Answer, error)
	WriteDayLog(day string) (log *daylog.Log, markdown, machine string, err error)
	Withdraw(w Withdrawal) (*Withdrawn, error)
	Mark(m Mark) (*Marked, error)
	Held() ([]HeldItem, error)
	ShowHeld(ref HeldRef) ([]HeldItem, error)
	Decide(q Decision) (*HeldDecided, error)
	Backup(folder string) (*Backedup, error)
	Exhibit(alarm int) (page []byte, err error)
	Export(q Export, w io.Writer) error
	Close() error
}

// Answer is what followed from an acknowledgement.
type Answer struct {
	Type  string           `json:"type"` // "acknowledged"
	Alarm string           `json:"alarm"`
	State rules.AlarmState `json:"state"`
	By    string           `json:"by"`
	At    time.Time        `json:"at"`
	Says  string           `json:"says"`
}

// Acknowledge records that a person has recognised an alarm; it does not say that anything
// was mended. How says how By was established.
func (d *Desk) Acknowledge(alarm int, by, how, note string) (*Answer, error) {
	out, err := d.commitOne(rules.Event{Acknowledged: &rules.Acknowledged{Alarm: alarm, By: by, How: how, Note: note}})
	if err != nil {
		return nil, err
	}
	c := out.Changes[0]
	d.mu.Lock()
	plan := d.state.Plan()
	d.mu.Unlock()
	return &Answer{
		Type: "acknowledged", Alarm: fmt.Sprintf("A%d", alarm), State: c.To, By: by, At: c.At, Says: plan.Says(c.Rule),
	}, nil
}

// Reach gives the running daemon of a configuration or, when none runs, a Desk on its store.
// The second result says whether a daemon runs. A state folder that was never used is
// refused, so that asking does not make one.
func Reach(cfg *config.Config, o Options) (Counter, bool, error) {
	if r := dial(cfg.Site.State); r != nil {
		return r, true, nil
	}
	if _, err := os.Stat(cfg.Site.State); errors.Is(err, os.ErrNotExist) {
		return nil, false, fmt.Errorf("nothing has run here yet: the state folder %s does not exist", cfg.Site.State)
	}
	d, err := Open(cfg, o)
	if errors.Is(err, store.ErrHeld) {
		// A daemon takes the lock before it listens: it may just be starting.
		for range 20 {
			time.Sleep(100 * time.Millisecond)
			if r := dial(cfg.Site.State); r != nil {
				return r, true, nil
			}
		}
	}
	if err != nil {
		return nil, false, err
	}
	return d, false, nil
}

// controlFile names the socket on which the daemon of a state folder answers.
const controlFile = "control"

// longestSocket is the longest path that a socket may have on the systems there are.
const longestSocket = 100

// listen opens the daemon's socket, which only the account that runs it can use, and leaves
// its name in the state folder. A path too long for a socket moves to the folder for
// temporary files.
func listen(state string) (net.Listener, func() error, error) {
	path := filepath.Join(state, "control.sock")
	away := ""
	if len(path) > longestSocket {
		folder, err := os.MkdirTemp("", "steelyard-")
		if err != nil {
			return nil, nil, err
		}
		away, path = folder, filepath.Join(folder, "control.sock")
	}
	if err := os.Remove(path); err != nil && !errors.Is(err, os.ErrNotExist) {
		return nil, nil, err
	}
	l, err := net.Listen("unix", path)
	if err != nil {
		return nil, nil, err
	}
	name := filepath.Join(state, controlFile)
	if err = errors.Join(os.Chmod(path, 0o600), os.WriteFile(name, []byte(path+"\n"), 0o600)); err != nil {
		return nil, nil, errors.Join(err, l.Close())
	}
	gone := func() error {
		err := os.Remove(name)
		if away != "" {
			err = errors.Join(err, os.RemoveAll(away))
		}
		return err
	}
	return l, gone, nil
}

// handler answers the verbs on the daemon's socket.
func (d *Desk) handler() http.Handler {
	mux := http.NewServeMux()
	mux.HandleFunc("GET /status", func(w http.ResponseWriter, _ *http.Request) {
		st, err := d.Status()
		if err == nil {
			st.Watching, st.LastAlive = true, time.Time{}
		}
		reply(w, st, err)
	})
	mux.HandleFunc("POST /explain", func(w http.ResponseWriter, r *http.Request) {
		var q struct{ Alarm int }
		if ask(w, r, &q) {
			x, err := d.Explain(q.Alarm)
			reply(w, x, err)
		}
	})
	mux.HandleFunc("POST /acknowledge", func(w http.ResponseWriter, r *http.Request) {
		var q acknowledgement
		if ask(w, r, &q) {
			a, err := d.Acknowledge(q.Alarm, q.By, q.How, q.Note)
			reply(w, a, err)
		}
	})
	mux.HandleFunc("POST /daylog", func(w http.ResponseWriter, r *http.Request) {
		var q struct{ Day string }
		if ask(w, r, &q) {
			log, markdown, machine, err := d.WriteDayLog(q.Day)
			reply(w, writtenLog{log, markdown, machine}, err)
		}
	})
	mux.HandleFunc("POST /exhibit", func(w http.ResponseWriter, r *http.Request) {
		var q struct{ Alarm int }
		if ask(w, r, &q) {
			page, err := d.Exhibit(q.Alarm)
			reply(w, page, err)
		}
	})
	mux.HandleFunc("POST /export", func(w http.ResponseWriter, r *http.Request) {
		var q Export
		if !ask(w, r, &q) {
			return
		}
		if err := d.Export(q, w); err != nil {
			// What is written already can't be taken back: the asker sees that it broke off.
			d.log.Error().Err(err).Msg("export")
			panic(http.ErrAbortHandler)
		}
	})
	mux.HandleFunc("POST /backup", func(w http.ResponseWriter, r *http.Request) {
		var q struct{ Folder string }
		if ask(w, r, &q) {
			b, err := d.Backup(q.Folder)
			reply(w, b, err)
		}
	})
	d.handleCorrections(mux)
	return mux
}

type acknowledgement struct {
	Alarm         int
	By, How, Note string
}

type writtenLog struct {
	Log               *daylog.Log
	Markdown, Machine string
}

// ask reads a question; a bad one is answered here.
func ask(w http.ResponseWriter, r *http.Request, into any) bool {
	err := json.NewDecoder(http.MaxBytesReader(w, r.Body, 1<<20)).Decode(into)
	if err != nil {
		http.Error(w, "the question is not the JSON that was expected: "+err.Error(), http.StatusBadRequest)
	}
	return err == nil
}

func reply(w http.ResponseWriter, answer any, err error) {
	if err != nil {
		http.Error(w, err.Error(), http.StatusUnprocessableEntity)
		return
	}
	text, err := json.Marshal(answer)
	if err != nil {
		http.Error(w, err.Error(), http.StatusInternalServerError)
		return
	}
	w.Header().Set("Content-Type", "application/json")
	// The asker may have gone; then there is nobody to tell.
	_, _ = w.Write(text)
}

// remote is a running daemon, reached over its socket.
type remote struct{ client *http.Client }

// dial reaches the daemon of a state folder; nil where none answers.
func dial(state string) *remote {
	name, err := os.ReadFile(filepath.Join(state, controlFile))
	if err != nil {
		return nil
	}
	path := strings.TrimSpace(string(name))
	connect := func(ctx context.Context, _, _ string) (net.Conn, error) {
		return (&net.Dialer{Timeout: 2 * time.Second}).DialContext(ctx, "unix", path)
	}
	conn, err := connect(context.Background(), "", "")
	if err != nil {
		return nil
	}
	conn.Close()
	return &remote{&http.Client{Transport: &http.Transport{DialContext: connect}, Timeout: 2 * time.Minute}}
}

// call asks the daemon; its refusals come back as errors in its own words.
func (r *remote) call(method, path string, question, answer any) error {
	body, err := json.Marshal(question)
	if err != nil {
		return err
	}
	req, err := http.NewRequest(method, "http://steelyard"+path, bytes.NewReader(body))
	if err != nil {
		return err
	}
	resp, err := r.client.Do(req)
	if err != nil {
		return fmt.Errorf("the running daemon did not answer: %w", err)
	}
	defer resp.Body.Close()
	text, err := io.ReadAll(resp.Body)
	if err != nil {
		return fmt.Errorf("the running daemon broke off: %w", err)
	}
	if resp.StatusCode != http.StatusOK {
		return errors.New(strings.TrimSpace(string(text)))
	}
	return json.Unmarshal(text, answer)
}

// stream passes an answer of any length on; it takes as long as it takes.
func (r *remote) stream(path string, question any, w io.Writer) error {
	body, err := json.Marshal(question)
	if err != nil {
		return err
	}
	client := *r.client
	client.Timeout = 0
	resp, err := client.Post("http://steelyard"+path, "application/json", bytes.NewReader(body))
	if err != nil {
		return fmt.Errorf("the running daemon did not answer: %w", err)
	}
	defer resp.Body.Close()
	if resp.StatusCode != http.StatusOK {
		text, _ := io.ReadAll(resp.Body)
		return errors.New(strings.TrimSpace(string(text)))
	}
	if _, err := io.Copy(w, resp.Body); err != nil {
		return fmt.Errorf("the running daemon broke off: %w", err)
	}
	return nil
}

func (r *remote) Status() (*Status, error) {
	st := &Status{}
	return st, r.call("GET", "/status", nil, st)
}

func (r *remote) Explain(alarm int) (*Explanation, error) {
	x := &Explanation{}
	return x, r.call("POST", "/explain", struct{ Alarm int }{alarm}, x)
}

func (r *remote) Acknowledge(alarm int, by, how, note string) (*Answer, error) {
	a := &Answer{}
	return a, r.call("POST", "/acknowledge", acknowledgement{alarm, by, how, note}, a)
}

func (r *remote) WriteDayLog(day string) (*daylog.Log, string, string, error) {
	var w writtenLog
	err := r.call("POST", "/daylog", struct{ Day string }{day}, &w)
	return w.Log, w.Markdown, w.Machine, err
}

func (r *remote) Close() error {
	r.client.CloseIdleConnections()
	return nil
}
