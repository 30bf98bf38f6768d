package rules

import (
	"strings"
	"testing"
)

func TestDecisions(t *testing.T) {
	d, j := keeping(t)
	half := batch("head.L1", spread(33, 3)...)
	half.Batch.Held = []HeldRow{{Line: 5}, {Line: 9}, {Line: 11}}
	d.keep(j, half)                                             // 1
	d.keep(j, Event{Held: &Held{Source: "rig", File: "g.csv"}}) // 2
	after := func(e Event, d Decided) Event {
		e.Batch.Decided = &d
		return e
	}
	out := d.keep(j, after(batch("head.L1", 33, 33.1), Decided{Held: 1, Lines: []int{5, 9}, Take: true, Reason: "looked at", By: "the engineer"}))
	if len(out.Looks) != 1 || d.s.processes["head.L1"].Taken != 5 || !d.s.IsDecided(1, 5) || d.s.IsDecided(1, 11) || d.s.IsDecided(2, 0) {
		t.Errorf("%+v, %v", out, d.s.decided)
	}
	d.keep(j, Event{Decided: &Decided{Held: 2, Reason: "a test file"}})
	pieces, err := d.s.Pieces()
	if err != nil {
		t.Fatal(err)
	}
	if d.s, err = Restore(pieces); err != nil || !d.s.IsDecided(2, 0) || !d.s.IsDecided(1, 9) {
		t.Fatal(err)
	}
	d.s.Consult(j)
	for _, c := range []struct {
		d    Decided
		says string
	}{
		{Decided{Held: 2, Reason: "r"}, "was decided on before"},
		{Decided{Held: 1, Lines: []int{9}, Reason: "r"}, "line 9, which record 1 holds, was decided on before"},
		{Decided{Held: 1, Lines: []int{10}, Reason: "r"}, "no row of line 10"},
		{Decided{Held: 1, Lines: []int{11, 11}, Reason: "r"}, "each once"},
		{Decided{Held: 1, Reason: "r"}, "names their lines"},
		{Decided{Held: 2, Lines: []int{1}, Reason: "r"}, "decided on as a whole"},
		{Decided{Held: 0, Reason: "r"}, "holds nothing"},
		{Decided{Held: 3, Reason: "r"}, "holds nothing"},
		{Decided{Held: 99, Reason: "r"}, "no such record"},
		{Decided{Held: 1, Lines: []int{11}}, "needs a reason"},
		{Decided{Held: 1, Lines: []int{11}, Reason: "r", Take: true}, "comes with the batch"},
	} {
		if _, err := d.s.Apply(&Event{Index: 5, Decided: &c.d}); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%+v: %v, want it to say %q", c.d, err, c.says)
		}
	}
	twice := after(batch("head.L1", 33), Decided{Held: 1, Lines: []int{5}, Take: true, Reason: "r"})
	twice.Index = 5
	if _, err := d.s.Apply(&twice); err == nil || d.s.processes["head.L1"].Taken != 5 {
		t.Errorf("the same row was taken twice: %v", err)
	}
	if pieces, err := d.s.Pieces(); err != nil || len(pieces) > 0 {
		t.Errorf("refused decisions changed %v, %v", pieces, err)
	}
}
