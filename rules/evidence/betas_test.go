package evidence

import (
	"encoding/json"
	"math"
	"math/big"
	"math/rand/v2"
	"os"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
	"pgregory.net/rapid"

	"steelyard/rules/posterior"
)

// publicGroup and publicInputs are the shapes of the cases of posterior_claims.json that this file and
// its neighbours weigh.
type publicGroup struct {
	N, SD, Successes, Failures, Count, Exposure float64
}

type publicInputs struct {
	publicGroup
	Mean, Bound, Delta, Ratio, C, Fraction float64
	Group1, Group2                         publicGroup
	Groups                                 []publicGroup
	Alpha                                  float64 `json:"prior_alpha"`
	Beta                                   float64 `json:"prior_beta"`
	Shape                                  float64 `json:"prior_shape"`
	Rate                                   float64 `json:"prior_rate"`
	Lower, Upper                           *float64
	Which                                  int
}

func (in *publicInputs) process() Process {
	p := Process{
		Posterior: posterior.Posterior{Family: posterior.NormalFamily, M: in.Mean, K: in.N, Nu: in.N - 1,
			SS: (in.N - 1) * in.SD * in.SD},
		Lower: math.Inf(-1), Upper: math.Inf(1),
	}
	if in.Lower != nil {
		p.Lower = *in.Lower
	}
	if in.Upper != nil {
		p.Upper = *in.Upper
	}
	return p
}

func (in *publicInputs) beta(g publicGroup) (a, b float64) {
	return g.Successes + in.Alpha, g.Failures + in.Beta
}

func (in *publicInputs) gamma(g publicGroup) (shape, rate float64) {
	return g.Count + in.Shape, g.Exposure + in.Rate
}

func (in *publicInputs) odds(kind string) (o Odds, ok bool) {
	p := in.process()
	a1, b1 := in.beta(in.Group1)
	a2, b2 := in.beta(in.Group2)
	s1, r1 := in.gamma(in.Group1)
	s2, r2 := in.gamma(in.Group2)
	switch kind {
	case "sd_ratio":
		g1, g2 := in.Group1, in.Group2
		return sdRatioOdds((g1.N-1)*g1.SD*g1.SD, g1.N-1, (g2.N-1)*g2.SD*g2.SD, g2.N-1, in.Ratio), true
	case "fraction_outside_below":
		return outsideOdds(&p, in.Fraction), true
	case "capability_above":
		return capabilityOdds(&p, in.C), true
	case "proportion_above":
		a, b := in.beta(in.publicGroup)
		return betaOdds(a, b, in.Bound), true
	case "proportion_difference":
		return betaLineOdds(a1, b1, a2, b2, 1, in.Delta), true
	case "proportion_largest":
		var a, b []float64
		for _, g := range in.Groups {
			x, y := in.beta(g)
			a, b = append(a, x), append(b, y)
		}
		return betaLargestOdds(a, b, in.Which, 0), true
	case "rate_ratio":
		return gammaLineOdds(s1, r1, s2, r2, in.Ratio, 0), true
	case "rate_difference":
		return gammaLineOdds(s1, r1, s2, r2, 1, in.Delta), true
	}
	return Odds{}, false
}

// bigLog is the logarithm of a positive number of any size.
func bigLog(f *big.Float) float64 {
	var m big.Float
	e := f.MantExp(&m)
	x, _ := m.Float64()
	return math.Log(x) + float64(e)*math.Ln2
}

// testdata/checks/posterior_claims.json: every value by mpmath with 40 to 60 digits by the two routes that
// the case names.
func TestPublicCases(t *testing.T) {
	text, err := os.ReadFile("../../testdata/checks/posterior_claims.json")
	if err != nil {
		t.Fatal(err)
	}
	var file struct {
		Cases []struct {
			ID, Kind         string
			Inputs, Expected json.RawMessage
		}
	}
	if err := json.Unmarshal(text, &file); err != nil {
		t.Fatal(err)
	}
	worst, n := 0.0, 0
	for _, c := range file.Cases {
		var in publicInputs
		var expected string
		if json.Unmarshal(c.Inputs, &in) != nil || json.Unmarshal(c.Expected, &expected) != nil {
			continue
		}
		o, ok := in.odds(c.Kind)
		if !ok {
			continue
		}
		p, _, err := big.ParseFloat(expected, 10, 300, big.ToNearestEven)
		if err != nil {
			t.Fatalf("%s: %v", c.ID, err)
		}
		e := off(o, bigLog(p), bigLog(new(big.Float).SetPrec(300).Sub(big.NewFloat(1), p)))
		worst, n = math.Max(worst, e), n+1
		if !(e < 1e-12) {
			t.Errorf("%s: %v, want P = %s: relative error %.1e", c.ID, o, expected, e)
		}
	}
	t.Logf("%d cases, worst relative error %.1e", n, worst)
	if n < 45 {
		t.Errorf("only %d cases were weighed", n)
	}
}

