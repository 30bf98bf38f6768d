package store

import (
	"bytes"
	"encoding/hex"
	"fmt"
	"maps"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"testing"
)

// A power cut leaves of what was not yet synced any part: pieces of 4 KiB in any choice, some torn, and of the names in a
// folder, those up to any point. TestCrashImages records with strace what a program that commits, signs and seals volumes
// writes, syncs and renames, makes of it what a cut at a random moment may leave, and opens that with the real
// program: no record that was acknowledged may be lost, none may be wrong, and the store has to open.

// inode is a file as the disk has it, and what was written to it since it was synced.
type inode struct {
	synced  []byte
	pending []piece
}

// piece is one write of at most pieceBytes, or a new size. After a sync that failed it is either on the disk or
// lost, each for itself, and a later sync that succeeds says nothing of it: the system takes its page for clean. What
// was written later, and synced, is safe.
type piece struct {
	at     int64
	data   []byte
	size   int64 // of a change of size; -1 else
	failed bool
	safe   bool
}

const pieceBytes = 4096

// disk is what strace has shown so far.
type disk struct {
	names        map[string]*inode // that are safe
	pendingNames []func(map[string]*inode)
	now          map[string]*inode // names as the program sees them
	open         map[string]*handle
	acknowledged uint64
}

type handle struct {
	file *inode
	path string
	pos  int64
}

var call = regexp.MustCompile(`^\d+ +(\w+)\((.*)\) += (-?\d+)`)

// apply takes one line of strace.
func (d *disk) apply(t *testing.T, line string) {
	m := call.FindStringSubmatch(line)
	if m != nil && m[3] == "-1" && (m[1] == "fsync" || m[1] == "fdatasync") {
		d.syncFailed(m[2])
	}
	if m == nil || strings.HasPrefix(m[3], "-") {
		return
	}
	args, result := arguments(m[2]), m[3]
	switch m[1] {
	case "openat":
		d.opened(text(t, args[1]), args[2], result)
	case "close":
		delete(d.open, args[0])
	case "pwrite64":
		if h := d.open[args[0]]; h != nil && h.file != nil {
			at, _ := strconv.ParseInt(args[3], 10, 64)
			h.file.write(at, []byte(text(t, args[1])))
		}
	case "write":
		data := []byte(text(t, args[1]))
		if args[0] == "1" {
			if n, found := strings.CutPrefix(string(data), "done "); found {
				d.acknowledged, _ = strconv.ParseUint(strings.TrimSpace(n), 10, 64)
			}
		} else if h := d.open[args[0]]; h != nil && h.file != nil {
			h.file.write(h.pos, data)
			h.pos += int64(len(data))
		}
	case "ftruncate":
		if h := d.open[args[0]]; h != nil && h.file != nil {
			size, _ := strconv.ParseInt(args[1], 10, 64)
			h.file.pending = append(h.file.pending, piece{size: size})
		}
	case "fsync", "fdatasync":
		d.sync(args[0])
	case "rename", "renameat", "renameat2":
		if m[1] != "rename" {
			args = []string{args[1], args[3]}
		}
		from, to := text(t, args[0]), text(t, args[1])
		d.rename(func(names map[string]*inode) {
			if f := names[from]; f != nil {
				names[to] = f
				delete(names, from)
			}
		})
	case "unlinkat":
		name := text(t, args[1])
		d.rename(func(names map[string]*inode) { delete(names, name) })
	}
}

// arguments splits the arguments of a call; what strings hold is in hexadecimal, so that no comma is in them.
func arguments(all string) []string { return strings.Split(all, ", ") }

// text is a string argument.
func text(t *testing.T, arg string) string {
	if strings.HasSuffix(arg, "...") {
		t.Fatal("strace has cut a string short")
	}
	b, err := hex.DecodeString(strings.ReplaceAll(strings.Trim(arg, `"`), `\x`, ""))
	if err != nil {
		t.Fatalf("%.80s: %v", arg, err)
	}
	return string(b)
}

func (d *disk) opened(path, flags, fd string) {
	f := d.now[path]
	switch {
	case f == nil && strings.Contains(flags, "O_CREAT"):
		f = &inode{}
		d.rename(func(names map[string]*inode) { names[path] = f })
	case f != nil && strings.Contains(flags, "O_TRUNC"):
		f.pending = append(f.pending, piece{size: 0})
	}
	d.open[fd] = &handle{file: f, path: path}
}

func (f *inode) write(at int64, data []byte) {
	for len(data) > 0 {
		n := min(int64(len(data)), pieceBytes-at%pieceBytes)
		f.pending = append(f.pending, piece{at: at, data: data[:n], size: -1})
		at, data = at+n, data[n:]
	}
}

