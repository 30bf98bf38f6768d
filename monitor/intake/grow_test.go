package intake

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"steelyard/monitor/config"
)

// rig is a folder of growing files and what was taken of them.
type rig struct {
	reader  *Reader
	files   map[string][]byte
	known   map[string]*Progress // as committed, or as remembered since
	commits map[string][]byte    // as committed, in JSON
	rows    []string             // what counted and what was held, one each
	held    []string             // reasons of files held whole
}

type failer interface{ Fatalf(string, ...any) }

func newRig(change func(*config.Source)) *rig {
	return &rig{
		reader: NewReader(someSource(change), somePlan()), files: map[string][]byte{}, known: map[string]*Progress{}, commits: map[string][]byte{},
	}
}

// look looks at a file once, as far as it can be read; it is false where the file is unsettled.
func (r *rig) look(t failer, name string, settled, thorough bool) bool {
	content := r.files[name]
	for {
		var others []*Progress
		for file, p := range r.known {
			if file != name {
				others = append(others, p)
			}
		}
		g, err := r.reader.grow(&sight{
			file: name, content: bytes.NewReader(content), size: int64(len(content)), written: written,
			settled: settled, thorough: thorough,
		}, r.known[name], others)
		if errors.Is(err, errUnsettled) {
			return false
		}
		if err != nil {
			t.Fatalf("%v", err)
		}
		r.known[name] = g.Now
		if g.Reading != nil {
			r.take(t, g)
		}
		if !g.More {
			return true
		}
	}
}

// take commits a growth.
func (r *rig) take(t failer, g *growth) {
	state, err := json.Marshal(g.Now)
	if err != nil {
		t.Fatalf("%v", err)
	}
	r.commits[g.Now.File] = state
	if h := g.Reading.Held; h != nil && len(h.Rows) == 0 {
		r.held = append(r.held, h.Reason)
	}
	for row := range g.Reading.Rows(somePlan()) {
		if row.Held != "" {
			r.rows = append(r.rows, fmt.Sprintf("%d held %q", row.Line, row.Text))
		} else if row.Values != nil {
			r.rows = append(r.rows, fmt.Sprint(row.Line, row.Time, row.Serial, row.Values))
		}
	}
}

// restart forgets all but what was committed.
func (r *rig) restart(t failer) {
	r.known = map[string]*Progress{}
	for name, state := range r.commits {
		p := new(Progress)
		if err := json.Unmarshal(state, p); err != nil {
			t.Fatalf("%v", err)
		}
		r.known[name] = p
	}
}

// whole are the rows that one pass over a file takes.
func whole(content []byte, change func(*config.Source)) []string {
	var rows []string
	for row := range NewReader(someSource(change), somePlan()).Read("a.csv", written, content).Rows(somePlan()) {
		if row.Held != "" {
			rows = append(rows, fmt.Sprintf("%d held %q", row.Line, row.Text))
		} else if row.Values != nil {
			rows = append(rows, fmt.Sprint(row.Line, row.Time, row.Serial, row.Values))
		}
	}
	return rows
}

// someRow draws a row: sound, quoted over two lines, held, or without a value. No two are the same.
func someRow(t *rapid.T, i int) string {
	kind := rapid.IntRange(0, 9).Draw(t, "kind")
	end := rapid.SampledFrom([]string{"\n", "\r\n"}).Draw(t, "end")
	at := fmt.Sprintf("2026-10-25 0%d:%02d:%02d", i/3600%4, i/60%60, i%60)
	switch kind {
	case 0:
		return fmt.Sprintf("%s,L1,\"P-%d\",33.%d,\"8\n\"", at, i, i) + end // the number has a line end: held
	case 1:
		return fmt.Sprintf("%s,L9,P-%d,33.4,", at, i) + end
	case 2:
		return fmt.Sprintf("%s,L1,P-%d,,", at, i) + end
	case 3:
		return "\n"
	}
	return fmt.Sprintf("%s,L%d,P-%d,33.%d,8.01", at, 1+i%3, i, i) + end
}

