package intake

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"steelyard/monitor/config"
)

// station is a source being watched in a test.
type station struct {
	*testing.T
	folder string
	src    *config.Source
	w      *watcher
	out    chan Arrival
	stop   func()

	mu    sync.Mutex
	known map[string]stamp
}

// watching starts to watch a folder; change is made to the source and the watcher before.
func watching(t *testing.T, change func(*station)) *station {
	t.Helper()
	s := &station{T: t, folder: filepath.Join(t.TempDir(), "drop"), out: make(chan Arrival), known: map[string]stamp{}}
	if err := os.Mkdir(s.folder, 0o755); err != nil {
		t.Fatal(err)
	}
	s.src = someSource(func(src *config.Source) { src.Folder = s.folder })
	s.w = newWatcher(s.src, somePlan(), s.knows, s.out)
	if change != nil {
		change(s)
	}
	s.begin()
	t.Cleanup(func() { s.stop() })
	return s
}

func (s *station) begin() {
	ctx, cancel := context.WithCancel(context.Background())
	var done sync.WaitGroup
	done.Go(func() { s.w.watch(ctx) })
	s.stop = func() {
		cancel()
		done.Wait()
	}
}

func (s *station) knows(file string, size int64, written time.Time) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	k, ok := s.known[file]
	return ok && k.same(stamp{size, written})
}

// next is the next arrival, which is then known.
func (s *station) next() Arrival {
	s.Helper()
	select {
	case a := <-s.out:
		s.mu.Lock()
		s.known[a.File] = stamp{a.Size, a.Written}
		s.mu.Unlock()
		return a
	case <-time.After(15 * time.Second):
		s.Fatal("nothing arrives")
	}
	panic("unreachable")
}

// nothing checks that nothing arrives for a while.
func (s *station) nothing(d time.Duration) {
	s.Helper()
	select {
	case a := <-s.out:
		s.Fatalf("%+v arrives", a)
	case <-time.After(d):
	}
}

func (s *station) path(name string) string { return filepath.Join(s.folder, name) }

func (s *station) do(err error) {
	s.Helper()
	if err != nil {
		s.Fatal(err)
	}
}

// write writes a file where it stands.
func (s *station) write(name, content string) {
	s.Helper()
	s.do(os.WriteFile(s.path(name), []byte(content), 0o644))
}

// drop writes a file under a hidden name and renames it.
func (s *station) drop(name, content string) {
	s.Helper()
	s.write("."+name, content)
	s.do(os.Rename(s.path("."+name), s.path(name)))
}

const someFile = someHeader + row1

// expect is the next arrival, of which a file's name and part of the reason are known.
func (s *station) expect(file, reason string) Arrival {
	s.Helper()
	a := s.next()
	got := a.Why
	if a.Reading != nil && a.Reading.Held != nil {
		got = a.Reading.Held.Reason
	}
	if a.File != file || reason == "" && got != "" || !strings.Contains(got, reason) {
		s.Fatalf("got %q: %q; want %q: %q", a.File, got, file, reason)
	}
	return a
}

func TestBacklogInOrder(t *testing.T) {
	old := time.Now().Add(-time.Hour)
	s := watching(t, func(s *station) {
		for i, name := range []string{"c.csv", "b.csv", "a.csv", "z.csv"} {
			s.write(name, someFile+strings.Repeat("\n", i))
			at := old.Add(time.Duration(i/2) * time.Minute)
			s.do(os.Chtimes(s.path(name), at, at))
		}
		for _, name := range []string{".hidden.csv", "x.csv.part", "y.tmp", "notes.txt"} {
			s.write(name, someFile)
		}
		s.write("known.csv", someFile)
		info, err := os.Stat(s.path("known.csv"))
		s.do(err)
		s.known["known.csv"] = stamp{info.Size(), info.ModTime()}
	})
	for _, name := range []string{"b.csv", "c.csv", "a.csv", "z.csv"} {
		a := s.expect(name, "")
		if len(a.Reading.Batch.Rows.Line) != 1 || string(a.Content) != someFile+strings.Repeat("\n", len(a.Content)-len(someFile)) || !a.Written.Equal(a.Reading.Batch.Written) {
			t.Errorf("%+v", a)
		}
	}
	s.nothing(100 * time.Millisecond)
}

