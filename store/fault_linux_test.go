package store

import (
	"bufio"
	"bytes"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"os/signal"
	"path/filepath"
	"runtime"
	"strconv"
	"strings"
	"testing"
	"time"

	"golang.org/x/sys/unix"

	"steelyard/rules"
)

// The tests of faults run this binary again as a program that commits, so that it can be
// killed, and traced with strace, which makes its system calls fail.
const (
	childFolder  = "STEELYARD_TEST_FOLDER"
	childCommits = "STEELYARD_TEST_COMMITS"
	childLimit   = "STEELYARD_TEST_FILE_LIMIT" // bytes
	childSeals   = "STEELYARD_TEST_SEALS"      // moves older records into volumes, where set
)

func TestMain(m *testing.M) {
	if folder := os.Getenv(childFolder); folder != "" && os.Getenv(childSeals) == "once" {
		os.Exit(sealOnce(folder))
	} else if folder != "" {
		os.Exit(commitAll(folder))
	}
	os.Exit(m.Run())
}

// commitAll commits steps until it has done as many as it was told, or the store fails. It
// prints "done N" once N records are acknowledged.
func commitAll(folder string) int {
	runtime.LockOSThread() // strace counts calls by thread
	if limit, err := strconv.ParseUint(os.Getenv(childLimit), 10, 64); err == nil {
		signal.Ignore(unix.SIGXFSZ)
		if err := unix.Setrlimit(unix.RLIMIT_FSIZE, &unix.Rlimit{Cur: limit, Max: limit}); err != nil {
			fmt.Println("limit:", err)
			return 1
		}
	}
	s, err := Open(folder, Options{})
	if err != nil {
		fmt.Println("not opened:", err)
		return 1
	}
	commits, _ := strconv.Atoi(os.Getenv(childCommits))
	for range commits {
		if err := s.Commit(numbered(s)); err != nil {
			fmt.Println("failed:", err)
			if !errors.Is(err, ErrStorage) {
				fmt.Println("WRONG: that is not a storage error")
			}
			if again := s.Commit(numbered(s)); again != err {
				fmt.Println("WRONG: the next commit says", again)
			}
			if _, read := s.Pieces(); read != err {
				fmt.Println("WRONG: the next read says", read)
			}
			_ = s.Close()
			return 3
		}
		fmt.Println("done", s.Next())
		if os.Getenv(childSeals) != "" && s.Next()%12 == 0 {
			if err := sealSome(s); err != nil {
				fmt.Println("failed:", err)
				return 3
			}
		}
		if s.Next()%2 == 1 {
			continue
		}
		if _, err := s.Checkpoint(); err != nil {
			fmt.Println("failed:", err)
			return 3
		}
		fmt.Println("signed", s.Next())
	}
	if err := s.Close(); err != nil {
		fmt.Println("not closed:", err)
		return 1
	}
	return 0
}

// sealSome moves all but the last records into a volume.
func sealSome(s *Store) error {
	v, err := s.WriteVolume(s.Next() - 3)
	if err != nil || v == nil {
		return err
	}
	e := rules.Event{Index: s.Next(), Sealed: &rules.Sealed{From: v.From, To: v.To, File: v.File, SHA256: v.SHA256}}
	if err := s.Commit(Step{Entries: []Entry{{Event: e}}, Sealed: v}); err != nil {
		return err
	}
	fmt.Println("done", s.Next())
	return nil
}

// numbered is the step that record number Next is in, with a piece of state of 20 kB.
func numbered(s *Store) Step {
	st := step(s, byte(s.Next()))
	st.Pieces["process/head.L1"] = bytes.Repeat([]byte{byte(s.Next())}, 20_000)
	return st
}

// again is this binary as the program that commits, under other commands where there are any.
func again(folder string, commits int, under ...string) *exec.Cmd {
	args := append(under, os.Args[0])
	cmd := exec.Command(args[0], args[1:]...)
	cmd.Env = append(os.Environ(), childFolder+"="+folder, childCommits+"="+strconv.Itoa(commits))
	return cmd
}

// acknowledged is how many records a program says are in the store.
func acknowledged(t *testing.T, out string) (n uint64) {
	t.Helper()
	for line := range strings.Lines(out) {
		if strings.HasPrefix(line, "WRONG") {
			t.Error(line)
		}
		if _, err := fmt.Sscanf(line, "done %d", &n); err != nil && strings.HasPrefix(line, "done") {
			t.Error(line)
		}
	}
	return n
}

// mustHold checks that the store holds the acknowledged records and perhaps one more, each
// whole in everything that its step wrote, and that it goes on. It returns whether it was one
// more.
func mustHold(t *testing.T, folder string, acked uint64) (oneMore bool) {
	t.Helper()
	s := open(t, folder)
	defer s.Close()
	next := s.Next()
	if next != acked && next != acked+1 {
		t.Fatalf("%d records were acknowledged, and %d are there", acked, next)
	}
	wholeSteps(t, s)
	if err := s.Commit(numbered(s)); err != nil {
		t.Fatalf("it doesn't go on: %v", err)
	}
	wholeSteps(t, s)
	return next == acked+1
}

