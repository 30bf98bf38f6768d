package intake

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"time"

	"github.com/fsnotify/fsnotify"

	"steelyard/rules"
)

// longestRetry is how long a folder that can't be looked at is left alone.
const longestRetry = 2 * time.Second

// scan looks through the folder; it tells when that can't be done, and when it can again.
func (w *watcher) scan(ctx context.Context) {
	w.ask()
	entries, anew, err := w.list()
	w.answered()
	if err != nil {
		w.unwatch()
		w.folder, w.nextScan = nil, time.Now().Add(min(w.src.Scan, longestRetry))
		w.report(ctx, func(c *condition) {
			c.trouble = fmt.Sprintf("the folder %s can't be looked at: %v", w.src.Folder, plainError(err))
		})
		return
	}
	w.nextScan = time.Now().Add(w.src.Scan)
	if anew {
		w.report(ctx, func(c *condition) {
			c.trouble = fmt.Sprintf("%s is another folder than before: it was made anew, or a file system was mounted over it",
				w.src.Folder)
		})
	}
	w.report(ctx, func(c *condition) { c.trouble = "" })
	w.scans++
	before := len(w.waiting)
	for _, info := range entries {
		w.note(ctx, info)
	}
	w.forget()
	if w.hints != nil && !w.fresh && len(w.waiting) > before && !w.hintWaits(ctx) {
		// Something arrived without a hint: the watch is worth nothing.
		w.unwatch()
		w.nextScan = time.Now()
	}
	w.fresh = false
}

// hintWaits says whether a hint waits to be followed, so that what a look found may have been
// hinted at.
func (w *watcher) hintWaits(ctx context.Context) bool {
	select {
	case e, ok := <-w.hints.Events:
		if ok {
			w.hinted(ctx, filepath.Base(e.Name))
		}
		return ok
	default:
		return false
	}
}

// forget drops what was sent and is no longer there.
func (w *watcher) forget() {
	for _, m := range []map[string]sentFile{w.sent, w.passed} {
		for name, s := range m {
			if s.scan != w.scans {
				delete(m, name)
			}
		}
	}
}

// list watches the folder, if it is not watched, and then lists it: what arrives between the
// two is hinted at. Anew is set when it is not the folder of the last look.
func (w *watcher) list() (infos []fs.FileInfo, anew bool, err error) {
	now, err := os.Stat(w.src.Folder)
	if err != nil {
		return nil, false, err
	}
	if !now.IsDir() {
		return nil, false, errors.New("it is not a folder")
	}
	if w.folder != nil && !os.SameFile(now, w.folder) {
		anew = true
		w.unwatch()
	}
	if w.hints == nil {
		w.begin()
	}
	root, err := os.OpenRoot(w.src.Folder)
	if err != nil {
		return nil, false, err
	}
	defer root.Close()
	if err := w.isPresent(root); err != nil {
		return nil, false, err
	}
	if w.folder, err = root.Stat("."); err != nil {
		return nil, false, err
	}
	dir, err := root.Open(".")
	if err != nil {
		return nil, false, err
	}
	defer dir.Close()
	for {
		entries, err := dir.ReadDir(1024)
		w.ask()
		for _, e := range entries {
			if !w.wanted(e.Name()) {
				continue
			}
			if info, err := e.Info(); err == nil {
				infos = append(infos, info)
			} else if !errors.Is(err, fs.ErrNotExist) {
				return nil, anew, err
			}
		}
		if errors.Is(err, io.EOF) {
			return infos, anew, nil
		}
		if err != nil {
			return nil, anew, err
		}
	}
}

// isPresent says that the folder is the one that was meant: it holds the file that is always there.
// An empty folder under a share that is not mounted does not.
func (w *watcher) isPresent(root *os.Root) error {
	if w.src.Present == "" {
		return nil
	}
	_, err := root.Lstat(w.src.Present)
	if errors.Is(err, fs.ErrNotExist) {
		return fmt.Errorf("the file %s, which is always in it, is not there (`present` of the source): "+
			"it may be the empty folder under a share that is not mounted", w.src.Present)
	}
	return err
}

// begin watches the folder. Without a watch (the system has no more of them, say) the looks
// through the folder remain.
func (w *watcher) begin() {
	hints, err := fsnotify.NewWatcher()
	if err != nil {
		return
	}
	if err := hints.Add(w.src.Folder); err != nil {
		_ = hints.Close()
		return
	}
	w.hints, w.fresh = hints, true
}

// hinted looks at one file that the watch has named.
func (w *watcher) hinted(ctx context.Context, name string) {
	if !w.wanted(name) {
		return
	}
	w.ask()
	info, err := os.Lstat(filepath.Join(w.src.Folder, name))
	w.answered()
	if err != nil {
		return // it is gone, or the next look through the folder will say what is wrong
	}
	w.note(ctx, info)
}