func TestArrivals(t *testing.T) {
	s := watching(t, nil)
	s.drop("a.csv", someFile)
	s.expect("a.csv", "")
	s.drop("a.csv", someFile+row1) // sent again with other content
	if a := s.expect("a.csv", ""); len(a.Reading.Batch.Rows.Line) != 2 {
		t.Errorf("%+v", a.Reading)
	}
	s.write("b.csv", "")
	s.expect("b.csv", "b.csv: the file is empty")
	s.write("b.csv", someFile)
	s.expect("b.csv", "")
	s.do(os.Rename(s.path("b.csv"), s.path("c.csv")))
	s.expect("c.csv", "")
	s.nothing(50 * time.Millisecond)
}

// TestSlowWriter: a file that is written bit by bit is read once, when it is whole.
func TestSlowWriter(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Settle = 300 * time.Millisecond })
	f, err := os.Create(s.path("a.csv"))
	s.do(err)
	content := someHeader + strings.Repeat(row1, 20)
	for i := 0; i < len(content); i += 40 {
		_, err := f.WriteString(content[i:min(i+40, len(content))])
		s.do(err)
		time.Sleep(5 * time.Millisecond)
	}
	last := time.Now()
	s.do(f.Close())
	if a := s.expect("a.csv", ""); string(a.Content) != content {
		t.Errorf("%d bytes of %d were read", len(a.Content), len(content))
	}
	if waited := time.Since(last); waited < 290*time.Millisecond {
		t.Errorf("it was read %s after the last byte", waited)
	}
}

// TestNoPlainFiles: what is no plain file is not opened, and told of once.
func TestNoPlainFiles(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Scan = 30 * time.Millisecond })
	s.do(os.Mkdir(s.path("x.csv"), 0o755))
	s.expect("x.csv", "x.csv: it is a folder; a plain file was expected")
	s.do(os.WriteFile(filepath.Join(s.folder, "x.csv", "in.csv"), nil, 0o644)) // its time changes
	s.do(os.Symlink("/etc/passwd", s.path("passwd.csv")))
	if a := s.expect("passwd.csv", "passwd.csv: it is a symbolic link, which is not followed"); a.Content != nil {
		t.Error("there is content")
	}
	s.do(os.Symlink("a.csv", s.path("inside.csv")))
	s.expect("inside.csv", "symbolic link")
	makePipe(t, s.path("pipe.csv"))
	s.expect("pipe.csv", "pipe.csv: it is a pipe, which is not opened")
	s.nothing(150 * time.Millisecond) // several looks later
	s.do(os.Remove(s.path("pipe.csv")))
	s.drop("pipe.csv", someFile)
	s.expect("pipe.csv", "")
}

// TestFileTurnsIntoPipe: between a look and the reading, something else takes a file's place.
func TestFileTurnsIntoPipe(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Settle = 80 * time.Millisecond })
	s.drop("a.csv", someFile)
	time.Sleep(20 * time.Millisecond)
	makePipe(t, s.path(".p"))
	s.do(os.Rename(s.path(".p"), s.path("a.csv")))
	s.expect("a.csv", "it is a pipe")
}

func TestTooLarge(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Largest = int64(len(someFile)) })
	s.drop("a.csv", someFile)
	s.expect("a.csv", "")
	s.drop("b.csv", someFile+"\n")
	if a := s.expect("b.csv", fmt.Sprintf("it has %d bytes; at most %d were expected", len(someFile)+1, len(someFile))); a.Content != nil || a.Reading.SHA256 != [32]byte{} {
		t.Errorf("%+v", a)
	}
}

// TestVanishes: a file that goes before it has settled is no trouble, and one that comes back
// is read.
func TestVanishes(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Settle = 60 * time.Millisecond })
	s.drop("a.csv", someFile)
	time.Sleep(20 * time.Millisecond)
	s.do(os.Remove(s.path("a.csv")))
	s.nothing(150 * time.Millisecond)
	s.drop("a.csv", someFile)
	s.expect("a.csv", "")
}

// TestRemovedWhileRead: what a handle has read to its end counts, though the name is gone.
func TestRemovedWhileRead(t *testing.T) {
	s := watching(t, nil)
	big := someHeader + strings.Repeat(row1, 200_000)
	for i := range 5 {
		name := fmt.Sprintf("f%d.csv", i)
		s.drop(name, big)
		time.Sleep(s.src.Settle + time.Duration(i)*2*time.Millisecond)
		s.do(os.Remove(s.path(name)))
		select {
		case a := <-s.out:
			if a.Reading.Batch == nil || len(a.Reading.Batch.Rows.Line) != 200_000 {
				t.Errorf("%+v", a.Reading.Held)
			}
		case <-time.After(time.Second): // it was gone before it was opened
		}
	}
}

