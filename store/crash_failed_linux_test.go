package store

import (
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
)

// traced is the program that commits, signs and seals, with its calls written into a log, and perhaps made
// to fail.
func traced(folder string, commits int, strace, log string, more ...string) *exec.Cmd {
	under := append([]string{strace, "-f", "-xx", "-s", "4000000", "-o", log,
		"-e", "trace=openat,close,pwrite64,write,ftruncate,fsync,fdatasync,rename,renameat,renameat2,unlinkat"}, more...)
	cmd := again(folder, commits, under...)
	cmd.Env = append(cmd.Env, childSeals+"=1")
	return cmd
}

// callsIn are the lines of a log. A call during which another thread made one stands in two parts.
func callsIn(t *testing.T, log string) (lines []string) {
	t.Helper()
	text, err := os.ReadFile(log)
	if err != nil {
		t.Fatal(err)
	}
	begun := map[string]string{} // by thread
	for line := range strings.Lines(string(text)) {
		line = strings.TrimSuffix(line, "\n")
		thread, rest, _ := strings.Cut(line, " ")
		if part, unfinished := strings.CutSuffix(line, " <unfinished ...>"); unfinished {
			begun[thread] = part
			continue
		}
		if _, after, resumed := strings.Cut(rest, " resumed>"); resumed {
			line = begun[thread] + after
		}
		lines = append(lines, line)
	}
	return lines
}

// A sync fails once, the program ends, is started again and goes on, and the power is cut at any moment: of
// what was written before the sync that failed any part may be on the disk, for good, though the
// program reads it back whole (RELIABILITY.md, section 0, finding 2).
func TestCrashImagesAfterFailedSync(t *testing.T) {
	strace, err := exec.LookPath("strace")
	if err != nil {
		t.Skip("SKIPPED: no strace, which makes syncs fail")
	}
	each, step, seed := 6, 5, uint64(11)
	if *long {
		each, step, seed = 60, 1, rand.Uint64()
	}
	random := rand.New(rand.NewPCG(seed, 0))
	made, failed := 0, 0
	for _, sync := range []string{"fdatasync", "fsync"} {
		for when := 5; when < 5+6*step || *long && when < 40; when += step {
			folder, logs := t.TempDir(), t.TempDir()
			first, second := filepath.Join(logs, "1"), filepath.Join(logs, "2")
			out, err := traced(folder, 16, strace, first, "-e", fmt.Sprintf("inject=%s:error=EIO:when=%d", sync, when)).CombinedOutput()
			if err == nil {
				break // it does not sync so often
			}
			if !strings.Contains(string(out), "failed:") {
				t.Skipf("SKIPPED: strace can't trace here: %v\n%.300s", err, out)
			}
			if out, err := traced(folder, 6, strace, second).CombinedOutput(); err != nil {
				t.Fatalf("%s at %d: it does not start again: %v\n%s", sync, when, err, out)
			}
			failed++
			s := open(t, folder)
			want := all(t, s)
			closed(t, s)
			d := &disk{names: map[string]*inode{}, now: map[string]*inode{}, open: map[string]*handle{}}
			for _, line := range callsIn(t, first) {
				d.apply(t, line)
			}
			d.open = map[string]*handle{}
			lines := callsIn(t, second)
			for i, line := range lines {
				if d.apply(t, line); d.acknowledged > 0 && random.IntN(len(lines)) < each {
					made++
					d.check(t, random, folder, want, fmt.Sprintf("seed %d, %s %d failed, behind call %d of the next start, %.60s", seed, sync, when, i, line))
				}
			}
		}
	}
	t.Logf("%d images after %d syncs that failed", made, failed)
	if made < 20 || failed < 6 {
		t.Errorf("only %d images after %d syncs that failed", made, failed)
	}
}
