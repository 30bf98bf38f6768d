package store

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"golang.org/x/sys/unix"
)

// sealOnce moves records of a store into a volume.
func sealOnce(folder string) int {
	s, err := Open(folder, Options{})
	if err != nil {
		fmt.Println("not opened:", err)
		return 1
	}
	if err := sealSome(s); err != nil {
		fmt.Println("failed:", err)
		return 3
	}
	if err := s.Close(); err != nil {
		fmt.Println("not closed:", err)
		return 1
	}
	return 0
}

// The program that moves records into a volume is killed at every call that writes, syncs, makes,
// renames or removes, and each fails once: every record is there, once, and the next start moves
// what was left.
func TestSealingFails(t *testing.T) {
	if _, err := exec.LookPath("strace"); err != nil {
		t.Skip("SKIPPED: no strace, which makes system calls fail")
	}
	if out, err := exec.Command("strace", "-o", os.DevNull, "true").CombinedOutput(); err != nil {
		t.Skipf("SKIPPED: strace can't trace here: %v %s", err, out)
	}
	whole := filepath.Join(t.TempDir(), "state")
	s := open(t, whole)
	many(t, s, 40)
	sign(t, s)
	if err := s.db.Sync(); err != nil {
		t.Fatal(err)
	}
	records := all(t, s)
	closed(t, s)
	every := 4
	if *long {
		every = 1
	}
	moved, left := 0, 0
	for _, f := range []struct {
		inject string
		every  int
	}{
		{"write:signal=KILL", 1}, {"write:error=EIO", 1}, {"write:error=ENOSPC", 1},
		{"fsync:signal=KILL", 1}, {"fsync:error=EIO", 1},
		{"fdatasync:signal=KILL", 1}, {"fdatasync:error=EIO", 1},
		{"pwrite64:signal=KILL", every}, {"pwrite64:error=EIO", every},
		{"renameat,rename,renameat2:signal=KILL", 1}, {"renameat,rename,renameat2:error=EIO", 1},
		{"mkdirat:signal=KILL", 1}, {"unlinkat:signal=KILL", 1},
	} {
		for when := 1; when < 100; when += f.every {
			folder := filepath.Join(t.TempDir(), "state")
			if err := os.CopyFS(folder, os.DirFS(whole)); err != nil {
				t.Fatal(err)
			}
			cmd := again(folder, 0, "strace", "-f", "-o", os.DevNull, "-e", fmt.Sprintf("inject=%s:when=%d", f.inject, when))
			cmd.Env = append(cmd.Env, childSeals+"=once")
			out, err := cmd.CombinedOutput()
			if err == nil {
				break // it does not make so many calls
			}
			now := open(t, folder)
			if acknowledged := strings.Contains(string(out), "done"); acknowledged && len(now.Volumes()) != 1 {
				t.Errorf("%d volumes, and one was acknowledged", len(now.Volumes()))
			}
			if moved += len(now.Volumes()); len(now.Volumes()) == 0 {
				left++
				sealNext(t, now, 30)
			}
			if !slices.EqualFunc(all(t, now)[:len(records)], records, bytes.Equal) {
				t.Error("the records are not those from before")
			}
			if _, err := now.Verify(Verification{}); err != nil {
				t.Error(err)
			}
			closed(t, now)
			if t.Failed() {
				t.Fatalf("%s at %d: %s", f.inject, when, out)
			}
		}
	}
	t.Logf("the volume was noted in spite of the fault %d times, and made again %d times", moved, left)
	if moved == 0 || left == 0 {
		t.Error("the sweep did not meet every kind of failure")
	}
}

// The disk has no room for a volume: nothing is lost, and the store goes on.
func TestVolumeWithoutSpace(t *testing.T) {
	disk := t.TempDir()
	if err := unix.Mount("tmpfs", disk, "tmpfs", 0, "size=16k"); err != nil {
		t.Skipf("SKIPPED: a small disk can't be mounted: %v", err)
	}
	defer func() {
		if err := unix.Unmount(disk, 0); err != nil {
			t.Error(err)
		}
	}()
	folder := t.TempDir()
	s := open(t, folder)
	defer s.Close()
	many(t, s, 2000)
	if err := os.Symlink(disk, filepath.Join(folder, volumesFolder)); err != nil {
		t.Fatal(err)
	}
	if _, err := s.WriteVolume(1900); !errors.Is(err, ErrVolume) || errors.Is(err, ErrStorage) || !strings.Contains(err.Error(), "no space") {
		t.Fatalf("%v", err)
	}
	if _, err := os.Stat(filepath.Join(disk, freshVolume)); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("what was begun takes space: %v", err)
	}
	many(t, s, 2100)
	if len(all(t, s)) != 2100 {
		t.Error("records are missing")
	}
}