// wholeSteps checks that of every step either all is there or nothing.
func wholeSteps(t *testing.T, s *Store) {
	t.Helper()
	next, seen := s.Next(), uint64(0)
	err := s.Records(0, next, func(i uint64, record []byte) error {
		e, err := decode(record)
		if err != nil {
			return err
		}
		if e.Event.Index != i || e.Event.Batch.Series[0].Value[0] != float64(byte(i)) {
			t.Errorf("record %d: %+v", i, e.Event)
		}
		seen++
		return nil
	})
	if err != nil || seen != next {
		t.Errorf("%d records of %d, %v", seen, next, err)
	}
	if _, err := s.Verify(Verification{}); err != nil {
		t.Error(err)
	}
	pieces, err := s.Pieces()
	if err != nil {
		t.Fatal(err)
	}
	if got := pieces["process/head.L1"]; next > 0 && !bytes.Equal(got, bytes.Repeat([]byte{byte(next - 1)}, 20_000)) {
		t.Errorf("the state is not that of record %d", next-1)
	}
	if _, all, err := s.Pending("leads", 0); err != nil || uint64(all) != next {
		t.Errorf("%d messages for %d records, %v", all, next, err)
	}
	known := 0
	if err := s.Files("rig", func(FileMemory) { known++ }); err != nil || uint64(known) != min(next, 256) {
		t.Errorf("%d files for %d records, %v", known, next, err)
	}
	if i, err := s.FirstAt(time.Unix(int64(999+next), 0)); err != nil || next > 0 && i != next-1 {
		t.Errorf("the last record by time: %d of %d, %v", i, next, err)
	}
}

// Every sync, every write and every growth of the file fails once, in turn, and the program
// is killed at every write. What was acknowledged is there; what was not may be there, but
// whole; the program says nothing after its first error but that error; and the next start
// says what it did, and goes on. Both kinds of failure must have been met: with the step lost,
// and with the step kept in spite of the error (RELIABILITY.md, section 0, finding 1).
func TestEveryCallFails(t *testing.T) {
	if _, err := exec.LookPath("strace"); err != nil {
		t.Skip("SKIPPED: no strace, which makes system calls fail")
	}
	if out, err := exec.Command("strace", "-o", os.DevNull, "true").CombinedOutput(); err != nil {
		t.Skipf("SKIPPED: strace can't trace here: %v %s", err, out)
	}
	every := 4
	if *long {
		every = 1
	}
	lost, kept, killed := 0, 0, 0
	for _, f := range []struct {
		inject string
		most   int
		every  int
	}{
		{"fdatasync:error=EIO", 11, 1}, // 3 to open, 2 a commit
		{"pwrite64:error=EIO", 60, every},
		{"pwrite64:error=ENOSPC", 60, every},
		{"pwrite64:signal=KILL", 60, every},
		{"renameat,rename,renameat2:signal=KILL", 6, 1},
		{"fsync:signal=KILL", 8, 1},
		{"ftruncate:error=ENOSPC", 2, 1},
		{"fsync:error=EIO", 8, 1}, // the key, the stamp and a checkpoint, each with its folder
	} {
		for when := 1; when <= f.most; when += f.every {
			folder := filepath.Join(t.TempDir(), "state")
			cmd := again(folder, 4, "strace", "-f", "-o", os.DevNull, "-e", fmt.Sprintf("inject=%s:when=%d", f.inject, when))
			out, err := cmd.CombinedOutput()
			if err == nil {
				break // it does not make so many calls
			}
			acked := acknowledged(t, string(out))
			oneMore := mustHold(t, folder, acked)
			switch {
			case strings.Contains(f.inject, "KILL"):
				killed++
			case strings.Contains(string(out), "failed:") && oneMore:
				kept++
			case strings.Contains(string(out), "failed:"):
				lost++
			case !strings.Contains(string(out), "not opened:"):
				t.Errorf("%s at %d: %v %s", f.inject, when, err, out)
			}
			if t.Failed() {
				t.Fatalf("%s at %d: %s", f.inject, when, out)
			}
		}
	}
	t.Logf("the step was lost with the error %d times, kept in spite of it %d times; killed %d times", lost, kept, killed)
	if lost == 0 || kept == 0 || killed == 0 {
		t.Error("the sweep did not meet every kind of failure")
	}
}