// TestGrowingLikeWhole: however a file comes, in whatever pieces, whoever looks when and is
// restarted when, it is taken as one pass over it would: also when it is renamed, and when the
// rig writes it anew from its first byte each time.
func TestGrowingLikeWhole(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		units := rapid.Bool().Draw(t, "units row")
		change := form(func(f *config.Form) { f.UnitsRow = units })
		r := newRig(change)
		all := []byte(someHeader)
		if units {
			all = append(all, ",,,kPa,mm\n"...)
		}
		all = append(all, "2026-10-25 00:00:00,L1,first,33.4,\n"...)
		for i := range rapid.IntRange(0, 40).Draw(t, "rows") {
			all = append(all, someRow(t, i)...)
		}
		name, size, renamed := "a.csv", 0, 0
		for size < len(all) {
			switch rapid.IntRange(0, 9).Draw(t, "step") {
			case 0:
				r.restart(t)
			case 1:
				if size > len(someHeader)+60 { // a file of no row can't be told from any other
					next := fmt.Sprintf("a%d.csv", renamed)
					renamed++
					r.files[next] = r.files[name]
					delete(r.files, name)
					name = next
				}
			case 2: // the rig writes it anew; a look falls into that
				r.files[name] = all[:rapid.IntRange(0, size).Draw(t, "written anew")]
				r.look(t, name, false, rapid.Bool().Draw(t, "thorough"))
				r.files[name] = all[:size]
			default:
				size = min(len(all), size+rapid.IntRange(1, 200).Draw(t, "bytes"))
				r.files[name] = all[:size]
			}
			r.look(t, name, rapid.Bool().Draw(t, "settled"), rapid.Bool().Draw(t, "thorough"))
		}
		if !r.look(t, name, true, true) {
			t.Fatalf("unsettled")
		}
		if want := whole(all, change); !slices.Equal(r.rows, want) || len(r.held) > 0 {
			t.Fatalf("took\n%s\nheld %v\nwant\n%s", strings.Join(r.rows, "\n"), r.held, strings.Join(want, "\n"))
		}
	})
}

// numbered are rows that begin with a number.
func numbered(from, to int) string {
	var b strings.Builder
	for i := from; i < to; i++ {
		fmt.Fprintf(&b, "2026-03-02T10:%02d:%02dZ,L1,P-%d,33.4,\n", i/60, i%60, i)
	}
	return b.String()
}

func TestGrowingSituations(t *testing.T) {
	type act func(r *rig)
	write := func(name, content string) act { return func(r *rig) { r.files[name] = []byte(content) } }
	settled := func(name string) act { return func(r *rig) { r.look(t, name, true, false) } }
	moving := func(name string) act { return func(r *rig) { r.look(t, name, false, false) } }
	h := someHeader
	for _, c := range []struct {
		name string
		acts []act
		rows int // that count or are held
		held []string
	}{
		{"a half line waits", []act{write("a", h+numbered(0, 3)+"2026-03-02T1"), settled("a"), settled("a")}, 3, nil},
		{"zero bytes at the end wait", []act{
			write("a", h+numbered(0, 3)+"2026-03-02T1\x00\x00\x00"), settled("a"), write("a", h+numbered(0, 3)+"\x00\x00\n\x00"), settled("a"),
			settled("a"), write("a", h+numbered(0, 5)), settled("a"),
		}, 5, []string{"the file has zero bytes behind byte 153", "the file has zero bytes behind byte 141"}},
		{"rotated", []act{
			write("a", h+numbered(0, 5)), settled("a"), write("b", h+numbered(0, 7)), write("a", h+numbered(7, 9)), settled("a"), settled("b"),
		}, 9, nil},
		{"copied and truncated", []act{
			write("a", h+numbered(0, 5)), settled("a"), write("b", h+numbered(0, 5)), write("a", ""), settled("a"), settled("b"),
			write("a", h+numbered(5, 6)), settled("a"), write("a", h+numbered(5, 12)), settled("a"),
		}, 12, nil},
		{"a copy is looked at while it is made", []act{
			write("a", h+numbered(0, 500)), settled("a"), write("b", (h + numbered(0, 500))[:9000]), moving("b"), settled("b"),
			write("b", h+numbered(0, 500)+numbered(500, 502)), settled("b"),
		}, 502, nil},
		{"made anew with the same header", []act{
			write("a", h+numbered(0, 5)), settled("a"), write("a", h), settled("a"), write("a", h+numbered(5, 6)), settled("a"), write("a", h+numbered(5, 8)), settled("a"),
		}, 8, nil},
		{"trimmed, and restored", []act{
			write("a", h+numbered(0, 50)), settled("a"), write("a", h+numbered(0, 20)), moving("a"), settled("a"), settled("a"),
			write("a", h+numbered(0, 52)), settled("a"),
		}, 52, []string{"rows that counted are no longer in it"}},
		{"rewritten in place", []act{
			write("a", h+numbered(0, 50)), settled("a"), write("a", h+numbered(0, 20)+numbered(70, 110)), moving("a"), settled("a"), settled("a"),
		}, 50, []string{"the file was changed between byte"}},
		{"changed in the middle, at the same length", []act{
			write("a", h+numbered(0, 500)), settled("a"), write("a", h+numbered(0, 100)+strings.Replace(numbered(100, 500), "33.4", "33.5", 1)),
			func(r *rig) { r.look(t, "a", true, true) },
		}, 500, []string{"the file was changed between byte"}},
		{"begins like another", []act{
			write("a", h+numbered(0, 50)), settled("a"), write("b", h+numbered(0, 20)+numbered(70, 110)), moving("b"), settled("b"), settled("b"),
		}, 50, []string{"begins with rows that were dealt with as a"}},
		{"a header that does not fit, and then one that does", []act{
			write("a", "x,y\n1,2\n"), settled("a"), write("a", "x,y\n1,2\n3,4\n"), settled("a"), write("a", h+numbered(0, 5)), settled("a"),
		}, 5, []string{"the header has no column"}},
		{"a quote that goes wrong", []act{
			write("a", h+numbered(0, 5)+"\"x\ny\"z,\n"), settled("a"), write("a", h+numbered(0, 5)+"\"x\ny\"z,\n"+numbered(5, 6)), settled("a"), settled("a"),
		}, 5, []string{"the file is held whole"}},
		{"an open quote waits", []act{
			write("a", h+numbered(0, 5)+"2026-03-02T10:00:00Z,L1,\"x\n"), settled("a"), write("a", h+numbered(0, 5)+"2026-03-02T10:00:00Z,L1,\"x\n\",33,\n"), settled("a"),
		}, 6, nil},
		{"a mark at its start", []act{write("a", "\ufeff"+h+numbered(0, 1)), settled("a"), write("a", "\ufeff"+h+numbered(0, 3)), settled("a")}, 3, nil},
	} {
		t.Run(c.name, func(t *testing.T) {
			for _, restarts := range []bool{false, true} {
				r := newRig(nil)
				for _, a := range c.acts {
					a(r)
					if restarts {
						r.restart(t)
					}
				}
				distinct := slices.Compact(slices.Sorted(slices.Values(r.rows)))
				if len(r.rows) != c.rows || len(distinct) < c.rows {
					t.Errorf("restarts %v: %d rows, want %d:\n%s", restarts, len(r.rows), c.rows, strings.Join(r.rows, "\n"))
				}
				if len(r.held) != len(c.held) {
					t.Fatalf("restarts %v: held %q, want %q", restarts, r.held, c.held)
				}
				for i := range c.held {
					if !strings.Contains(r.held[i], c.held[i]) {
						t.Errorf("held %q, want %q", r.held[i], c.held[i])
					}
				}
			}
		})
	}
}

