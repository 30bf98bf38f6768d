package intake

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path"
	"slices"
	"strings"
	"syscall"
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
	Written time.Time // its modification time
	Reading *Reading
	Content []byte // what was read; nil where nothing was
	Able    bool   // about the source: it can be looked at
	Why     string // it can't
}

// Known says whether a file of that name, size and modification time has been dealt with.
type Known func(file string, size int64, written time.Time) bool

// Watch looks after one source until the context ends, and sends what it finds. A watch of the
// operating system is a hint only: the folder is looked through at the start, every Scan, when
// the watch reports an error and when the folder is another one than before. A file is read
// once it has been unchanged for Settle, through one handle, and only if it has not changed
// when the reading is done.
func Watch(ctx context.Context, src *config.Source, plan *rules.Plan, known Known, out chan<- Arrival) {
	w := &watcher{
		src: src, reader: NewReader(src, plan), known: known, out: out,
		waiting: map[string]*candidate{}, sent: map[string]stamp{}, able: true,
	}
	defer w.unwatch()
	for ctx.Err() == nil {
		w.scan(ctx)
		w.wait(ctx)
	}
}

type watcher struct {
	src    *config.Source
	reader *Reader
	known  Known
	out    chan<- Arrival

	hints   *fsnotify.Watcher // nil while there is none
	folder  os.FileInfo       // the folder that hints watches
	waiting map[string]*candidate
	sent    map[string]stamp // files sent, until they are known
	able    bool
}

// candidate is a file that has not settled yet.
type candidate struct {
	stamp
	since time.Time // unchanged since; monotonic
	again time.Time // not to be tried before, after an error
	tries int
}

// stamp is what of a file must stand still.
type stamp struct {
	size    int64
	written time.Time
}

