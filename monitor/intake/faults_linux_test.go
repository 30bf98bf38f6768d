package intake

import (
	"fmt"
	"os"
	"os/exec"
	"strings"
	"syscall"
	"testing"
	"time"
)

// TestMountedOver: a file system that is mounted over a folder, and taken off again, is another
// folder each time. The system gives no hint of either.
func TestMountedOver(t *testing.T) {
	s := watching(t, func(s *station) { s.src.Scan = 50 * time.Millisecond })
	s.drop("a.csv", someFile)
	s.expect("a.csv", "")
	if err := syscall.Mount("none", s.folder, "tmpfs", 0, "size=1m"); err != nil {
		t.Skipf("file systems can't be mounted here: %v", err)
	}
	t.Cleanup(func() { _ = syscall.Unmount(s.folder, syscall.MNT_DETACH) })
	s.expect("", "another folder than before")
	if a := s.expect("", ""); !a.Able {
		t.Errorf("%+v", a)
	}
	s.drop("b.csv", someFile)
	s.expect("b.csv", "")
	s.drop("c.csv", someFile)
	s.expect("c.csv", "")
	// The watch holds nothing open: the file system comes off without force.
	if err := syscall.Unmount(s.folder, 0); err != nil {
		t.Errorf("unmount: %v", err)
	}
	s.expect("", "another folder than before")
	if a := s.expect("", ""); !a.Able {
		t.Errorf("%+v", a)
	}
	s.drop("d.csv", someFile)
	s.expect("d.csv", "")
}

// TestNoFilesLeft: a process that may open no more files can't look, says so, and goes on when
// it may. It runs by itself, since the bound is one of the process.
func TestNoFilesLeft(t *testing.T) {
	const child = "STEELYARD_TEST_NO_FILES_LEFT"
	if os.Getenv(child) == "" {
		cmd := exec.Command(os.Args[0], "-test.run=^TestNoFilesLeft$", "-test.v")
		cmd.Env = append(os.Environ(), child+"=1")
		if out, err := cmd.CombinedOutput(); err != nil {
			t.Errorf("%v\n%s", err, out)
		}
		return
	}
	s := watching(t, func(s *station) { s.src.Scan, s.w.soonest = 50*time.Millisecond, 20*time.Millisecond })
	s.drop("a.csv", someFile)
	s.expect("a.csv", "")
	var was syscall.Rlimit
	s.do(syscall.Getrlimit(syscall.RLIMIT_NOFILE, &was))
	s.drop(".b.csv", someFile)
	bound := was
	bound.Cur = 3
	s.do(syscall.Setrlimit(syscall.RLIMIT_NOFILE, &bound))
	s.do(os.Rename(s.path(".b.csv"), s.path("b.csv")))
	s.expect("", "can't be looked at: too many open files")
	s.do(syscall.Setrlimit(syscall.RLIMIT_NOFILE, &was))
	if a := s.expect("", ""); !a.Able {
		t.Errorf("%+v", a)
	}
	s.expect("b.csv", "")
}

// TestReadErrors: the disk gives errors for a file for a while; the watch tells of it once, and
// reads the file when the disk does. The errors are real ones, put in by strace.
func TestReadErrors(t *testing.T) {
	const child = "STEELYARD_TEST_READ_ERRORS"
	if folder := os.Getenv(child); folder != "" {
		s := &station{T: t, folder: folder, out: make(chan Arrival), known: map[string]stamp{}}
		s.src = someSource(nil)
		s.src.Folder = folder
		s.w = newWatcher(s.src, somePlan(), s.knows, s.out)
		s.w.soonest = time.Millisecond
		s.begin()
		defer s.stop()
		if a := s.expect("a.csv", "it can't be read (input/output error); it is tried again until it can"); !a.Written.IsZero() {
			t.Error("it would be taken for known")
		}
		s.expect("a.csv", "")
		return
	}
	strace, err := exec.LookPath("strace")
	if err != nil {
		t.Skip("strace is not installed")
	}
	folder := t.TempDir()
	name := folder + "/a.csv"
	if err := os.WriteFile(name, []byte(someFile), 0o644); err != nil {
		t.Fatal(err)
	}
	// The first reads of each thread fail; threads are few, and the watch tries until one has none left.
	cmd := exec.Command(strace, "-f", "-qq", "-o", "/dev/null", "-P", name, "-e", "inject=read,pread64:error=EIO:when=1..3",
		os.Args[0], "-test.run=^TestReadErrors$", "-test.v")
	cmd.Env = append(os.Environ(), child+"="+folder, "GOMAXPROCS=1")
	out, err := cmd.CombinedOutput()
	if err != nil {
		if strings.Contains(string(out), "PTRACE") || strings.Contains(string(out), "ptrace") {
			t.Skipf("strace may not trace here: %s", out)
		}
		t.Error(fmt.Errorf("%w\n%s", err, out))
	}
}

// TestHintsOverflow: more happens in a folder than the system's queue of hints holds, and nothing is missed: the look through
// the folder finds what no hint told of. The bound is one of the machine, so it is put back.
func TestHintsOverflow(t *testing.T) {
	const bound = "/proc/sys/fs/inotify/max_queued_events"
	was, err := os.ReadFile(bound)
	if err == nil {
		err = os.WriteFile(bound, []byte("64"), 0o644)
	}
	if err != nil {
		t.Skipf("SKIPPED: the queue of hints can't be made short: %v", err)
	}
	t.Cleanup(func() {
		if err := os.WriteFile(bound, was, 0o644); err != nil {
			t.Error(err)
		}
	})
	s := watching(t, func(s *station) { s.src.Settle = 0 })
	s.drop("first.csv", someFile)
	s.expect("first.csv", "") // the watch has its queue by now
	const files = 700
	for i := range files { // nobody takes what is sent meanwhile: the hints pile up
		s.drop(fmt.Sprintf("%04d.csv", i), strings.ReplaceAll(someFile, "S-", fmt.Sprintf("S%04d-", i)))
	}
	seen := map[string]bool{}
	for len(seen) < files {
		a := s.next()
		if a.File == "" {
			continue
		}
		if seen[a.File] {
			t.Fatalf("%s came twice", a.File)
		}
		seen[a.File] = true
	}
}