// TestGrowingLong: many stretches in one look, and few marks for them.
func TestGrowingLong(t *testing.T) {
	r := newRig(nil)
	content := someHeader + strings.Repeat(row1, 400_000)
	r.files["a"] = []byte(content)
	r.look(t, "a", true, true)
	if len(r.rows) != 400_000 || len(r.known["a"].Marks) > 40 || r.known["a"].Offset != int64(len(content)) || r.known["a"].Lines != 400_001 {
		t.Errorf("%d rows, %d marks, %+v", len(r.rows), len(r.known["a"].Marks), r.known["a"].Offset)
	}
}

// TestFollow: a file that grows on a disk is read line by line as it grows.
func TestFollow(t *testing.T) {
	var grown []*Progress
	follow := func(s *station) {
		s.src.Settle = 30 * time.Millisecond
		s.w = newFollower(s.src, somePlan(), grown, s.out)
	}
	s := watching(t, follow)
	f, err := os.Create(s.path("a.csv"))
	s.do(err)
	defer f.Close()
	append := func(text string) {
		_, err := f.WriteString(text)
		s.do(err)
	}
	counted := 0
	until := func(n int) (last Arrival) {
		t.Helper()
		for counted < n {
			last = s.next()
			if last.Reading.Batch == nil || last.Progress == nil || last.Reading.Batch.To != last.Progress.Offset {
				t.Fatalf("%+v", last)
			}
			counted += len(last.Reading.Batch.Rows.Line)
		}
		return last
	}
	append(someHeader + numbered(0, 2) + "2026-03-02T1")
	until(2)
	append("0:59:59Z,L1,x,33.4,\n" + numbered(3, 5))
	last := until(5)
	s.nothing(100 * time.Millisecond)
	s.stop()
	append(numbered(5, 8))
	grown = []*Progress{last.Progress}
	follow(s)
	s.begin()
	until(8)
	// Without a pause longer than Settle, too.
	for i := range 200 {
		append(numbered(8+i, 9+i))
		if i%10 == 0 {
			select {
			case a := <-s.out:
				counted += len(a.Reading.Batch.Rows.Line)
			case <-time.After(5 * time.Millisecond):
			}
		}
	}
	until(208)
	s.nothing(100 * time.Millisecond)
	if counted != 208 {
		t.Errorf("%d rows", counted)
	}
}