// note takes a look at a file: it is done with, begins to wait, or waits anew.
func (w *watcher) note(ctx context.Context, info fs.FileInfo) {
	name, now := info.Name(), stamp{info.Size(), info.ModTime()}
	if !info.Mode().IsRegular() {
		w.passOver(ctx, info)
		return
	}
	delete(w.passed, name)
	if w.known(name, now.size, now.written) {
		w.drop(name)
		delete(w.sent, name)
		return
	}
	if s, ok := w.sent[name]; ok && s.same(now) {
		s.scan = w.scans
		w.sent[name] = s
		return
	}
	if c := w.waiting[name]; c == nil || !c.same(now) && w.growing == nil {
		w.await(name, now)
	}
}

// passOver sends what is no plain file as held unread, once. It is the same one as long as its
// kind is: the time of a folder changes with what is put into it.
func (w *watcher) passOver(ctx context.Context, info fs.FileInfo) {
	name, kind := info.Name(), info.Mode().Type()
	s, ok := w.passed[name]
	now := stamp{info.Size(), info.ModTime()}
	if !ok || s.kind != kind {
		w.drop(name)
		a := Arrival{File: name, Size: now.size, Written: now.written, Reading: w.unread(name, now.size, kindOf(kind))}
		if !w.known(name, now.size, now.written) && !w.send(ctx, a) {
			return
		}
	}
	w.passed[name] = sentFile{now, kind, w.scans}
}

// kindOf says what stands where a file was expected.
func kindOf(m fs.FileMode) string {
	what := "a special file, which is not opened"
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

// unread is the reading of a file that is held without being read.
func (w *watcher) unread(name string, size int64, why string) *Reading {
	return &Reading{Held: &rules.Held{Source: w.src.Name, File: name, Size: size, Reason: shown(name) + ": " + why}}
}

// errMoving says that a file changed while it was read, or that it is another one.
var errMoving = errors.New("the file changes")

// errOther says that something else has taken the file's place.
var errOther = errors.New("it is no plain file")

// errFolder says that the folder is at fault, not the file.
var errFolder = errors.New("the folder can't be opened")

// open opens a file of the folder, if it is a plain one, and sees what it is like.
func (w *watcher) open(name string) (file *os.File, seen stamp, err error) {
	root, err := os.OpenRoot(w.src.Folder)
	if err != nil {
		return nil, seen, errors.Join(errFolder, err)
	}
	defer root.Close()
	before, err := root.Lstat(name)
	if err != nil {
		return nil, seen, err
	}
	if !before.Mode().IsRegular() {
		return nil, seen, errOther
	}
	// Without O_NONBLOCK, a pipe that has just taken the file's place would be waited for.
	if file, err = root.OpenFile(name, os.O_RDONLY|syscall.O_NONBLOCK, 0); err != nil {
		return nil, seen, err
	}
	opened, err := file.Stat()
	if err == nil && (!opened.Mode().IsRegular() || !os.SameFile(before, opened)) {
		err = errMoving
	}
	if err != nil {
		_ = file.Close() // nothing was written
		return nil, seen, err
	}
	return file, stamp{opened.Size(), opened.ModTime()}, nil
}

// content reads a file through one handle, if it still is as it was expected to be. Seen is
// what it is like instead. A reason says why it is to be held unread.
func (w *watcher) content(name string, expected stamp) (content []byte, seen stamp, reason string, err error) {
	file, seen, err := w.open(name)
	if err != nil {
		return nil, seen, "", err
	}
	defer file.Close()
	if !seen.same(expected) {
		return nil, seen, "", errMoving
	}
	if seen.size > w.src.Largest {
		return nil, seen, fmt.Sprintf("it has %d bytes; at most %d were expected (`largest` of the source), so it was not read",
			seen.size, w.src.Largest), nil
	}
	if content, err = w.readAll(file, seen.size); err != nil {
		return nil, seen, "", err
	}
	after, err := file.Stat()
	if err != nil {
		return nil, seen, "", err
	}
	if now := (stamp{after.Size(), after.ModTime()}); !now.same(seen) || now.size != int64(len(content)) {
		return nil, now, "", errMoving
	}
	return content, seen, "", nil
}

// readAll reads a file of a size, and a byte more if there is one. Each piece that comes is
// progress.
func (w *watcher) readAll(file io.Reader, size int64) ([]byte, error) {
	content := make([]byte, 0, size+1)
	for len(content) < cap(content) {
		n, err := file.Read(content[len(content):min(cap(content), len(content)+1<<20)])
		content = content[:len(content)+n]
		w.ask()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			return nil, err
		}
	}
	return slices.Clip(content), nil
}

// plainError leaves out the path and the system call, which the sentence around it names.
func plainError(err error) string {
	var p *fs.PathError
	if errors.As(err, &p) {
		return p.Err.Error()
	}
	return strings.ReplaceAll(err.Error(), "\n", ": ")
}
