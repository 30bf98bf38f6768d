package evidence

import (
	"math"
	"strings"
	"testing"

	"steelyard/rules/claim"
	"steelyard/rules/posterior"
)

// beta is a binomial process with a posterior Beta(a, b).
func beta(a, b float64) Process {
	return Process{Posterior: posterior.Posterior{Family: posterior.BinomialFamily, A: a, B: b}, Lower: math.Inf(-1), Upper: math.Inf(1)}
}

func parsed(t *testing.T, text string) *claim.Claim {
	t.Helper()
	c, err := claim.Parse(text)
	if err != nil {
		t.Fatal(err)
	}
	return c
}

// What can't be weighed gets a sentence, and never a number.
func TestRefusesInSentences(t *testing.T) {
	zero := group{5, 3, 0}.process()
	one := group{1, 3, 0}.process()
	good := group{5, 3, 1}.process()
	for _, c := range []struct {
		claim string
		p     []Process
		says  string
	}{
		{"mean(a) > 1", []Process{zero}, "spread is zero"},
		{"mean(a) - mean(b) > 1", []Process{good, one}, "b: too little is known yet"},
		{"proportion(a) - proportion(b) > 0", []Process{beta(3, 4), beta(0.01, 4)}, "prior is too weak"},
		{"proportion(a) > 0", []Process{beta(0, 4)}, "too little"},
		{"mean(a) > 1", nil, "1 processes"},
	} {
		if o, err := Weigh(parsed(t, c.claim), c.p); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%s: %+v, %v; want %q", c.claim, o, err, c.says)
		}
	}
}

// Every form of claim has sides that make 1 and an interval whose ends have the odds they say.
func TestIntervalsAgreeWithOdds(t *testing.T) {
	normal := []Process{group{12, 10.2, 0.31}.process(), group{15, 10.9, 0.28}.process()}
	for i := range normal {
		normal[i].Lower, normal[i].Upper = 9, 12
	}
	log := []Process{normal[0], normal[1]}
	for i := range log {
		log[i].Family, log[i].M = posterior.LognormalFamily, log[i].M/10
	}
	betas, gammas := []Process{beta(3.5, 97.5), beta(7.5, 93.5)}, []Process{beta(12.5, 100), beta(20.5, 150)}
	for i := range gammas {
		gammas[i].Family = posterior.PoissonFamily
	}
	for text, p := range map[string][]Process{
		"mean(a) > 10": normal[:1], "mean(a) - mean(b) > 0": normal, "|mean(a) - mean(b)| < 1": normal, "sd(a) / sd(b) > 1": normal, "sd(a) > 0.3": normal[:1],
		"next(a) > 10": normal[:1], "outside(a) < 0.001": normal[:1], "capability(a) > 1": normal[:1], "median(a) > 3": log[:1], "median(a) / median(b) > 1": log,
		"next(a) < 3": log[:1], "proportion(a) - proportion(b) > 0": betas, "proportion(a) / proportion(b) > 1": betas, "proportion(a) > 0.05": betas[:1],
		"proportion(a) - max(proportion(b)) > 0": betas, "rate(a) / rate(b) > 1": gammas, "rate(a) - rate(b) > 0": gammas, "rate(a) > 0.1": gammas[:1],
	} {
		c := parsed(t, text)
		o, err := Weigh(c, p)
		if err != nil || math.Abs(o.Probability()+o.Contrary()-1) > 1e-11 {
			t.Errorf("%s: %v and %v, %v", text, o.Probability(), o.Contrary(), err)
		}
		q, err := Estimate(c, p)
		if err != nil {
			t.Errorf("%s: %v", text, err)
			continue
		}
		for _, end := range []struct{ at, below float64 }{{q.Lower, 0.025}, {q.Median, 0.5}, {q.Upper, 0.975}} {
			if got := above(c, p, end.at).Contrary(); math.Abs(got-end.below) > 1e-10 {
				t.Errorf("%s: %v of the probability lies below %v, want %v", text, got, end.at, end.below)
			}
		}
	}
}