// Killed at random moments, over and over in the same folder.
func TestKilled(t *testing.T) {
	seed := uint64(time.Now().UnixNano())
	t.Logf("seed %d", seed)
	random := rand.New(rand.NewPCG(seed, 0))
	times := 15
	if *long {
		times = 300
	}
	folder := filepath.Join(t.TempDir(), "state")
	total := uint64(0)
	for range times {
		cmd := again(folder, 1<<30)
		out, err := cmd.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		time.AfterFunc(time.Duration(random.IntN(60))*time.Millisecond, func() { _ = cmd.Process.Kill() })
		var said strings.Builder
		for lines := bufio.NewScanner(out); lines.Scan(); {
			fmt.Fprintln(&said, lines.Text())
		}
		_ = cmd.Wait() // killed
		if acked := acknowledged(t, said.String()); acked > 0 {
			total = acked
		}
		if mustHold(t, folder, total) {
			total++
		}
		total++ // mustHold's own
		if t.Failed() {
			t.FailNow()
		}
	}
	t.Logf("%d records", total)
}

// The file may not grow: the limit of the account is met.
func TestFileLimit(t *testing.T) {
	folder := filepath.Join(t.TempDir(), "state")
	cmd := again(folder, 1<<30)
	cmd.Env = append(cmd.Env, fmt.Sprintf("%s=%d", childLimit, 2<<20))
	out, err := cmd.CombinedOutput()
	if err == nil || !strings.Contains(string(out), "file too large") {
		t.Fatalf("%v %s", err, out)
	}
	mustHold(t, folder, acknowledged(t, string(out)))
}

// The disk is full, and then is not.
func TestDiskFull(t *testing.T) {
	disk := t.TempDir()
	if err := unix.Mount("tmpfs", disk, "tmpfs", 0, "size=1m"); err != nil {
		t.Skipf("SKIPPED: a small disk can't be mounted: %v", err)
	}
	defer func() {
		if err := unix.Unmount(disk, 0); err != nil {
			t.Error(err)
		}
	}()
	folder := filepath.Join(disk, "state")
	s := open(t, folder)
	var err error
	for err == nil {
		err = s.Commit(numbered(s))
		if s.Next() > 1000 {
			t.Fatal("the disk never was full")
		}
	}
	acked := s.Next()
	if !errors.Is(err, ErrStorage) || !errors.Is(err, unix.ENOSPC) {
		t.Errorf("%v", err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if _, err := Open(folder, Options{}); !errors.Is(err, ErrStorage) || !strings.Contains(err.Error(), "free space") {
		t.Errorf("a start on the full disk: %v", err)
	}
	if _, err := os.Stat(filepath.Join(folder, fileName+".fresh")); err == nil {
		t.Error("what was begun to be copied still takes space")
	}
	if err := unix.Mount("tmpfs", disk, "tmpfs", unix.MS_REMOUNT, "size=64m"); err != nil {
		t.Fatal(err)
	}
	mustHold(t, folder, acked)
}

// Somebody cuts the file short while it is in use.
func TestCutShort(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder)
	for range 20 {
		if err := s.Commit(numbered(s)); err != nil {
			t.Fatal(err)
		}
	}
	if err := os.Truncate(filepath.Join(folder, fileName), 0); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Pieces(); !errors.Is(err, ErrStorage) {
		t.Errorf("a read of what is gone: %v", err)
	}
	if err := s.Commit(numbered(s)); !errors.Is(err, ErrStorage) {
		t.Errorf("a commit afterwards: %v", err)
	}
}

// The disk can only be read, as a system leaves it after errors, and then can be written again.
func TestDiskReadOnly(t *testing.T) {
	disk := t.TempDir()
	if err := unix.Mount("tmpfs", disk, "tmpfs", 0, "size=16m"); err != nil {
		t.Skipf("SKIPPED: a small disk can't be mounted: %v", err)
	}
	defer func() {
		if err := unix.Unmount(disk, 0); err != nil {
			t.Error(err)
		}
	}()
	folder := filepath.Join(disk, "state")
	s := open(t, folder)
	for range 5 {
		if err := s.Commit(numbered(s)); err != nil {
			t.Fatal(err)
		}
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if err := unix.Mount("tmpfs", disk, "tmpfs", unix.MS_REMOUNT|unix.MS_RDONLY, ""); err != nil {
		t.Fatal(err)
	}
	if _, err := Open(folder, Options{}); !errors.Is(err, ErrStorage) || !strings.Contains(err.Error(), "read-only") {
		t.Errorf("a start on a disk that can only be read: %v", err)
	}
	r, err := OpenToRead(folder)
	if err != nil {
		t.Errorf("to be verified it can be read: %v", err)
	} else {
		if _, err := r.Verify(Verification{}); err != nil {
			t.Error(err)
		}
		if err := r.Close(); err != nil {
			t.Error(err)
		}
	}
	if err := unix.Mount("tmpfs", disk, "tmpfs", unix.MS_REMOUNT, ""); err != nil {
		t.Fatal(err)
	}
	mustHold(t, folder, 5)
}
