package intake

import (
	"cmp"
	"container/heap"
	"context"
	"errors"
	"fmt"
	"io/fs"
	"slices"
	"time"
)

// stamp is what of a file must stand still.
type stamp struct {
	size    int64
	written time.Time
}

func (s stamp) same(o stamp) bool { return s.size == o.size && s.written.Equal(o.written) }

// candidate is a file that has not been read yet.
type candidate struct {
	stamp
	name  string
	due   time.Time // when it may have settled, or is tried again; on the monotonic clock
	tries int       // to read it, in vain
	place int       // in the queue; -1 where it is not in it
}

// queue is a heap of candidates; the first is due first.
type queue []*candidate

func (q queue) Len() int           { return len(q) }
func (q queue) Less(i, j int) bool { return q[i].due.Before(q[j].due) }
func (q queue) Swap(i, j int) {
	q[i], q[j] = q[j], q[i]
	q[i].place, q[j].place = i, j
}

// Push is for package heap.
func (q *queue) Push(x any) {
	c := x.(*candidate)
	c.place = len(*q)
	*q = append(*q, c)
}

// Pop is for package heap.
func (q *queue) Pop() any {
	last := len(*q) - 1
	c := (*q)[last]
	(*q)[last], *q = nil, (*q)[:last]
	c.place = -1
	return c
}

// await begins, or begins anew, to wait until a file has settled.
func (w *watcher) await(name string, now stamp) {
	c := w.waiting[name]
	if c == nil {
		c = &candidate{name: name, place: -1}
		w.waiting[name] = c
	}
	c.stamp, c.tries = now, 0
	w.delay(c, w.src.Settle)
}

// delay puts a candidate off.
func (w *watcher) delay(c *candidate, d time.Duration) {
	c.due = time.Now().Add(d)
	if c.place >= 0 {
		heap.Fix(&w.queue, c.place)
	} else {
		heap.Push(&w.queue, c)
	}
}

// drop ends the wait for a file.
func (w *watcher) drop(name string) {
	c := w.waiting[name]
	if c == nil {
		return
	}
	delete(w.waiting, name)
	if c.place >= 0 {
		heap.Remove(&w.queue, c.place)
	}
}

// settled is the next candidate that may have settled; of those that are due together, the
// oldest comes first.
func (w *watcher) settled(now time.Time) *candidate {
	if len(w.ready) == 0 {
		for len(w.queue) > 0 && !w.queue[0].due.After(now) {
			w.ready = append(w.ready, heap.Pop(&w.queue).(*candidate))
		}
		slices.SortFunc(w.ready, func(a, b *candidate) int {
			return cmp.Or(a.written.Compare(b.written), cmp.Compare(a.name, b.name))
		})
	}
	for len(w.ready) > 0 {
		c := w.ready[0]
		w.ready[0], w.ready = nil, w.ready[1:]
		if w.waiting[c.name] == c && c.place < 0 {
			return c // else it was dropped, or put off, since
		}
	}
	w.ready = nil
	return nil
}

// leastPause is how long a file that changes while it is read is left alone at least.
const leastPause = 10 * time.Millisecond

// A file that can't be read is left alone for soonest, then twice that, and so on up to slowest.
const (
	soonest = time.Second
	slowest = time.Minute
)

// take reads one file and sends what it comes to.
func (w *watcher) take(ctx context.Context, c *candidate) {
	if w.growing != nil {
		w.follow(ctx, c)
		return
	}
	w.ask()
	content, seen, reason, err := w.content(c.name, c.stamp)
	w.answered()
	if err != nil {
		w.failed(ctx, c, seen, err)
		return
	}
	a := Arrival{File: c.name, Size: seen.size, Written: seen.written, Content: content}
	if reason != "" {
		a.Reading = w.unread(c.name, seen.size, reason)
	} else {
		a.Reading = w.reader.Read(c.name, seen.written, content)
	}
	if w.send(ctx, a) {
		w.drop(c.name)
		w.sent[c.name] = sentFile{stamp: seen, scan: w.scans}
	}
}

// failed decides what becomes of a file that could not be read as it was expected to be.
func (w *watcher) failed(ctx context.Context, c *candidate, seen stamp, err error) {
	switch {
	case errors.Is(err, errFolder):
		w.delay(c, min(w.src.Scan, longestRetry))
		w.nextScan = time.Now()
	case errors.Is(err, fs.ErrNotExist):
		w.drop(c.name)
	case errors.Is(err, errMoving):
		w.await(c.name, seen)
		w.delay(c, max(w.src.Settle, leastPause))
	case errors.Is(err, errOther):
		w.drop(c.name)
		w.hinted(ctx, c.name)
	default:
		w.tryAgain(ctx, c, err)
	}
}

// tryAgain puts off a file that can't be read. The third time in vain it is told of: what goes
// away by itself within seconds needs nobody.
func (w *watcher) tryAgain(ctx context.Context, c *candidate, err error) {
	c.tries++
	w.delay(c, min(w.soonest<<min(c.tries-1, 10), slowest))
	if c.tries == 3 {
		why := fmt.Sprintf("it can't be read (%s); it is tried again until it can", plainError(err))
		w.send(ctx, Arrival{File: c.name, Size: c.size, Reading: w.unread(c.name, c.size, why)})
	}
}