// TestRewrittenWhileRead: what is read is a state that the file was in, never two in one.
func TestRewrittenWhileRead(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Settle = 0 })
	big := someHeader + strings.Repeat(row1, 50_000)
	other := someHeader + strings.Repeat(strings.Replace(row1, "33.4", "44.5", 1), 50_000)
	s.drop("a.csv", big)
	var stop atomic.Bool
	var writer sync.WaitGroup
	writer.Go(func() {
		for i := 0; !stop.Load(); i++ {
			text := big
			if i%2 == 0 {
				text = other
			}
			f, err := os.OpenFile(s.path("a.csv"), os.O_WRONLY, 0)
			if err == nil {
				for at := 0; at < len(text); at += 64 << 10 { // in place, of the same size
					_, _ = f.WriteAt([]byte(text[at:min(at+64<<10, len(text))]), int64(at))
				}
				err = f.Close()
			}
			if err != nil {
				t.Error(err)
				return
			}
			time.Sleep(4 * time.Millisecond)
		}
	})
	for range 10 {
		select {
		case a := <-s.out:
			if len(a.Content) != len(big) {
				t.Errorf("%d bytes", len(a.Content))
			}
		case <-time.After(300 * time.Millisecond):
		}
	}
	stop.Store(true)
	// The writer may be within a file; when it is done, what is read last is whole.
	writer.Wait()
	final, err := os.ReadFile(s.path("a.csv"))
	s.do(err)
	for deadline := time.Now().Add(10 * time.Second); ; {
		if a := s.next(); string(a.Content) == string(final) {
			return
		}
		if time.Now().After(deadline) {
			t.Fatal("the last state was not read")
		}
	}
}

func TestFolderComesAndGoes(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Scan = 50 * time.Millisecond })
	s.drop("a.csv", someFile)
	s.expect("a.csv", "")
	s.do(os.RemoveAll(s.folder))
	if a := s.expect("", "can't be looked at: no such file or directory"); a.Able {
		t.Errorf("%+v", a)
	}
	s.nothing(200 * time.Millisecond) // it is said once
	s.do(os.WriteFile(s.folder, nil, 0o644))
	s.nothing(200 * time.Millisecond)
	s.do(os.Remove(s.folder))
	s.do(os.Mkdir(s.folder, 0o755))
	if a := s.expect("", ""); !a.Able {
		t.Errorf("%+v", a)
	}
	s.drop("b.csv", someFile)
	s.expect("b.csv", "")
}

// TestFolderSwapped: another folder in the place of the first is noticed and watched. The
// second has hints of its own: its file arrives long before the next look is due.
func TestFolderSwapped(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Scan = 400 * time.Millisecond })
	s.drop("a.csv", someFile)
	s.expect("a.csv", "")
	next := s.folder + ".next"
	s.do(os.Mkdir(next, 0o755))
	s.do(os.Rename(s.folder, s.folder+".old"))
	s.do(os.Rename(next, s.folder))
	if a := s.next(); !a.Able { // "another folder", or "no such file" where a look came between
		if a := s.next(); !a.Able {
			t.Errorf("%+v", a)
		}
	}
	s.src.Scan = time.Hour
	for i := range 3 {
		name := fmt.Sprintf("b%d.csv", i)
		s.drop(name, someFile)
		s.expect(name, "")
	}
}

// TestUnreadable: a file that can't be read is told of once, and read when it can be.
func TestUnreadable(t *testing.T) {
	if os.Geteuid() == 0 {
		t.Skip("a superuser may read everything")
	}
	s := watching(t, func(s *station) { s.w.soonest = 20 * time.Millisecond })
	s.write(".a.csv", someFile)
	s.do(os.Chmod(s.path(".a.csv"), 0))
	s.do(os.Rename(s.path(".a.csv"), s.path("a.csv")))
	if a := s.expect("a.csv", "it can't be read (permission denied)"); !a.Written.IsZero() {
		t.Error("it would be taken for known")
	}
	s.do(os.Chmod(s.path("a.csv"), 0o644))
	s.expect("a.csv", "")
}

