package intake

import (
	"context"
	"errors"
	"io"
	"time"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// growing is what a watcher knows of the growing files of its source.
type growing struct {
	progress map[string]*Progress
	compared map[string]time.Time // when all that was dealt with was last compared
	unclear  map[string]stamp     // files of which too little is there to say what they are
}

// comparedEvery is how often all of a growing file that was dealt with is compared, and not
// only the end of it.
const comparedEvery = time.Hour

func newFollower(src *config.Source, plan *rules.Plan, grown []*Progress, out chan<- Arrival) *watcher {
	g := &growing{progress: map[string]*Progress{}, compared: map[string]time.Time{}, unclear: map[string]stamp{}}
	for _, p := range grown {
		g.progress[p.File] = p
	}
	w := newWatcher(src, plan, g.known, out)
	w.growing = g
	return w
}

// known says whether there can be nothing new in a file.
func (g *growing) known(file string, size int64, written time.Time) bool {
	now := stamp{size, written}
	if u, ok := g.unclear[file]; ok && u.same(now) {
		return true
	}
	p := g.progress[file]
	return p != nil && now.same(stamp{p.Size, p.Written})
}

// others are the progresses under other names.
func (g *growing) others(name string) []*Progress {
	var list []*Progress
	for file, p := range g.progress {
		if file != name {
			list = append(list, p)
		}
	}
	return list
}

// follow reads what a growing file has gained, and sends it stretch by stretch.
func (w *watcher) follow(ctx context.Context, c *candidate) {
	w.ask()
	file, seen, err := w.open(c.name)
	w.answered()
	if err != nil {
		w.failed(ctx, c, seen, err)
		return
	}
	defer file.Close()
	g := w.growing
	for more := true; more && ctx.Err() == nil; {
		was := g.progress[c.name]
		thorough := time.Since(g.compared[c.name]) > comparedEvery
		w.ask()
		gained, err := w.reader.grow(&sight{
			file: c.name, content: answering{w, file}, size: seen.size, written: seen.written,
			settled: seen.same(c.stamp), thorough: thorough,
		}, was, g.others(c.name))
		w.answered()
		switch {
		case errors.Is(err, errUnsettled) && !seen.same(c.stamp):
			w.await(c.name, seen)
			return
		case errors.Is(err, errUnsettled):
			g.unclear[c.name] = seen
			w.drop(c.name)
			return
		case err != nil:
			w.failed(ctx, c, seen, err)
			return
		}
		if gained.Reading != nil && !w.send(ctx, Arrival{
			File: c.name, Size: seen.size, Written: seen.written, Reading: gained.Reading, Progress: gained.Now,
		}) {
			return
		}
		if thorough {
			g.compared[c.name] = time.Now()
		}
		g.progress[c.name], more = gained.Now, gained.More
		delete(g.unclear, c.name)
	}
	w.drop(c.name)
}

// answering is a file each piece of which is progress.
type answering struct {
	w *watcher
	io.ReaderAt
}

// ReadAt is for io.ReaderAt.
func (a answering) ReadAt(b []byte, at int64) (int, error) {
	n, err := a.ReaderAt.ReadAt(b, at)
	a.w.ask()
	return n, err
}
