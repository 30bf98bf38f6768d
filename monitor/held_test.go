package monitor

import (
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// heldBy finds what waits by a part of its reason.
func heldBy(t *testing.T, d *Desk, reason string) HeldItem {
	t.Helper()
	items, err := d.Held()
	if err != nil {
		t.Fatal(err)
	}
	i := slices.IndexFunc(items, func(i HeldItem) bool { return strings.Contains(i.Reason, reason) })
	if i < 0 {
		t.Fatalf("nothing is held because of %q: %+v", reason, items)
	}
	return items[i]
}

func decision(i HeldItem, take bool) Decision {
	return Decision{HeldRef: HeldRef{i.Record, i.Line}, Take: take, Reason: "looked at", By: "the engineer", How: "test"}
}

// Each held row, and each held file, is decided on once: counted after all, or set aside.
func TestHeldIsDecidedOn(t *testing.T) {
	cfg := plant(t, twoLines)
	folder := cfg.Sources[0].Folder
	d := start(t, cfg)
	drop(t, folder, "rows.csv", rows("L1", 0, 5, 33)+"L1,odd,133\nL1,words,abc\nL4,fine,34\n")
	d.until("it is counted", func(s *Status) bool { return s.Sources[0].Counted == 1 })
	drop(t, folder, "gross.csv", "Line,Serial,Head kPa\nL1,g1,120\nL1,g2,121\n")
	d.until("it is held", func(s *Status) bool { return s.Sources[0].Held == 2 })
	drop(t, folder, "rows.csv", rows("L1", 5, 3, 33))
	st := d.until("the name came again", func(s *Status) bool { return s.Sources[0].Held == 3 })
	if st.Waiting != (HeldStatus{Files: 2, Rows: 2}) {
		t.Errorf("status says that %+v wait", st.Waiting)
	}
	row := heldBy(t, d.Desk, `read "133"`)
	if row.Line != 7 || row.Text != "L1,odd,133" || row.Kept == "" || row.Held != "2:7" {
		t.Errorf("%+v", row)
	}
	a, err := d.Decide(decision(row, true))
	if err != nil || a.Rows != 1 || !slices.Equal(a.Lines, []int{7}) {
		t.Fatalf("%+v, %v", a, err)
	}
	taken, err := d.record(a.Record)
	if err != nil || len(taken.Batch.Series) != 1 || taken.Batch.Series[0].Value[0] != 133 || taken.Batch.Rows.Serial[0] != "odd" || taken.Batch.Rows.Line[0] != 7 {
		t.Errorf("%+v, %v", taken.Batch, err)
	}
	if _, err := d.Decide(decision(row, true)); err == nil || !strings.Contains(err.Error(), "decided on before") {
		t.Errorf("taken twice: %v", err)
	}
	words := heldBy(t, d.Desk, `read "abc"`)
	if _, err := d.Decide(decision(words, true)); err == nil || !strings.Contains(err.Error(), `as the source is configured today: rows.csv, line 8`) {
		t.Errorf("what can't be read was taken: %v", err)
	}
	if a, err := d.Decide(decision(words, false)); err != nil || a.Take || a.Rows != 0 {
		t.Errorf("%+v, %v", a, err)
	}
	gross := heldBy(t, d.Desk, "gross.csv")
	if a, err := d.Decide(decision(gross, true)); err != nil || a.Rows != 2 || a.StillHeld != 0 {
		t.Errorf("a file of gross values: %+v, %v", a, err)
	}
	name := heldBy(t, d.Desk, "rows.csv: a file of this name")
	q := decision(name, true)
	q.Replace = true
	if a, err := d.Decide(q); err != nil || a.Rows != 3 {
		t.Errorf("a file in the place of another: %+v, %v", a, err)
	}
	st = d.until("all is decided", func(s *Status) bool { return s.Waiting == HeldStatus{} })
	// What the name brought is replaced, also the row of it that was taken.
	if l1, l4 := standingOf(st.Processes, "head.L1").Units, standingOf(st.Processes, "head.L4").Units; l1 != 5 || l4 != 0 {
		t.Errorf("units: %v, %v", l1, l4)
	}
	d.stop()
	d = start(t, cfg) // the files still lie there; nothing of them counts again
	drop(t, folder, "copy.csv", "Line,Serial,Head kPa\nL1,g1,120\nL1,g2,121\n")
	st = d.until("the copy is seen", func(s *Status) bool { return s.Sources[0].Again == 1 })
	if l1 := standingOf(st.Processes, "head.L1").Units; l1 != 5 || st.Sources[0].Counted != 0 {
		t.Errorf("after a new start: %v units, %+v", l1, st.Sources)
	}
	log, err := d.DayLog("")
	if err != nil {
		t.Fatal(err)
	}
	said := strings.Join(log.Remarks, "\n")
	for _, want := range []string{"the engineer (test) decided on line 7, held in record 2: taken after all. Reason: looked at.", "on line 8, held in record 2: set aside for good", "on the file held in record 3: taken"} {
		if !strings.Contains(said, want) {
			t.Errorf("the day log says %s, want %q", said, want)
		}
	}
}

// A configuration that was wrong is mended, and the file is taken as it is read today.
func TestHeldTakenUnderTodaysConfiguration(t *testing.T) {
	cfg := plant(t, strings.Replace(twoLines, `head = "Head kPa"`, `head = "Head"`, 1))
	drop(t, cfg.Sources[0].Folder, "a.csv", rows("L1", 0, 5, 33)+"L9,x,33\n")
	d := start(t, cfg)
	d.until("it is held", func(s *Status) bool { return s.Sources[0].Held == 1 })
	item := heldBy(t, d.Desk, `no column "Head"`)
	if _, err := d.Decide(decision(item, true)); err == nil || !strings.Contains(err.Error(), "configured today") {
		t.Errorf("%v", err)
	}
	d.stop()
	text := []byte(twoLines)
	mended, err := config.Parse("config.toml", text, filepath.Dir(cfg.Site.State))
	if err != nil {
		t.Fatal(err)
	}
	d = start(t, mended)
	a, err := d.Decide(decision(item, true))
	if err != nil || a.Rows != 5 || a.StillHeld != 1 {
		t.Fatalf("%+v, %v", a, err)
	}
	if st, err := d.Status(); err != nil || st.Waiting != (HeldStatus{Rows: 1}) {
		t.Errorf("%+v, %v", st.Waiting, err)
	}
	// The row that is held in turn can be set aside, with all that wait in its record.
	if a, err := d.Decide(Decision{HeldRef: HeldRef{Record: a.Record}, Reason: "no such line"}); err != nil || !slices.Equal(a.Lines, []int{7}) {
		t.Errorf("%+v, %v", a, err)
	}
}

// What can't be taken says why, and waits on.
func TestHeldNotTaken(t *testing.T) {
	cfg := plant(t, twoLines)
	folder := cfg.Sources[0].Folder
	d := start(t, cfg)
	good := rows("L1", 0, 5, 33)
	drop(t, folder, "a.csv", good+"L1,x,133\n")
	d.until("it is counted", func(s *Status) bool { return s.Sources[0].Counted == 1 })
	drop(t, folder, "a.csv", good)
	d.until("it is held", func(s *Status) bool { return s.Sources[0].Held == 2 })
	drop(t, folder, "b.csv", good)
	d.until("its content came under another name", func(s *Status) bool { return s.Sources[0].Counted == 2 })
	if err := os.Mkdir(filepath.Join(folder, "c.csv"), 0o755); err != nil {
		t.Fatal(err)
	}
	d.until("what is no file is held", func(s *Status) bool { return s.Sources[0].Held == 3 })
	name, row := heldBy(t, d.Desk, "of this name"), heldBy(t, d.Desk, `"133"`)
	if _, err := d.Decide(decision(name, true)); err == nil || !strings.Contains(err.Error(), "has been counted meanwhile as b.csv of rig") {
		t.Errorf("counted twice: %v", err)
	}
	if _, err := d.Decide(decision(heldBy(t, d.Desk, "c.csv"), true)); err == nil || !strings.Contains(err.Error(), "no copy was kept") {
		t.Errorf("what was not read was taken: %v", err)
	}
	kept, err := os.ReadFile(row.Kept)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(row.Kept, append(kept, "L1,y,1\n"...), 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := d.Decide(decision(row, true)); err == nil || !strings.Contains(err.Error(), "gone or was changed") {
		t.Errorf("a copy that was changed was taken: %v", err)
	}
	if err := os.WriteFile(row.Kept, kept, 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := d.Withdraw(Withdrawal{Batches: []uint64{row.Record}, Reason: "wrong gauge"}); err != nil {
		t.Fatal(err)
	}
	if _, err := d.Decide(decision(row, true)); err == nil || !strings.Contains(err.Error(), "has been withdrawn") {
		t.Errorf("a row of a withdrawn batch was taken: %v", err)
	}
	for _, c := range []struct {
		ref  HeldRef
		says string
	}{
		{HeldRef{name.Record, 3}, "decided on as a whole"}, {HeldRef{row.Record, 3}, "no row of line 3"},
		{HeldRef{0, 0}, "holds nothing"}, {HeldRef{900, 0}, "no record 900"},
	} {
		if _, err := d.ShowHeld(c.ref); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%+v: %v, want it to say %q", c.ref, err, c.says)
		}
	}
	if _, err := d.Decide(Decision{HeldRef: HeldRef{Record: name.Record}}); err == nil || !strings.Contains(err.Error(), "needs a reason") {
		t.Errorf("without a reason: %v", err)
	}
	if st, err := d.Status(); err != nil || st.Waiting != (HeldStatus{Files: 2, Rows: 1}) {
		t.Errorf("%+v, %v", st.Waiting, err)
	}
}

// The rows that are taken are those, with their values, serials and times.
func TestOnly(t *testing.T) {
	b := &rules.Batch{
		Rows:   rules.Rows{Line: []int{2, 3, 5}, Time: []int64{20, 30, 50}, Serial: []string{"b", "c", "e"}},
		Series: []rules.Series{{Process: "p", Row: []int{0, 2}, Value: []float64{1, 2}, Of: []float64{3, 4}}, {Process: "q", Row: []int{1}, Value: []float64{9}}},
		Held:   make([]rules.HeldRow, 1),
	}
	only(b, []int{5})
	if got := asText(t, b); got != asText(t, &rules.Batch{
		Rows:   rules.Rows{Line: []int{5}, Time: []int64{50}, Serial: []string{"e"}},
		Series: []rules.Series{{Process: "p", Row: []int{0}, Value: []float64{2}, Of: []float64{4}}},
	}) {
		t.Errorf("%s", got)
	}
}