// TestOverflow: more files than the system remembers hints for arrive while nobody listens;
// each is read once.
func TestOverflow(t *testing.T) {
	n := 17_500 // the system remembers 16,384
	if testing.Short() {
		n = 2000
	}
	s := watching(t, func(s *station) { s.src.Scan = time.Hour })
	s.drop("first.csv", someFile) // the watcher stops here, with nobody to take it
	time.Sleep(50 * time.Millisecond)
	for i := range n {
		name := fmt.Sprintf("%06d.csv", i)
		s.do(os.Link(s.path("first.csv"), s.path(name)))
	}
	seen := map[string]bool{}
	for range n + 1 {
		a := s.next()
		if seen[a.File] || a.Reading.Batch == nil {
			t.Fatalf("%s: seen %v", a.File, seen[a.File])
		}
		seen[a.File] = true
	}
	s.nothing(100 * time.Millisecond)
}

// TestSilentFolder: a folder that does not answer is told of, and that it answers again.
func TestSilentFolder(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Scan, s.w.patience = time.Hour, 40*time.Millisecond })
	s.drop("a.csv", someFile)
	s.expect("a.csv", "")
	s.w.asked.Store(1)
	if a := s.expect("", "has not answered for 40ms"); a.Able {
		t.Errorf("%+v", a)
	}
	s.nothing(100 * time.Millisecond)
	s.w.answered()
	if a := s.expect("", ""); !a.Able {
		t.Errorf("%+v", a)
	}
}

// TestEndsWhileNobodyListens: the end of the context ends a watch that is stuck in sending.
func TestEndsWhileNobodyListens(t *testing.T) {
	s := watching(t, nil)
	s.drop("a.csv", someFile)
	time.Sleep(60 * time.Millisecond)
	begun := time.Now()
	s.stop()
	if d := time.Since(begun); d > time.Second {
		t.Errorf("it took %s", d)
	}
}

// BenchmarkStart is a first look through a folder of 100,000 files that are all known.
func BenchmarkStart(b *testing.B) {
	folder := b.TempDir()
	first := filepath.Join(folder, "first.csv")
	if err := os.WriteFile(first, []byte(someFile), 0o644); err != nil {
		b.Fatal(err)
	}
	for i := range 100_000 {
		// A link counts as a file, and is made sooner; file systems bound how many there are.
		if i%10_000 == 0 {
			first = filepath.Join(folder, fmt.Sprintf("first%d.csv", i))
			if err := os.WriteFile(first, []byte(someFile), 0o644); err != nil {
				b.Fatal(err)
			}
			continue
		}
		if err := os.Link(first, filepath.Join(folder, fmt.Sprintf("%06d.csv", i))); err != nil {
			b.Fatal(err)
		}
	}
	src := someSource(func(s *config.Source) { s.Folder = folder })
	known := map[string]stamp{}
	for b.Loop() {
		w := newWatcher(src, somePlan(), func(file string, size int64, written time.Time) bool {
			if k, ok := known[file]; ok {
				return k.same(stamp{size, written})
			}
			known[file] = stamp{size, written}
			return true
		}, nil)
		w.scan(b.Context())
		w.unwatch()
	}
}

// BenchmarkArrival is the time from a file's renaming to its reading in the writer's hands,
// while 20 sources are watched and each gets files. Settle is 0: it comes on top.
func BenchmarkArrival(b *testing.B) {
	out := make(chan Arrival)
	var folders []string
	var done sync.WaitGroup
	for i := range 20 {
		folder := b.TempDir()
		src := someSource(func(s *config.Source) { s.Name, s.Folder, s.Settle = fmt.Sprint("rig", i), folder, 0 })
		done.Go(func() {
			Watch(b.Context(), src, somePlan(), func(string, int64, time.Time) bool { return false }, out)
		})
		folders = append(folders, folder)
	}
	b.Cleanup(done.Wait) // runs when the context has ended
	content := []byte(someHeader + strings.Repeat(row1, 12))
	var all []time.Duration
	n := 0
	for b.Loop() {
		b.StopTimer()
		folder, name := folders[n%20], fmt.Sprintf("%d.csv", n)
		n++
		if err := os.WriteFile(filepath.Join(folder, "."+name), content, 0o644); err != nil {
			b.Fatal(err)
		}
		b.StartTimer()
		begun := time.Now()
		if err := os.Rename(filepath.Join(folder, "."+name), filepath.Join(folder, name)); err != nil {
			b.Fatal(err)
		}
		if a := <-out; a.File != name {
			b.Fatal(a.File)
		}
		all = append(all, time.Since(begun))
	}
	slices.Sort(all)
	b.ReportMetric(float64(all[len(all)*99/100].Microseconds()), "µs-p99")
}
