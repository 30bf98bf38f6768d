package evidence

import (
	"math"
	"testing"

	"pgregory.net/rapid"

	"steelyard/rules/claim"
)

// drawMeans draws processes of a normal family, on a scale that no digit is lost on.
func drawMeans(t *rapid.T, least, most int) []Process {
	n := rapid.IntRange(least, most).Draw(t, "processes")
	p := make([]Process, n)
	for i := range p {
		size := math.Floor(math.Exp(rapid.Float64Range(0.7, 9).Draw(t, "log n")))
		p[i] = group{max(size, 2), float64(rapid.IntRange(-4000, 4000).Draw(t, "mean")) / 1024, math.Exp(rapid.Float64Range(-4, 3).Draw(t, "log sd"))}.process()
	}
	return p
}

// meansClaim is a linear claim with weights, or one of the largest or smallest, over all the processes.
func meansClaim(t *rapid.T, p []Process) *claim.Claim {
	c := &claim.Claim{Kind: claim.Mean, Form: rapid.SampledFrom([]claim.Form{claim.Linear, claim.Largest, claim.Smallest}).Draw(t, "form"), Test: claim.Above}
	if len(p) == 1 {
		c.Form = claim.Linear
	}
	for i := range p {
		w := 1.0
		if c.Form == claim.Linear {
			w = float64(rapid.IntRange(1, 8).Draw(t, "weight")*(1-2*rapid.IntRange(0, 1).Draw(t, "sign"))) / 4
		}
		c.Terms = append(c.Terms, claim.Term{Weight: w, Process: i})
		c.Processes = append(c.Processes, string(rune('a'+i)))
	}
	c.Bound = float64(rapid.IntRange(-8000, 8000).Draw(t, "bound")) / 1024
	return c
}

func oddsFor(t *rapid.T, c *claim.Claim, p []Process) Odds {
	o, err := Weigh(c, p)
	if err != nil {
		t.Fatal(err)
	}
	if math.IsNaN(o.LogFor) || math.IsNaN(o.LogAgainst) || o.LogFor > 0 || o.LogAgainst > 0 {
		t.Fatalf("odds %+v", o)
	}
	return o
}

// near says whether two logarithms of probabilities agree; below 1e-300 they are rough.
func near(a, b float64) bool {
	return a < -690 && b < -690 || math.Abs(a-b) < 1e-10
}

func TestMeansProperties(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p := drawMeans(t, 1, 4)
		c := meansClaim(t, p)
		o := oddsFor(t, c, p)
		if sum := o.Probability() + o.Contrary(); math.Abs(sum-1) > 1e-12 {
			t.Fatalf("the sides add up to %v", sum)
		}
		// A larger bound is passed no more often.
		further := *c
		further.Bound += rapid.Float64Range(1e-6, 2).Draw(t, "further")
		if q := oddsFor(t, &further, p); q.LogFor > o.LogFor+1e-12 || q.LogAgainst < o.LogAgainst-1e-12 {
			t.Fatalf("above %v: %+v; above %v: %+v", c.Bound, o, further.Bound, q)
		}
		// Turned round, the sides are swapped.
		turned := *c
		turned.Test = claim.Below
		if q := oddsFor(t, &turned, p); q != o.against() {
			t.Fatalf("%+v, turned %+v", o, q)
		}
	})
}

// Shifting and scaling measurements and claim together changes nothing; the numbers are such that float64 holds them.
func TestMeansShiftAndScale(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p := drawMeans(t, 1, 4)
		c := meansClaim(t, p)
		shift, scale := float64(rapid.IntRange(-1<<20, 1<<20).Draw(t, "shift")), math.Exp2(float64(rapid.IntRange(-30, 30).Draw(t, "doublings")))
		weights := 0.0
		for i, term := range c.Terms {
			if w := term.Weight; c.Form == claim.Linear || i == 0 {
				weights += w
			} else if i == 1 {
				weights -= w
			}
		}
		moved, q := *c, append([]Process{}, p...)
		moved.Bound = (c.Bound + weights*shift) * scale
		for i := range q {
			q[i].M, q[i].SS = (q[i].M+shift)*scale, q[i].SS*scale*scale
		}
		before, after := oddsFor(t, c, p), oddsFor(t, &moved, q)
		if !near(before.LogFor, after.LogFor) || !near(before.LogAgainst, after.LogAgainst) {
			t.Fatalf("%+v, shifted by %v and scaled by %v %+v", before, shift, scale, after)
		}
	})
}

