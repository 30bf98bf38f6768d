package ledger

import (
	"bytes"
	"encoding/hex"
	"fmt"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// log is a log in memory, as a store keeps it.
type log struct {
	records [][]byte
	kept    [][]byte
}

func (l *log) keptWith(record uint64) ([]byte, error) {
	if record >= uint64(len(l.kept)) {
		return nil, fmt.Errorf("nothing is kept with record %d", record)
	}
	return l.kept[record], nil
}

func (l *log) add(t testing.TB, record []byte) {
	t.Helper()
	kept, err := Grow(uint64(len(l.records)), record, l.keptWith)
	if err != nil {
		t.Fatal(err)
	}
	l.records, l.kept = append(l.records, record), append(l.kept, kept)
}

func logOf(t testing.TB, n int) *log {
	l := &log{}
	for i := range n {
		l.add(t, fmt.Appendf(nil, "record %d", i))
	}
	return l
}

// differs counts the log again, as Verify of a store does, and says what is not as it was
// signed.
func (l *log) differs(c Checkpoint) string {
	var r Recount
	if len(l.records) != len(l.kept) {
		return "more or fewer hashes than records"
	}
	for i, record := range l.records {
		if !bytes.Equal(r.Add(record), l.kept[i]) {
			return fmt.Sprintf("the hashes kept with record %d", i)
		}
		if r.Size() == c.Size && r.Root() != c.Root {
			return fmt.Sprintf("the root of %d records", c.Size)
		}
	}
	if r.Size() < c.Size {
		return "fewer records than were signed"
	}
	return ""
}

// The roots of the test data of the reference implementation of RFC 6962 (Certificate
// Transparency, merkletree tests: eight entries, the root after each).
func TestRootsOfTheReference(t *testing.T) {
	entries := []string{"", "00", "10", "2021", "3031", "40414243", "5051525354555657", "606162636465666768696a6b6c6d6e6f"}
	roots := []string{
		"6e340b9cffb37a989ca544e6bb780a2c78901d3fb33738768511a30617afa01d",
		"fac54203e7cc696cf0dfcb42c92a1d9dbaf70ad9e621f4bd8d98662f00e3c125",
		"aeb6bcfe274b70a14fb067a5e5578264db0fa9b51af5e0ba159158f329e06e77",
		"d37ee418976dd95753c1c73862b9398fa2a2cf9b4ff0fdfe8b30cd95209614b7",
		"4e3bbb1f7b478dcfe71fb631631519a3bca12c9aefca1612bfce4c13a86264d4",
		"76e67dadbcdf1e10e1b74ddc608abd2f98dfb16fbce75277b5232a127f2087ef",
		"ddb89be403809e325750d3d263cd78929c2942b7942a34b77e122c9594a74c8c",
		"5dc9da79a70659a9ad559cb701ded9a2ab9d823aad2f4960cfe370eff4604328",
	}
	l, r := &log{}, &Recount{}
	if got, empty := r.Root(), "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"; hex.EncodeToString(got[:]) != empty {
		t.Errorf("the empty log: %x", got)
	}
	for i, entry := range entries {
		record, err := hex.DecodeString(entry)
		if err != nil {
			t.Fatal(err)
		}
		l.add(t, record)
		r.Add(record)
		root, err := Root(uint64(i+1), l.keptWith)
		if counted := r.Root(); err != nil || hex.EncodeToString(root[:]) != roots[i] || counted != root {
			t.Errorf("%d entries: %x, recounted %x, want %s, %v", i+1, root, counted, roots[i], err)
		}
	}
}

// For every size to 130: both ways to count agree, every record has a proof, which holds for
// no other record and number, and every smaller log is shown to be its beginning.
func TestEverySmallLog(t *testing.T) {
	const most = 130
	signing, verifying := key(t)
	l, roots := &log{}, []Hash{{}}
	var r Recount
	for size := 1; size <= most; size++ {
		record := fmt.Appendf(nil, "record %d", size-1)
		l.add(t, record)
		if kept := r.Add(record); !bytes.Equal(kept, l.kept[size-1]) {
			t.Fatalf("with record %d: %x kept, %x counted", size-1, l.kept[size-1], kept)
		}
		root, err := Root(uint64(size), l.keptWith)
		if err != nil || root != r.Root() {
			t.Fatalf("%d records: %v kept, %v counted, %v", size, root, r.Root(), err)
		}
		roots = append(roots, root)
		signed, err := Sign(Checkpoint{origin, uint64(size), root}, signing)
		if err != nil {
			t.Fatal(err)
		}
		for i := range size {
			p, err := Prove(uint64(i), uint64(size), signed, l.keptWith)
			if err != nil {
				t.Fatal(err)
			}
			if i%7 == size%7 || size < 20 { // signatures take their time
				checkProof(t, p, l.records, verifying)
			}
			extends, err := ProveExtends(uint64(i+1), uint64(size), l.keptWith)
			if err != nil {
				t.Fatal(err)
			}
			older, newer := Checkpoint{origin, uint64(i + 1), roots[i+1]}, Checkpoint{origin, uint64(size), root}
			if err := CheckExtends(older, newer, extends); err != nil {
				t.Fatal(err)
			}
			if older.Root[5] ^= 4; CheckExtends(older, newer, extends) == nil {
				t.Fatalf("a log of %d passes for the beginning of one of %d", i+1, size)
			}
		}
	}
}

func checkProof(t *testing.T, p Proof, records [][]byte, verifying string) {
	t.Helper()
	read, err := ParseProof(p.Text())
	if err != nil || !bytes.Equal(read.Text(), p.Text()) {
		t.Fatalf("%s, then %s, %v", p.Text(), read.Text(), err)
	}
	if _, err := read.Check(records[p.Index], verifying); err != nil {
		t.Fatal(err)
	}
	if len(records) > 1 {
		if _, err := p.Check(records[(p.Index+1)%uint64(len(records))], verifying); err == nil {
			t.Fatalf("the proof of record %d of %d holds for another", p.Index, len(records))
		}
		p.Index = (p.Index + 1) % uint64(len(records))
		if _, err := p.Check(records[read.Index], verifying); err == nil {
			t.Fatalf("the proof of record %d of %d holds for another number", read.Index, len(records))
		}
	}
}

const origin = "steelyard/00000000-0000-4000-8000-000000000000"

func key(t testing.TB) (signing, verifying string) {
	t.Helper()
	signing, verifying, err := NewKey(origin)
	if err != nil {
		t.Fatal(err)
	}
	if again, err := Verifying(signing); err != nil || again != verifying {
		t.Fatalf("%s, and again %s, %v", verifying, again, err)
	}
	return signing, verifying
}

// In every log of up to 9 records every bit of every record and hash is flipped, and every
// record dropped, sent twice, exchanged with every other, and one put in everywhere, with the
// hashes left or moved along or counted anew: each is noticed.
func TestEveryChangeIsNoticed(t *testing.T) {
	for size := 1; size <= 9; size++ {
		l := logOf(t, size)
		root, err := Root(uint64(size), l.keptWith)
		if err != nil {
			t.Fatal(err)
		}
		c := Checkpoint{origin, uint64(size), root}
		if what := l.differs(c); what != "" {
			t.Fatalf("an untouched log: %s", what)
		}
		for _, some := range [][][]byte{l.records, l.kept} {
			for i := range some {
				for bit := range 8 * len(some[i]) {
					some[i][bit/8] ^= 1 << (bit % 8)
					if l.differs(c) == "" {
						t.Errorf("bit %d of record %d of %d is not noticed", bit, i, size)
					}
					some[i][bit/8] ^= 1 << (bit % 8)
				}
			}
		}
		for name, records := range rearranged(l.records) {
			counted := &log{}
			for _, record := range records {
				counted.add(t, record)
			}
			if counted.differs(c) == "" {
				t.Errorf("%d records: %s, and counted anew, is not noticed", size, name)
			}
			if (&log{records: records, kept: l.kept}).differs(c) == "" {
				t.Errorf("%d records: %s is not noticed", size, name)
			}
		}
	}
}

// rearranged are all ways to drop, repeat, exchange or put in one record. A record put in, or
// sent twice, after the last is what a log that goes on looks like: it is left out.
func rearranged(records [][]byte) map[string][][]byte {
	all := map[string][][]byte{}
	splice := func(from, to int, between ...[]byte) [][]byte {
		return append(append(append([][]byte{}, records[:from]...), between...), records[to:]...)
	}
	for i := range records {
		all[fmt.Sprintf("%d dropped", i)] = splice(i, i+1)
		all[fmt.Sprintf("one put in before %d", i)] = splice(i, i, []byte("another"))
		if i < len(records)-1 {
			all[fmt.Sprintf("%d twice", i)] = splice(i, i, records[i])
		}
		for j := range i {
			exchanged := splice(0, 0)
			exchanged[i], exchanged[j] = exchanged[j], exchanged[i]
			all[fmt.Sprintf("%d and %d exchanged", j, i)] = exchanged
		}
	}
	return all
}

// Every bit of a signed checkpoint counts, and every line of it.
func TestEveryBitOfACheckpoint(t *testing.T) {
	signing, verifying := key(t)
	want := Checkpoint{origin, 12, Recount{}.rootOf("a")}
	signed, err := Sign(want, signing)
	if err != nil {
		t.Fatal(err)
	}
	if got, err := Open(signed, verifying); err != nil || got != want || OriginIn(signed) != origin {
		t.Fatalf("%+v %v", got, err)
	}
	if got := strings.Count(string(signed), "\n"); got != 5 {
		t.Errorf("%d lines:\n%s", got, signed)
	}
	for bit := range 8 * len(signed) {
		signed[bit/8] ^= 1 << (bit % 8)
		if _, err := Open(signed, verifying); err == nil {
			t.Errorf("bit %d is not noticed:\n%s", bit, signed)
		}
		signed[bit/8] ^= 1 << (bit % 8)
	}
	for n := range signed {
		if _, err := Open(signed[:n], verifying); err == nil {
			t.Errorf("the first %d bytes pass", n)
		}
	}
	if _, other := key(t); other != verifying {
		if _, err := Open(signed, other); err == nil {
			t.Error("another key verifies it")
		}
	}
}

func (r Recount) rootOf(record string) Hash {
	r.Add([]byte(record))
	return r.Root()
}

// A key signs for its own log alone, and errors never tell of it.
func TestKey(t *testing.T) {
	signing, _ := key(t)
	if _, err := Sign(Checkpoint{Origin: "steelyard/other"}, signing); err == nil {
		t.Error("it signs for another log")
	}
	for i := range signing {
		damaged := signing[:i] + "~" + signing[i+1:]
		_, err := Verifying(damaged)
		if err == nil {
			t.Errorf("a damaged key passes: byte %d", i)
		} else if strings.Contains(err.Error(), signing[len(signing)-10:]) {
			t.Errorf("the error tells of the key: %v", err)
		}
	}
}

// Logs of any records: what is kept is what is counted, and one changed bit is noticed.
func TestAnyLog(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		l := &log{}
		for _, record := range rapid.SliceOfN(rapid.SliceOf(rapid.Byte()), 1, 60).Draw(t, "records") {
			kept, err := Grow(uint64(len(l.records)), record, l.keptWith)
			if err != nil {
				t.Fatal(err)
			}
			l.records, l.kept = append(l.records, append(record, 0)[:len(record)]), append(l.kept, kept)
		}
		size := rapid.IntRange(1, len(l.records)).Draw(t, "size")
		root, err := Root(uint64(size), l.keptWith)
		if err != nil {
			t.Fatal(err)
		}
		c := Checkpoint{origin, uint64(size), root}
		if what := l.differs(c); what != "" {
			t.Fatal(what)
		}
		i := rapid.IntRange(0, len(l.kept)-1).Draw(t, "record")
		bit := rapid.IntRange(0, 8*len(l.kept[i])-1).Draw(t, "bit")
		l.kept[i][bit/8] ^= 1 << (bit % 8)
		if l.differs(c) == "" {
			t.Fatal("a changed hash is not noticed")
		}
	})
}

