package evidence

import (
	"encoding/json"
	"math"
	"math/big"
	"os"
	"strings"
	"testing"

	"steelyard/rules/claim"
	"steelyard/rules/posterior"
)

type group struct{ N, Mean, SD float64 }

type meansCase struct {
	ID, Kind string
	Inputs   struct {
		group
		Bound, Delta   float64
		Group1, Group2 group
		Groups         []group
		Weights        []float64
		Which          int
		Lower, Upper   *float64
	}
	Expected json.RawMessage
}

func (g group) process() Process {
	return Process{
		Posterior: posterior.Posterior{Family: posterior.NormalFamily, M: g.Mean, K: g.N, Nu: g.N - 1, SS: g.SD * g.SD * (g.N - 1)},
		Lower:     math.Inf(-1), Upper: math.Inf(1),
	}
}

// The cases are those of testdata/checks/posterior_claims.json, whose values were computed with
// mpmath at 40 to 60 digits by two routes.
func TestPublicMeans(t *testing.T) {
	text, err := os.ReadFile("../../testdata/checks/posterior_claims.json")
	if err != nil {
		t.Fatal(err)
	}
	var file struct{ Cases []meansCase }
	if err := json.Unmarshal(text, &file); err != nil {
		t.Fatal(err)
	}
	worst, seen := 0.0, 0
	for _, c := range file.Cases {
		in := c.Inputs
		var claimed *claim.Claim
		p := []Process{in.process()}
		switch c.Kind {
		case "mean_above":
			claimed = &claim.Claim{Kind: claim.Mean, Terms: []claim.Term{{Weight: 1}}, Test: claim.Above, Bound: in.Bound, Processes: []string{"x"}}
		case "mean_difference", "mean_equivalence":
			claimed = &claim.Claim{Kind: claim.Mean, Terms: []claim.Term{{Weight: 1}, {Weight: -1, Process: 1}}, Test: claim.Above, Bound: in.Delta, Processes: []string{"x", "y"}}
			if c.Kind == "mean_equivalence" {
				claimed.Form, claimed.Test = claim.Absolute, claim.Below
			}
			p = []Process{in.Group1.process(), in.Group2.process()}
		case "mean_contrast":
			claimed = &claim.Claim{Kind: claim.Mean, Test: claim.Above, Bound: in.Delta}
			p = nil
			for i, g := range in.Groups {
				claimed.Terms = append(claimed.Terms, claim.Term{Weight: in.Weights[i], Process: i})
				claimed.Processes = append(claimed.Processes, string(rune('a'+i)))
				p = append(p, g.process())
			}
		case "next_within":
			claimed = &claim.Claim{Kind: claim.Next, Terms: []claim.Term{{Weight: 1}}, Test: claim.Within, Low: math.Inf(-1), High: math.Inf(1), Processes: []string{"x"}}
			if in.Lower != nil {
				claimed.Low = *in.Lower
			}
			if in.Upper != nil {
				claimed.High = *in.Upper
			}
		default:
			continue
		}
		seen++
		o, err := Weigh(claimed, p)
		if err != nil {
			t.Errorf("%s: %v", c.ID, err)
			continue
		}
		want, ok := new(big.Float).SetPrec(300).SetString(strings.Trim(string(c.Expected), `"`))
		if !ok {
			t.Fatalf("%s: expected value %s", c.ID, c.Expected)
		}
		pr, _ := want.Float64()
		contrary, _ := new(big.Float).Sub(big.NewFloat(1).SetPrec(300), want).Float64()
		t.Logf("%s %.1e %.1e", c.ID, o.Probability()/pr-1, o.Contrary()/contrary-1)
		for _, e := range []float64{math.Abs(o.Probability()/pr - 1), math.Abs(o.Contrary()/contrary - 1)} {
			worst = math.Max(worst, e)
			if !(e < 1e-11) {
				t.Errorf("%s (%s): %v and %v, want %v and %v: relative error %.1e", c.ID, c.Kind, o.Probability(), o.Contrary(), pr, contrary, e)
			}
		}
	}
	t.Logf("%d cases, worst relative error %.1e", seen, worst)
	if seen < 25 {
		t.Fatalf("only %d cases were read", seen)
	}
}