// One of several is the largest, and one the smallest.
func TestMeansRankingSumsToOne(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p := drawMeans(t, 2, 8)
		for _, form := range []claim.Form{claim.Largest, claim.Smallest} {
			sum := 0.0
			for i := range p {
				c := &claim.Claim{Kind: claim.Mean, Form: form, Test: claim.Above}
				if form == claim.Smallest {
					c.Test = claim.Below
				}
				for j := range p {
					c.Terms = append(c.Terms, claim.Term{Weight: 1, Process: (i + j) % len(p)})
					c.Processes = append(c.Processes, "x")
				}
				sum += oddsFor(t, c, p).Probability()
			}
			if math.Abs(sum-1) > 1e-12 {
				t.Fatalf("form %v: the probabilities add up to %v", form, sum)
			}
		}
	})
}

// What has no sensible answer is a limit or a sentence, and never NaN: two units, a thousand million, spreads that
// differ by 1e12, bounds far away, means of 1e9 with a spread of 1e-3.
func TestMeansDegenerate(t *testing.T) {
	two, many, wide := group{2, 0, 1}.process(), group{1e9, 0, 1}.process(), group{2, 0, 1e12}.process()
	far := group{100, 1e9, 1e-3}.process()
	farther := group{100, 1e9 + 1e-3, 1e-3}.process()
	for _, c := range []struct {
		text     string
		p        []Process
		low, top float64
	}{
		{"mean(a) - mean(b) > 0", []Process{two, many}, 0.5, 0.5},
		{"mean(a) - mean(b) > 1e300", []Process{two, two}, 0, 1e-290},
		{"mean(a) - mean(b) > 1e-300", []Process{wide, many}, 0.49, 0.5},
		{"mean(a) - mean(b) + mean(c) > 1", []Process{two, many, wide}, 0.49, 0.5},
		{"mean(a) - mean(b) + mean(c) > 1e13", []Process{two, many, wide}, 0.01, 0.1},
		{"mean(a) > max(mean(b), mean(c))", []Process{two, many, wide}, 0.2, 0.3},
		{"mean(a) - mean(b) > 0", []Process{farther, far}, 0.99999999, 1},
		{"mean(a) > max(mean(b), mean(c))", []Process{farther, far, far}, 0.9999, 1},
		{"|mean(a) - mean(b)| < 1e-12", []Process{two, many}, 1e-14, 1e-11},
		{"mean(a) > 1e200", []Process{two}, 1e-202, 1e-200},
	} {
		o, err := Weigh(parsed(t, c.text), c.p)
		if p := o.Probability(); err != nil || !(c.low <= p && p <= c.top) || !(math.Abs(p+o.Contrary()-1) < 1e-9) {
			t.Errorf("%s: %v and %v, want between %v and %v, %v", c.text, p, o.Contrary(), c.low, c.top, err)
		}
	}
}

func TestMeansAllocateNothing(t *testing.T) {
	p := make([]Process, 5)
	for i := range p {
		p[i] = group{float64(5 + 4*i), 33 + 0.1*float64(i), 0.5}.process()
	}
	for _, text := range []string{"mean(a) > 32", "mean(a) - mean(b) > 0", "|mean(a) - mean(b)| < 0.1", "mean(a) - mean(b) + mean(c) > 0",
		"mean(a) - (mean(b) + mean(c) + mean(d))/3 > 0", "mean(a) > max(mean(b), mean(c), mean(d), mean(e))"} {
		c := parsed(t, text)
		if n := testing.AllocsPerRun(20, func() { _, _ = Weigh(c, p[:len(c.Processes)]) }); n >= 1 {
			t.Errorf("%s: %v allocations", text, n)
		}
	}
}
