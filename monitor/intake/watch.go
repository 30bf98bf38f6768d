package intake

import (
	"context"
	"fmt"
	"io/fs"
	"path"
	"path/filepath"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"github.com/fsnotify/fsnotify"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// Arrival is what Watch has to say: a file that was read, or that a source can, or can't, be
// looked at.
type Arrival struct {
	Source  string
	File    string    // empty where it is about the source
	Size    int64     // of the file
	Written time.Time // its modification time; zero where it could not be read and is tried again
	Reading *Reading
	Content []byte // what was read; nil where nothing was
	Able    bool   // about the source: it can be looked at
	Why     string // it can't

	Progress *Progress // of a growing file: to be committed with its reading
}

// Known says whether a file of that name, size and modification time has been dealt with.
type Known func(file string, size int64, written time.Time) bool

// patience is how long a folder may take over one answer before it counts as one that can't be
// looked at.
const patience = 30 * time.Second

// Watch looks after one source until the context ends, and sends what it finds, the oldest
// first. A watch of the operating system is a hint only: the folder is looked through at the
// start, every Scan, when the watch reports an error or ends, and when a look finds what the
// watch did not hint at.
//
// A file is read once it has been unchanged for Settle, through one handle, and only if it has
// not changed when the reading is done. What is no plain file is held unread, once. A file that
// can't be read is tried again, ever more slowly, and is held unread once in the meantime.
//
// A folder that does not answer (a dead network share) stops nothing but its own source: that
// is reported after half a minute, no second look is begun, and when the context ends Watch
// leaves the goroutine that waits for the answer behind.
func Watch(ctx context.Context, src *config.Source, plan *rules.Plan, known Known, out chan<- Arrival) {
	newWatcher(src, plan, known, out).watch(ctx)
}

// Follow is Watch for a source whose files grow. Grown is the progress of its files as it was
// committed. Whole new records are sent soon after they are written: a file is looked at no
// more often than every Settle, but need not stand still that long. What is behind the last
// line end is not yet a record, nor is what stands in an open quote, nor are zero bytes.
//
// The content decides what a file is, not its name or number:
//
//   - it begins with what was dealt with: it is continued;
//   - under a new name it begins with what was dealt with under another: it was renamed or
//     copied, and is continued from there;
//   - not even its first row is the one that was: it is another file under the old name, and is
//     read from its start;
//   - it has lost rows, or some within it have changed, or it begins like another and goes on
//     differently: nothing of it is taken until that is over, and it is held. This is not said
//     of a file that still moves: a rig that writes its file anew each time passes through it.
func Follow(ctx context.Context, src *config.Source, plan *rules.Plan, grown []*Progress, out chan<- Arrival) {
	newFollower(src, plan, grown, out).watch(ctx)
}

// watcher is one source being watched. What stands above the line belongs to the one goroutine
// of run.
type watcher struct {
	src    *config.Source
	reader *Reader
	known  Known
	out    chan<- Arrival

	hints    *fsnotify.Watcher // nil while there is none
	fresh    bool              // the hints were begun by the current look
	folder   fs.FileInfo       // the folder as the last look found it; nil while it can't be looked at
	nextScan time.Time
	scans    int
	waiting  map[string]*candidate
	queue    queue        // of waiting, by when they may have settled
	ready    []*candidate // that have, the oldest first
	sent     map[string]sentFile
	passed   map[string]sentFile // what is no plain file
	growing  *growing            // nil where files arrive whole

	// ————
	patience  time.Duration
	soonest   time.Duration
	asked     atomic.Int64 // since when an answer of the folder is awaited, ns after begun; 0: none is
	begun     time.Time
	condition condition
}

// sentFile is a file that was sent and that the writer may not know yet.
type sentFile struct {
	stamp
	kind fs.FileMode
	scan int // the last look that saw it
}

func newWatcher(src *config.Source, plan *rules.Plan, known Known, out chan<- Arrival) *watcher {
	reader := NewReader(src, plan)
	reader.Arriving(time.Now)
	return &watcher{
		src: src, reader: reader, known: known, out: out,
		patience: patience, soonest: soonest, begun: time.Now(),
		waiting: map[string]*candidate{}, sent: map[string]sentFile{}, passed: map[string]sentFile{},
	}
}

func (w *watcher) watch(ctx context.Context) {
	done := make(chan struct{})
	go func() {
		defer close(done)
		w.run(ctx)
	}()
	tick := time.NewTicker(w.patience / 8)
	defer tick.Stop()
	for {
		select {
		case <-done:
			return
		case <-ctx.Done():
			// An answer that is on its way is worth a moment.
			select {
			case <-done:
			case <-time.After(min(w.patience, 2*time.Second)):
			}
			return
		case <-tick.C:
			why := ""
			if since := w.asked.Load(); since != 0 && time.Since(w.begun)-time.Duration(since) > w.patience {
				why = fmt.Sprintf("the folder %s has not answered for %s", w.src.Folder, w.patience)
			}
			w.report(ctx, func(c *condition) { c.silent = why })
		}
	}
}

// ask notes that the folder is asked something, or has shown some progress; answered ends it.
func (w *watcher) ask()      { w.asked.Store(int64(time.Since(w.begun)) + 1) }
func (w *watcher) answered() { w.asked.Store(0) }

// condition is whether a source can be looked at.
type condition struct {
	mu      sync.Mutex
	trouble string // the last look failed
	silent  string // the folder does not answer
	unable  bool   // as it was last reported
}

// report changes the condition, and tells of it when the source can no longer be looked at, or
// can again.
func (w *watcher) report(ctx context.Context, change func(*condition)) {
	c := &w.condition
	c.mu.Lock()
	defer c.mu.Unlock()
	change(c)
	why := c.silent
	if why == "" {
		why = c.trouble
	}
	if (why != "") != c.unable && w.send(ctx, Arrival{Able: why == "", Why: why}) {
		c.unable = why != ""
	}
}

// send gives way to the end of the context.
func (w *watcher) send(ctx context.Context, a Arrival) bool {
	a.Source = w.src.Name
	select {
	case w.out <- a:
		return true
	case <-ctx.Done():
		return false
	}
}

// run looks through the folder when it is time to, reads what has settled, and waits for hints.
func (w *watcher) run(ctx context.Context) {
	defer w.unwatch()
	for ctx.Err() == nil {
		now := time.Now()
		if !now.Before(w.nextScan) {
			w.scan(ctx)
			continue
		}
		// Of a folder that can't be looked at nothing is sent before it is told that it can again.
		if w.folder != nil {
			if c := w.settled(now); c != nil {
				w.take(ctx, c)
				continue
			}
		}
		w.wait(ctx)
	}
}

// wait ends with a hint, or when there is something to do.
func (w *watcher) wait(ctx context.Context) {
	until := w.nextScan
	if w.folder != nil && len(w.queue) > 0 && w.queue[0].due.Before(until) {
		until = w.queue[0].due
	}
	timer := time.NewTimer(time.Until(until))
	defer timer.Stop()
	var events <-chan fsnotify.Event
	var troubles <-chan error
	if w.hints != nil {
		events, troubles = w.hints.Events, w.hints.Errors
	}
	select {
	case <-ctx.Done():
	case <-timer.C:
	case <-troubles:
		// Hints were lost, or worse: only a look through the folder tells.
		w.unwatch()
		w.nextScan = time.Now()
	case e, ok := <-events:
		if !ok || filepath.Clean(e.Name) == filepath.Clean(w.src.Folder) {
			// The folder itself was taken away or moved, and with it the watch.
			w.unwatch()
			w.nextScan = time.Now()
			return
		}
		w.hinted(ctx, filepath.Base(e.Name))
	}
}

func (w *watcher) unwatch() {
	if w.hints != nil {
		// Nothing is written through it: there is nothing to lose by an error.
		_ = w.hints.Close()
		w.hints = nil
	}
}

// wanted says whether a name is one of the source's files. Hidden names and those that end in
// .part or .tmp are of files still being written.
func (w *watcher) wanted(name string) bool {
	if name == w.src.Present || strings.HasPrefix(name, ".") || strings.HasSuffix(name, ".part") || strings.HasSuffix(name, ".tmp") {
		return false
	}
	ok, err := path.Match(w.src.Files, name)
	return ok && err == nil
}