// Worked examples with their sources; probabilities as recomputed with mpmath to 15 digits and more.
func TestPublishedBetas(t *testing.T) {
	for _, c := range []struct {
		source  string
		a, b, x float64
		below   float64
		within  float64
	}{
		// 437 girls of 980 births, uniform prior: P(theta < 0.485) is printed as 0.992.
		{"Gelman et al., Bayesian Data Analysis, section 2.4", 438, 544, 0.485, 0.99282598856065194, 1e-14},
		// Exact 90 % limits for 4 defective of 20: 0.071354 and 0.401029 printed.
		{"NIST/SEMATECH e-Handbook 7.2.4.1, lower", 4, 17, 0.0713538843, 0.05, 1e-8},
		{"NIST/SEMATECH e-Handbook 7.2.4.1, upper", 5, 16, 0.401028117, 0.95, 1e-8},
	} {
		o := betaOdds(c.a, c.b, c.x)
		if e := relative(math.Exp(o.LogAgainst), c.below); e > c.within {
			t.Errorf("%s: P(X < %v) = %v, want %v", c.source, c.x, math.Exp(o.LogAgainst), c.below)
		}
	}
}

// pairs.txt: X1 > slope X2 + offset for random Beta and gamma pairs, counts 0 to 1e6, offsets to many standard
// deviations, probabilities down to 1e-60. Independent route, in 113-bit arithmetic (libquadmath):
// the double integral itself, 20-point Gauss panels over the density of X2, the tail of X1 summed up
// panel by panel from its density by 10-point Gauss; no incomplete function is used. Taken where
// claim and contrary, each integrated, add up to 1 within 1e-15 and panels of 0.7 the width agree.
func TestSweepPairs(t *testing.T) {
	worst := 0.0
	words, values := rows(t, "pairs.txt", 8)
	for i, v := range values {
		line := betaLineOdds
		if words[i] == "gamma" {
			line = gammaLineOdds
		}
		o := line(v[0], v[1], v[2], v[3], v[4], v[5])
		e := off(o, v[6], v[7])
		worst = math.Max(worst, e)
		if e > 1e-11 {
			t.Errorf("%s %v: %v, relative error %.1e", words[i], v[:6], o, e)
		}
	}
	t.Logf("%d pairs, worst relative error %.1e", len(values), worst)
	if len(values) < 100 {
		t.Errorf("only %d pairs in the table", len(values))
	}
}

// P(X1 > X2) for whole parameters is a finite sum of rational numbers (Thompson 1933; Cook, Exact
// Calculation of Beta Inequalities, 2005):
// sum_{i<a1} B(a2+i, b1+b2) / ((b1+i) B(1+i, b1) B(a2, b2)), here with big.Rat.
func TestBetaLineExactSums(t *testing.T) {
	seed := rand.Uint64()
	r := rand.New(rand.NewPCG(seed, 2))
	t.Logf("seed %d", seed)
	worst := 0.0
	for range 60 {
		a1, b1, a2, b2 := 1+r.Int64N(60), 1+r.Int64N(200), 1+r.Int64N(60), 1+r.Int64N(200)
		p := exactBetaAbove(a1, b1, a2, b2)
		contrary := new(big.Rat).Sub(big.NewRat(1, 1), p)
		o := betaLineOdds(float64(a1), float64(b1), float64(a2), float64(b2), 1, 0)
		logOf := func(r *big.Rat) float64 { return bigLog(new(big.Float).SetPrec(200).SetRat(r)) }
		e := off(o, logOf(p), logOf(contrary))
		worst = math.Max(worst, e)
		if e > 1e-12 {
			t.Errorf("Beta(%d,%d) over Beta(%d,%d): %v, relative error %.1e", a1, b1, a2, b2, o, e)
		}
	}
	t.Logf("worst relative error %.1e", worst)
}