func FuzzParseProof(f *testing.F) {
	f.Add([]byte("c2sp.org/tlog-proof@v1\nindex 3\ngSKyXoYZUgZ6jduWYrkDOARinOMGJveXjgMkBTcdPlQ=\n\nsteelyard/x\n4\n"))
	f.Add([]byte("c2sp.org/tlog-proof@v1\nextra YQ==\nindex 0\n\n"))
	f.Fuzz(func(t *testing.T, text []byte) {
		p, err := ParseProof(text)
		if err != nil {
			return
		}
		if again, err := ParseProof(p.Text()); err != nil || !bytes.Equal(again.Text(), p.Text()) {
			t.Fatalf("%q, then %q, %v", p.Text(), again.Text(), err)
		}
	})
}

func FuzzOpen(f *testing.F) {
	signing, verifying := key(f)
	signed, err := Sign(Checkpoint{origin, 12, Hash{7}}, signing)
	if err != nil {
		f.Fatal(err)
	}
	f.Add(signed)
	f.Fuzz(func(t *testing.T, text []byte) {
		if c, err := Open(text, verifying); err == nil && (c != Checkpoint{origin, 12, Hash{7}}) {
			t.Fatalf("%+v was never signed", c)
		}
	})
}

func BenchmarkGrow(b *testing.B) {
	l, record := logOf(b, 1000), bytes.Repeat([]byte("x"), 600)
	for b.Loop() {
		if _, err := Grow(1000, record, l.keptWith); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkRecount(b *testing.B) {
	record := bytes.Repeat([]byte("x"), 600)
	var r Recount
	for b.Loop() {
		r.Add(record)
	}
}