func (w *watcher) unwatch() {
	if w.hints != nil {
		// Nothing is written through it: there is nothing to lose by an error.
		_ = w.hints.Close()
		w.hints = nil
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

// scan looks through the folder; it says so once when that can't be done, and once when it can
// again.
func (w *watcher) scan(ctx context.Context) {
	entries, err := w.list()
	if err != nil {
		w.unwatch()
		if w.able {
			w.able = !w.send(ctx, Arrival{Why: fmt.Sprintf("the folder %s can't be looked at: %v", w.src.Folder, plainError(err))})
		}
		return
	}
	if !w.able {
		w.able = w.send(ctx, Arrival{Able: true})
	}
	slices.SortFunc(entries, func(a, b fs.FileInfo) int {
		if d := a.ModTime().Compare(b.ModTime()); d != 0 {
			return d
		}
		return strings.Compare(a.Name(), b.Name())
	})
	for _, e := range entries {
		w.note(ctx, e)
	}
	w.settle(ctx)
}

// list watches the folder, if it is not watched, and then lists it: what arrives between the
// two is hinted at.
func (w *watcher) list() ([]fs.FileInfo, error) {
	info, err := os.Stat(w.src.Folder)
	if err != nil {
		return nil, err
	}
	if !info.IsDir() {
		return nil, errors.New("it is not a folder")
	}
	if w.hints != nil && !os.SameFile(info, w.folder) {
		w.unwatch()
	}
	if w.hints == nil {
		if hints, err := fsnotify.NewWatcher(); err == nil {
			if err := hints.Add(w.src.Folder); err == nil {
				w.hints, w.folder = hints, info
			} else {
				_ = hints.Close()
			}
		}
	}
	dir, err := os.ReadDir(w.src.Folder)
	if err != nil {
		return nil, err
	}
	var infos []fs.FileInfo
	for _, e := range dir {
		if !w.wanted(e.Name()) {
			continue
		}
		info, err := e.Info()
		if errors.Is(err, fs.ErrNotExist) {
			continue
		}
		if err != nil {
			return nil, err
		}
		infos = append(infos, info)
	}
	return infos, nil
}

// wanted says whether a name is one of the source's files. Hidden names and those that end in
// .part or .tmp are of files still being written.
func (w *watcher) wanted(name string) bool {
	if strings.HasPrefix(name, ".") || strings.HasSuffix(name, ".part") || strings.HasSuffix(name, ".tmp") {
		return false
	}
	ok, err := path.Match(w.src.Files, name)
	return ok && err == nil
}

// note takes a look at a file: it waits, begins to wait anew, or is done with.
func (w *watcher) note(ctx context.Context, info fs.FileInfo) {
	name, now := info.Name(), stamp{info.Size(), info.ModTime()}
	if w.known(name, now.size, now.written) {
		delete(w.waiting, name)
		delete(w.sent, name)
		return
	}
	if w.sent[name] == now {
		return
	}
	if !info.Mode().IsRegular() {
		if w.send(ctx, Arrival{File: name, Size: now.size, Written: now.written, Reading: w.holdUnread(name, now.size, kindOf(info.Mode()))}) {
			w.sent[name] = now
		}
		return
	}
	if c, ok := w.waiting[name]; !ok || c.stamp != now {
		w.waiting[name] = &candidate{stamp: now, since: time.Now()}
	}
}

// kindOf says what stands where a file was expected.
func kindOf(m fs.FileMode) string {
	what := "a special file"
	switch {
	case m.IsDir():
		what = "a folder"
	case m&fs.ModeSymlink != 0:
		what = "a symbolic link, which is not followed"
	case m&fs.ModeNamedPipe != 0:
		what = "a pipe, which is not opened"
	case m&fs.ModeSocket != 0:
		what = "a socket, which is not opened"
	case m&fs.ModeDevice != 0:
		what = "a device, which is not opened"
	}
	return fmt.Sprintf("it is %s; a plain file was expected", what)
}

// holdUnread is the reading of a file that is held without being read.
func (w *watcher) holdUnread(name string, size int64, why string) *Reading {
	return &Reading{Held: &rules.Held{Source: w.src.Name, File: name, Size: size, Reason: fmt.Sprintf("%s: %s", name, why)}}
}

// settle reads the files that have stood still for long enough, the oldest first.
func (w *watcher) settle(ctx context.Context) {
	now := time.Now()
	var ready []string
	for name, c := range w.waiting {
		if now.Sub(c.since) >= w.src.Settle && !now.Before(c.again) {
			ready = append(ready, name)
		}
	}
	slices.SortFunc(ready, func(a, b string) int {
		if d := w.waiting[a].written.Compare(w.waiting[b].written); d != 0 {
			return d
		}
		return strings.Compare(a, b)
	})
	for _, name := range ready {
		if ctx.Err() != nil {
			return
		}
		w.take(ctx, name)
	}
}

// take reads one file and sends what it comes to.
func (w *watcher) take(ctx context.Context, name string) {
	c := w.waiting[name]
	content, seen, reason, err := w.content(name)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		delete(w.waiting, name)
		return
	case errors.Is(err, errMoving):
		w.waiting[name] = &candidate{stamp: seen, since: time.Now()}
		return
	case err != nil:
		c.tries++
		c.again = time.Now().Add(min(time.Second<<min(c.tries, 6), time.Minute))
		if c.tries == 3 {
			w.send(ctx, Arrival{File: name, Size: seen.size, Written: time.Time{},
				Reading: w.holdUnread(name, seen.size, fmt.Sprintf("it can't be read (%v); it is tried again until it can", plainError(err)))})
		}
		return
	}
	a := Arrival{File: name, Size: seen.size, Written: seen.written, Content: content}
	if reason != "" {
		a.Reading = w.holdUnread(name, seen.size, reason)
	} else {
		a.Reading = w.reader.Read(name, seen.written, content)
	}
	if w.send(ctx, a) {
		delete(w.waiting, name)
		w.sent[name] = seen
	}
}

// errMoving says that a file changed while it was read, or that it is another one.
var errMoving = errors.New("the file changes")

// content reads a file through one handle. A reason says why it is to be held unread.
func (w *watcher) content(name string) (content []byte, seen stamp, reason string, err error) {
	root, err := os.OpenRoot(w.src.Folder)
	if err != nil {
		return nil, seen, "", err
	}
	defer root.Close()
	before, err := root.Lstat(name)
	if err != nil {
		return nil, seen, "", err
	}
	seen = stamp{before.Size(), before.ModTime()}
	if !before.Mode().IsRegular() {
		return nil, seen, kindOf(before.Mode()), nil
	}
	file, err := root.OpenFile(name, os.O_RDONLY|syscall.O_NONBLOCK, 0)
	if err != nil {
		return nil, seen, "", err
	}
	defer file.Close()
	opened, err := file.Stat()
	if err != nil {
		return nil, seen, "", err
	}
	if !opened.Mode().IsRegular() || !os.SameFile(before, opened) {
		return nil, seen, "", errMoving
	}
	seen = stamp{opened.Size(), opened.ModTime()}
	if opened.Size() > w.src.Largest {
		return nil, seen, fmt.Sprintf("it has %d bytes; at most %d were expected (`largest` of the source), so it was not read", opened.Size(), w.src.Largest), nil
	}
	content, err = io.ReadAll(io.LimitReader(file, w.src.Largest+1))
	if err != nil {
		return nil, seen, "", err
	}
	after, err := file.Stat()
	if err != nil {
		return nil, seen, "", err
	}
	if now := (stamp{after.Size(), after.ModTime()}); now != seen || now.size != int64(len(content)) {
		return nil, now, "", errMoving
	}
	return content, seen, "", nil
}

// wait ends when it is time to look through the folder again; until then it follows hints and
// reads what settles.
func (w *watcher) wait(ctx context.Context) {
	pause := w.src.Scan
	if !w.able {
		pause = min(pause, 2*time.Second)
	}
	next := time.NewTimer(pause)
	defer next.Stop()
	var events <-chan fsnotify.Event
	var troubles <-chan error
	if w.hints != nil {
		events, troubles = w.hints.Events, w.hints.Errors
	}
	for {
		settled := time.NewTimer(w.untilSettled())
		select {
		case <-ctx.Done():
			settled.Stop()
			return
		case <-next.C:
			settled.Stop()
			return
		case <-troubles:
			// Events were lost, or worse: only a look through the folder tells.
			settled.Stop()
			w.unwatch()
			return
		case e, ok := <-events:
			settled.Stop()
			if !ok || e.Name == w.src.Folder {
				return
			}
			w.hinted(ctx, path.Base(strings.ReplaceAll(e.Name, `\`, "/")))
		case <-settled.C:
		}
		w.settle(ctx)
	}
}

// hinted looks at one file that the watch has named.
func (w *watcher) hinted(ctx context.Context, name string) {
	if !w.wanted(name) {
		return
	}
	info, err := os.Lstat(w.src.Folder + string(os.PathSeparator) + name)
	if err != nil {
		return // it is gone, or the next look through the folder will say what is wrong
	}
	w.note(ctx, info)
}

// untilSettled is how long it takes until the first waiting file may have settled.
func (w *watcher) untilSettled() time.Duration {
	soonest := time.Hour
	now := time.Now()
	for _, c := range w.waiting {
		soonest = min(soonest, max(c.since.Add(w.src.Settle).Sub(now), c.again.Sub(now), time.Millisecond))
	}
	return soonest
}

// plainError leaves out the path and the system call, which the sentence around it names.
func plainError(err error) error {
	var p *fs.PathError
	if errors.As(err, &p) {
		return p.Err
	}
	return err
}