func exactBetaAbove(a1, b1, a2, b2 int64) *big.Rat {
	// 1/B(a, b) = (a+b-1) C(a+b-2, a-1)
	inverseB := func(a, b int64) *big.Rat {
		n := new(big.Int).Binomial(a+b-2, a-1)
		return new(big.Rat).SetInt(n.Mul(n, big.NewInt(a+b-1)))
	}
	sum := new(big.Rat)
	for i := range a1 {
		term := new(big.Rat).Inv(inverseB(a2+i, b1+b2))
		term.Mul(term, inverseB(1+i, b1))
		sum.Add(sum, term.Quo(term, new(big.Rat).SetInt64(b1+i)))
	}
	return sum.Mul(sum, inverseB(a2, b2))
}

// Logarithms of window probabilities by mpmath with 60 digits: the integral of the density, and for the
// fourth, where that integral has only 10 digits, the difference of two series.
func TestBetaWindow(t *testing.T) {
	for _, r := range [][5]float64{
		{3.5, 97.5, 0.03, 0.04, -1.5569322074919425498}, {3.5, 97.5, 0.2, 0.20000000093132259, -31.478434894269293009},
		{500.5, 500.5, 0.6, 0.61, -23.229464145840236636}, {500.5, 500.5, 0.3, 0.3125, -79.249473704812634378},
		{0.5, 20.5, 1e-06, 1.5e-06, -6.7756711910376997863}, {20.5, 0.5, 0.9999, 0.99999, -3.3613233160236953822},
		{50.5, 50.5, 0.49, 0.51, -1.8393126908789763715}, {2, 2, 0.01, 0.99, -0.00059617767860113885654},
	} {
		o := betaWindowOdds(r[0], r[1], r[2], r[3])
		if e := off(o, r[4], math.Log(-math.Expm1(r[4]))); e > 1e-12 {
			t.Errorf("Beta(%v, %v) in %v .. %v: %v, want %v: off by %.1e", r[0], r[1], r[2], r[3], o, r[4], e)
		}
	}
}

// What is certain, and the limits it is approached from.
func TestBetaEdges(t *testing.T) {
	for _, c := range []struct {
		o    Odds
		want float64
	}{
		{betaOdds(3, 5, 0), 1}, {betaOdds(3, 5, 1), 0}, {betaOdds(3, 5, -2), 1}, {betaOdds(3, 5, 7), 0},
		{betaLineOdds(3, 5, 2, 9, 1, 1), 0}, {betaLineOdds(3, 5, 2, 9, 1, -1), 1}, {betaLineOdds(3, 5, 2, 9, -1, 2), 0},
		{betaLineOdds(3, 5, 2, 9, -1, 0), 1}, {betaWindowOdds(3, 5, 0.5, 0.5), 0}, {betaWindowOdds(3, 5, -1, 2), 1},
		{betaLargestOdds([]float64{3, 4}, []float64{5, 6}, 0, 1), 0},
		{betaLargestOdds([]float64{3, 4}, []float64{5, 6}, 0, -1), 1},
	} {
		if c.o.LogFor != math.Log(c.want) || c.o.LogAgainst != math.Log(1-c.want) {
			t.Errorf("%v, want P = %v", c.o, c.want)
		}
	}
	// slope 0 is a bound.
	if a, b := betaLineOdds(3, 5, 2, 9, 0, 0.4), betaOdds(3, 5, 0.4); a != b {
		t.Errorf("slope 0: %v, bound: %v", a, b)
	}
}

// Properties of pairs: the probability falls as the offset grows; swapping the
// processes swaps the sides; taking proportions of what was not counted turns the claim round.
func TestBetaLineProperties(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		count := rapid.Float64Range(0.5, 5000)
		a1, b1, a2, b2 := count.Draw(t, "a1"), count.Draw(t, "b1"), count.Draw(t, "a2"), count.Draw(t, "b2")
		d := rapid.Float64Range(-0.9, 0.9).Draw(t, "offset")
		o := betaLineOdds(a1, b1, a2, b2, 1, d)
		if more := betaLineOdds(a1, b1, a2, b2, 1, d+0.01); more.LogFor > o.LogFor+1e-12*(1+math.Abs(o.LogFor)) {
			t.Fatalf("P rises from %v to %v with the offset", o.LogFor, more.LogFor)
		}
		near := func(x Odds) bool {
			slack := 1e-11 + 1e-14*math.Abs(x.LogFor+x.LogAgainst)
			return (x.LogFor < -700 && o.LogFor < -690 || math.Abs(x.LogFor-o.LogFor) < slack) &&
				(x.LogAgainst < -700 && o.LogAgainst < -690 || math.Abs(x.LogAgainst-o.LogAgainst) < slack)
		}
		if swapped := betaLineOdds(a2, b2, a1, b1, 1, -d).against(); !near(swapped) {
			t.Fatalf("%v, swapped %v", o, swapped)
		}
		if turned := betaLineOdds(b2, a2, b1, a1, 1, d); !near(turned) {
			t.Fatalf("%v, of the rest %v", o, turned)
		}
	})
}