// pairOf is the difference of two means, standardised.
func pairOf(s1, nu1, s2, nu2 float64) (k contrast) {
	k.add(scaled{scale: s1, nu: nu1}, 1)
	k.add(scaled{scale: s2, nu: nu2}, -1)
	return k
}

// Two-sided 5 % points of Behrens and Fisher's statistic, recomputed by the root of Ruben's
// beta mixture to about 10 digits; the printed table is Sukhatme, Sankhya 4 (1938) 39-48, from
// memory, whose three decimals these round to.
func TestBehrensFisherTable(t *testing.T) {
	for _, row := range []struct{ nu1, nu2, theta, point float64 }{
		{6, 6, 45, 2.435925318}, {8, 6, 30, 2.397830533}, {12, 6, 60, 2.23864205}, {24, 6, 75, 2.087975042},
		{12, 8, 15, 2.292306028}, {24, 12, 45, 2.11176286}, {24, 24, 30, 2.058033583},
	} {
		s, c := math.Sincos(row.theta * math.Pi / 180)
		pair := pairOf(s, row.nu1, c, row.nu2)
		got := pair.above(row.point).Probability()
		if math.Abs(got-0.025) > 3e-10 {
			t.Errorf("nu %v and %v, theta %v: P = %v, want 0.025", row.nu1, row.nu2, row.theta, got)
		}
	}
}

// Welch's t of the two sources of oxide.csv is -3.6302 on 51.857 degrees of freedom (R 4.2.2,
// stats::t.test); the Behrens–Fisher probability is 3.696e-4 by high-precision computation.
func TestOxideProbability(t *testing.T) {
	one := group{36, 1995.111111111111, 7.531942560200438}
	two := group{36, 2005.194444444444, 14.866682682032799}
	c := &claim.Claim{Kind: claim.Mean, Terms: []claim.Term{{Weight: 1}, {Weight: -1, Process: 1}}, Test: claim.Above, Processes: []string{"1", "2"}}
	o, err := Weigh(c, []Process{one.process(), two.process()})
	if err != nil || math.Abs(o.Probability()/3.696e-4-1) > 5e-4 {
		t.Errorf("P = %v, %v", o.Probability(), err)
	}
}

func TestEstimateOfADifference(t *testing.T) {
	// Student's t of 9 degrees of freedom has its 97.5 % point at 2.262157162798205 (tables).
	g := group{10, 2.33, 2.00224873579683}
	c := &claim.Claim{Kind: claim.Mean, Terms: []claim.Term{{Weight: 1}}, Test: claim.Above, Processes: []string{"x"}}
	q, err := Estimate(c, []Process{g.process()})
	half := 2.262157162798205 * g.SD / math.Sqrt(10)
	if err != nil || math.Abs(q.Median-2.33) > 1e-12 || math.Abs(q.Upper-2.33-half) > 1e-11 || math.Abs(q.Lower-2.33+half) > 1e-11 {
		t.Errorf("%+v, want 2.33 and %v each side, %v", q, half, err)
	}
}

func BenchmarkMeanDifference(b *testing.B) {
	p := []Process{group{36, 33.9, 0.62}.process(), group{36, 33.3, 0.60}.process()}
	c := &claim.Claim{Kind: claim.Mean, Terms: []claim.Term{{Weight: 1}, {Weight: -1, Process: 1}}, Test: claim.Above, Bound: 0.4, Processes: []string{"x", "y"}}
	b.ReportAllocs()
	for b.Loop() {
		if _, err := Weigh(c, p); err != nil {
			b.Fatal(err)
		}
	}
}
