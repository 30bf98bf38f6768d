package monitor

import (
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"steelyard/monitor/intake"
	"steelyard/rules"
)

const marked = twoLines + `
[marks]
folder = "marks"
settle = "0s"
scan = "200ms"
`

func TestMarkIsAbout(t *testing.T) {
	s := stand(t, twoLines)
	for _, c := range []struct {
		m    Mark
		want []string
		says string
	}{
		{Mark{Line: "L4"}, []string{"head.L4"}, ""},
		{Mark{Characteristic: "head"}, []string{"head.L1", "head.L4"}, ""},
		{Mark{Process: "head.L1"}, []string{"head.L1"}, ""},
		{Mark{Source: "rig"}, []string{"head.L1", "head.L4"}, ""},
		{Mark{Source: "rgi"}, nil, `no source "rgi" in the configuration; did you mean "rig"`},
		{Mark{Line: "L5"}, nil, `no line "L5"`},
		{Mark{Process: "head.L5"}, nil, `no process "head.L5"`},
		{Mark{}, nil, "0 are named"},
		{Mark{Line: "L4", Source: "rig"}, nil, "2 are named"},
	} {
		c.m.Note, c.m.By, c.m.How = "new impeller", "the setter", "test"
		a, err := s.Mark(c.m)
		switch {
		case c.says != "" && (err == nil || !strings.Contains(err.Error(), c.says)):
			t.Errorf("%+v: %v, want it to say %q", c.m, err, c.says)
		case c.says == "" && (err != nil || !slices.Equal(a.Processes, c.want)):
			t.Errorf("%+v: %+v, %v", c.m, a, err)
		}
	}
	if _, err := s.Mark(Mark{Line: "L4", By: "the setter"}); err == nil || !strings.Contains(err.Error(), "needs a note") {
		t.Errorf("a mark without a note: %v", err)
	}
	if _, err := s.Mark(Mark{Line: "L4", Note: "n", At: s.now.Add(time.Hour)}); err == nil || !strings.Contains(err.Error(), "still to come") {
		t.Errorf("a mark in the future: %v", err)
	}
}

// Marks dropped as files: each line once, bad ones held with a reason, the alarm returns.
func TestMarksDropped(t *testing.T) {
	cfg := plant(t, marked)
	drops := cfg.Sources[0].Folder
	mkdir(t, cfg.Marks.Folder)
	d := start(t, cfg)
	drop(t, drops, "a.csv", rows("L1", 0, 12, 33))
	drop(t, drops, "b.csv", rows("L4", 0, 12, 34.5))
	d.until("the alarm stands", func(s *Status) bool { return len(s.Alarms) == 1 })
	one := `{"line":"L4","note":"new impeller","by":"the setter"}` + "\n"
	drop(t, cfg.Marks.Folder, "m1.jsonl", one+"\n"+strings.Join([]string{
		`{"line":"L9","note":"n","by":"b"}`, `{"line":"L4","note":"n"}`, `{"lien":"L4","note":"n","by":"b"}`, `{"line":"L4","by":"b"}`,
		`not a mark`, `{"line":"L4","note":"n","by":"b"} {}`, `{"line":"L4","at":"14:00","note":"n","by":"b"}`,
		`{"line":"L4","at":"2999-01-01T00:00:00Z","note":"n","by":"b"}`, "",
	}, "\r\n"))
	st := d.until("the mark is taken", func(s *Status) bool { return s.Alarms[0].State == rules.Returned })
	if p := standingOf(st.Processes, "head.L4"); p.Units != 0 || p.Segment != 1 || p.SegmentNote != "new impeller" {
		t.Errorf("the marked process: %+v", p)
	}
	if p := standingOf(st.Processes, "head.L1"); p.Units != 12 {
		t.Errorf("the other process: %+v", p)
	}
	drop(t, cfg.Marks.Folder, "m2.jsonl", one) // the same again, under a new name: another change
	segment := func(n int) func(*Status) bool {
		return func(s *Status) bool { return standingOf(s.Processes, "head.L4").Segment == n }
	}
	d.until("the second mark is taken", segment(2))
	drop(t, cfg.Marks.Folder, "m2.jsonl", one+one)
	drop(t, cfg.Marks.Folder, "empty.jsonl", "\n")
	d.until("what can't be taken is held", func(s *Status) bool { return s.Sources[1].Held == 3 })
	d.stop()
	d = start(t, cfg)
	drop(t, cfg.Marks.Folder, "empty.jsonl", one) // nothing of that name counted before
	st = d.until("after a new start", segment(3))
	log, err := d.DayLog("")
	if err != nil {
		t.Fatal(err)
	}
	var reasons []string
	for _, h := range log.Held {
		reasons = append(reasons, h.Reason)
	}
	said := strings.Join(reasons, "\n")
	for _, want := range []string{
		`m1.jsonl, line 3: there is no line "L9"`, `line 4: the mark does not say who`, `line 5: read what is no mark (unknown field "lien")`,
		"line 6: a mark needs a note", "line 7: read what is no mark", "line 8: something follows", `line 9: read the time "14:00"`, "line 10: a segment can't start",
		"m2.jsonl: a file of marks of this name was taken before", "empty.jsonl: the file holds no mark",
	} {
		if !strings.Contains(said, want) {
			t.Errorf("held:\n%s\nwant it to say %q", said, want)
		}
	}
	if said := strings.Join(log.Remarks, "\n"); strings.Count(said, "A new segment began for head.L4 (new impeller), by the setter") != 3 {
		t.Errorf("the day log says %s, %+v", said, st.Sources)
	}
}

// Two files of one name are never decided on together.
func TestApart(t *testing.T) {
	var list []intake.Arrival
	for _, name := range []string{"rig a", "rig b", "rig a", "marks m", "rig b", "rig ", "rig ", "marks m", "marks m", "rig a"} {
		source, file, _ := strings.Cut(name, " ")
		list = append(list, intake.Arrival{Source: source, File: file})
	}
	var got []string
	for part := range apart(list) {
		text := ""
		for _, a := range part {
			text += a.Source[:1] + a.File + " "
		}
		got = append(got, strings.TrimSpace(text))
	}
	if want := []string{"ra rb", "ra", "mm", "rb r r", "mm", "mm", "ra"}; !slices.Equal(got, want) {
		t.Errorf("%q, want %q", got, want)
	}
}

func mkdir(t *testing.T, folder string) {
	t.Helper()
	if err := os.MkdirAll(folder, 0o755); err != nil {
		t.Fatal(err)
	}
}