// The largest of k: over all of them the probabilities make 1; of two it is the pair; claim and contrary are
// integrated apart and make 1, with a tolerance of either sign.
func TestBetaLargest(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		k := rapid.IntRange(2, 6).Draw(t, "k")
		count := rapid.Float64Range(0.5, 2000)
		a, b := make([]float64, k), make([]float64, k)
		for i := range a {
			a[i], b[i] = count.Draw(t, "a"), count.Draw(t, "b")
		}
		sum := 0.0
		for i := range a {
			sum += math.Exp(betaLargestOdds(a, b, i, 0).LogFor)
		}
		if !(math.Abs(sum-1) < 1e-11) {
			t.Fatalf("over all the largest make %v", sum)
		}
		d := rapid.Float64Range(-0.5, 0.5).Draw(t, "tolerance")
		for _, smallest := range []bool{false, true} {
			c := betaContest(a, b, 0, d)
			c.smallest = smallest
			if s := math.Exp(c.logEvent()) + math.Exp(c.logContrary()); !(math.Abs(s-1) < 1e-11) {
				t.Fatalf("smallest %v: both sides make %v", smallest, s)
			}
			o := c.odds()
			if smallest {
				if mirrored := betaSmallestOdds(a, b, 0, d).against(); !alike(o, mirrored) {
					t.Fatalf("smallest %v, by 1-X %v", o, mirrored)
				}
			}
		}
		if k == 2 {
			for _, o := range []Odds{betaLargestOdds(a, b, 0, d), betaSmallestOdds(a, b, 0, d)} {
				if pair := betaLineOdds(a[0], b[0], a[1], b[1], 1, d); !alike(o, pair) {
					t.Fatalf("largest of two %v, pair %v", o, pair)
				}
			}
		}
	})
}

// alike compares two pairs by relative error of 1e-11 in each probability above 1e-300.
func alike(x, y Odds) bool {
	near := func(a, b float64) bool { return a < -690 && b < -680 || math.Abs(a-b) < 1e-11 }
	return near(x.LogFor, y.LogFor) && near(x.LogAgainst, y.LogAgainst)
}

func TestBetasAllocateNothing(t *testing.T) {
	a, b := []float64{5, 6, 7}, []float64{95, 94, 93}
	if n := testing.AllocsPerRun(20, func() {
		weighed = betaOdds(3, 97, 0.05)
		weighed = betaLineOdds(3.5, 97.5, 7.5, 93.5, 1, 0.01)
		weighed = betaLargestOdds(a, b, 1, 0)
		weighed = betaSmallestOdds(a, b, 1, 0.01)
		weighed = betaWindowOdds(3, 97, 0.02, 0.05)
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

var weighed Odds

const draws = 100000

// The naive way beside each: 100,000 draws with gonum, which gives about three digits.
func BenchmarkProportionDifference(b *testing.B) {
	for _, c := range []struct {
		name              string
		a1, b1, a2, b2, d float64
	}{
		{"few", 3.5, 97.5, 7.5, 93.5, 0.01},
		{"many", 120.5, 880.5, 60.5, 940.5, 0.01},
		{"none", 0.5, 50.5, 0.5, 200.5, 0.01},
		{"huge", 5000.5, 95000.5, 4700.5, 95300.5, 0.001},
	} {
		b.Run(c.name, func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				weighed = betaLineOdds(c.a1, c.b1, c.a2, c.b2, 1, c.d)
			}
		})
		b.Run(c.name+"/draws", func(b *testing.B) {
			src := rand.NewPCG(1, 2)
			one, two := distuv.Beta{Alpha: c.a1, Beta: c.b1, Src: src}, distuv.Beta{Alpha: c.a2, Beta: c.b2, Src: src}
			for b.Loop() {
				n := 0
				for range draws {
					if one.Rand()-two.Rand() > c.d {
						n++
					}
				}
				weighed.LogFor = math.Log(float64(n) / draws)
			}
		})
	}
}

func BenchmarkProportionLargestOfTen(b *testing.B) {
	x := []float64{5, 6, 7, 8, 9, 10, 5, 4, 6, 7}
	y := []float64{95, 94, 93, 92, 91, 90, 95, 96, 94, 93}
	b.ReportAllocs()
	for b.Loop() {
		weighed = betaLargestOdds(x, y, 5, 0)
	}
}
