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
		case "mean_largest":
			claimed = &claim.Claim{Kind: claim.Mean, Form: claim.Largest, Test: claim.Above}
			p = nil
			for i, g := range in.Groups {
				claimed.Terms = append(claimed.Terms, claim.Term{Weight: 1, Process: i})
				claimed.Processes = append(claimed.Processes, string(rune('a'+i)))
				p = append(p, g.process())
			}
			p[0], p[in.Which] = p[in.Which], p[0]
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
		for _, e := range []float64{math.Abs(o.Probability()/pr - 1), math.Abs(o.Contrary()/contrary - 1)} {
			worst = math.Max(worst, e)
			if !(e < 1e-11) {
				t.Errorf("%s (%s): %v and %v, want %v and %v: relative error %.1e", c.ID, c.Kind, o.Probability(), o.Contrary(), pr, contrary, e)
			}
		}
	}
	t.Logf("%d cases, worst relative error %.1e", seen, worst)
	if seen < 40 {
		t.Fatalf("only %d cases were read", seen)
	}
}

// pairOf is the difference of two means, standardised.
func pairOf(s1, nu1, s2, nu2 float64) (k contrast) {
	k.add(scaled{scale: s1, nu: nu1}, 1)
	k.add(scaled{scale: s2, nu: nu2}, -1)
	return k
}

// behrens_fisher.txt: percentage points of Behrens and Fisher's statistic t1 sin(theta) - t2 cos(theta).
func TestBehrensFisherTable(t *testing.T) {
	_, values := rows(t, "behrens_fisher.txt", 6)
	for _, v := range values {
		s, c := math.Sincos(v[2] * math.Pi / 180)
		// Infinitely many degrees of freedom, to the digits of the table.
		nu1, nu2 := math.Min(v[0], 1e12), math.Min(v[1], 1e12)
		var k contrast
		switch v[2] {
		case 0:
			k.add(scaled{scale: 1, nu: nu2}, 1)
		case 90:
			k.add(scaled{scale: 1, nu: nu1}, 1)
		default:
			k = pairOf(s, nu1, c, nu2)
		}
		if got := 2 * k.above(v[5]).Probability(); math.Abs(got/v[3]-1) > 3e-8 {
			t.Errorf("nu %v and %v, theta %v: P(|d| > %v) = %v, want %v", v[0], v[1], v[2], v[5], got, v[3])
		}
		if math.Abs(v[4]-v[5]) > 0.006 {
			t.Errorf("nu %v and %v, theta %v: printed %v, computed %v", v[0], v[1], v[2], v[4], v[5])
		}
	}
	if len(values) < 190 {
		t.Errorf("only %d rows were read", len(values))
	}
}

// Worked examples. The inputs are those of the sources; the probabilities were computed with mpmath or R 4.2.2 as
// named.
func TestPublishedMeans(t *testing.T) {
	for _, c := range []struct {
		source   string
		one, two group
		delta    float64
		p, tol   float64
	}{
		{"R datasets::sleep, group 2: one-sided p of t.test, df 9", group{10, 2.33, 2.00224873579683}, group{}, 0, 0.9974619336751138, 1e-13},
		{"R datasets::sleep, paired differences, t.test", group{10, -1.58, 1.22999548327987}, group{}, 0, 1 - 0.99858355490130786, 1e-11},
		{"R datasets::sleep, two groups, mpmath (Welch's 0.96030 is another method)", group{10, 2.33, 2.00224873579683}, group{10, 0.75, 1.78900965775916}, 0, 0.95104250355651, 1e-13},
		{"R datasets::PlantGrowth, trt2 and trt1, mpmath", group{10, 5.526, 0.44257328332278606}, group{10, 4.661, 0.79367569643470326}, 0, 0.9935552354513, 1e-12},
		{"R datasets::morley, runs 1 and 2, mpmath", group{20, 909, 104.92603911427577}, group{20, 856, 61.16414498363357}, 0, 0.967212895689, 1e-12},
		{"Newcomb's light, R MASS::newcomb", group{66, 26.2121212121212, 10.7453247764629}, group{}, 33, 1.4016852780368797e-6, 1e-8},
		{"Calcium in chickens, Bayesian Data Analysis, exercise 3.3 (from memory)", group{36, 1.173, 0.20}, group{32, 1.013, 0.24}, 0, 0.99752689638, 1e-11},
		{"AUTO83B, NIST/SEMATECH e-Handbook 1.3.5.3 (from memory)", group{249, 20.14458, 6.41470}, group{79, 30.48101, 6.10771}, 0, 7.7594854400509e-24, 1e-5},
	} {
		p, text := []Process{c.one.process()}, "mean(a) > 0"
		if c.two.N > 0 {
			p, text = append(p, c.two.process()), "mean(a) - mean(b) > 0"
		}
		k := parsed(t, text)
		k.Bound = c.delta
		o, err := Weigh(k, p)
		if err != nil || !(math.Abs(o.Probability()/c.p-1) < c.tol) {
			t.Errorf("%s: P = %v, want %v, %v", c.source, o.Probability(), c.p, err)
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