// sync makes safe what a file, or a folder, has pending.
func (d *disk) sync(fd string) {
	h := d.open[fd]
	if h == nil {
		return
	}
	if h.file != nil {
		h.file.sync()
		return
	}
	for _, change := range d.pendingNames {
		change(d.names)
	}
	d.pendingNames = nil
}

// sync makes safe what was written, but for what a sync that failed has left behind, and what stands on that.
func (f *inode) sync() {
	for len(f.pending) > 0 && !f.pending[0].failed {
		f.synced, f.pending = f.pending[0].on(f.synced), f.pending[1:]
	}
	for i := range f.pending {
		f.pending[i].safe = !f.pending[i].failed
	}
}

func (d *disk) syncFailed(fd string) {
	if h := d.open[fd]; h != nil && h.file != nil {
		for i := range h.file.pending {
			h.file.pending[i].failed = !h.file.pending[i].safe
		}
	}
}

func (d *disk) rename(change func(map[string]*inode)) {
	change(d.now)
	d.pendingNames = append(d.pendingNames, change)
}

// on is a content with the piece on it.
func (p piece) on(content []byte) []byte {
	end := p.at + int64(len(p.data))
	if p.size >= 0 {
		end = p.size
		content = content[:min(int64(len(content)), end)]
	}
	if int64(len(content)) < end {
		content = append(content, make([]byte, end-int64(len(content)))...)
	}
	copy(content[p.at:], p.data)
	return content
}

// image writes into a folder what a power cut now may leave of another.
func (d *disk) image(t *testing.T, random *rand.Rand, from, to string) {
	names := maps.Clone(d.names)
	for _, change := range d.pendingNames[:random.IntN(len(d.pendingNames)+1)] {
		change(names)
	}
	keep := []float64{0, 0.3, 0.7, 0.95, 1}[random.IntN(5)]
	for path, f := range names {
		rel, err := filepath.Rel(from, path)
		if err != nil || !filepath.IsLocal(rel) {
			continue
		}
		content := bytes.Clone(f.synced)
		for _, p := range f.pending {
			if !p.safe && random.Float64() >= keep {
				continue
			}
			if !p.safe && p.size < 0 && random.IntN(8) == 0 { // torn at a sector
				p.data = p.data[:min(len(p.data), 512*random.IntN(8))]
			}
			content = p.on(content)
		}
		target := filepath.Join(to, rel)
		if err := os.MkdirAll(filepath.Dir(target), 0o700); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(target, content, 0o600); err != nil {
			t.Fatal(err)
		}
	}
}

func TestCrashImages(t *testing.T) {
	strace, err := exec.LookPath("strace")
	if err != nil {
		t.Skip("strace is not installed")
	}
	folder, log := t.TempDir(), filepath.Join(t.TempDir(), "calls")
	if out, err := traced(folder, 60, strace, log).CombinedOutput(); err != nil {
		t.Skipf("strace can't trace here: %v\n%.300s", err, out)
	}
	s := open(t, folder)
	want := all(t, s)
	volumes := len(s.Volumes())
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	lines := callsIn(t, log)
	images, seed := 60, uint64(7)
	if *long {
		images, seed = 2200, rand.Uint64()
	}
	random := rand.New(rand.NewPCG(seed, 0))
	chance := float64(images) / float64(len(lines))
	d := &disk{names: map[string]*inode{}, now: map[string]*inode{}, open: map[string]*handle{}}
	made, most := 0, uint64(0)
	for i, line := range lines {
		d.apply(t, line)
		for n := chance; n > 0; n-- {
			if random.Float64() < n && d.acknowledged > 0 {
				made++
				most = max(most, d.acknowledged)
				d.check(t, random, folder, want, fmt.Sprintf("seed %d, behind call %d, %.60s", seed, i, line))
			}
		}
	}
	t.Logf("%d images of %d calls, up to %d records and %d volumes", made, len(lines), most, volumes)
	if made < images/3 || most < 50 || volumes == 0 {
		t.Errorf("only %d images were made, of %d records and %d volumes", made, most, volumes)
	}
}

// check opens an image.
func (d *disk) check(t *testing.T, random *rand.Rand, folder string, want [][]byte, where string) {
	t.Helper()
	image := t.TempDir()
	d.image(t, random, folder, image)
	s, err := Open(image, Options{})
	if err != nil {
		t.Errorf("%s: %v", where, err)
		return
	}
	defer s.Close()
	if s.Next() < d.acknowledged {
		t.Errorf("%s: %d records were acknowledged, and %d are there", where, d.acknowledged, s.Next())
	}
	for i, r := range all(t, s) {
		if !bytes.Equal(r, want[i]) {
			t.Errorf("%s: record %d is not what was written", where, i)
			break
		}
	}
	if _, err := s.Verify(Verification{}); err != nil {
		t.Errorf("%s: %v", where, err)
	}
	if err := s.Commit(numbered(s)); err != nil {
		t.Errorf("%s: it does not go on: %v", where, err)
	}
}
