package evidence

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
	"pgregory.net/rapid"
)

// Gelman et al., Bayesian Data Analysis, section 2.6 (asthma deaths): P(theta > 1) printed as 0.30 and 0.93;
// recomputed with mpmath to 17 digits.
func TestPublishedGammas(t *testing.T) {
	for _, c := range []struct{ shape, rate, x, above float64 }{
		{6, 7, 1, 0.30070827617436096}, {33, 25, 1, 0.92854396875994141},
	} {
		if o := gammaOdds(c.shape, c.rate, c.x); relative(math.Exp(o.LogFor), c.above) > 1e-14 {
			t.Errorf("Gamma(%v, %v): P(X > %v) = %v, want %v", c.shape, c.rate, c.x, math.Exp(o.LogFor), c.above)
		}
	}
}

// For a whole shape1 and offset >= 0, P(X1 > X2 + d) is the finite sum, all terms positive,
//
//	sum_{k<a1} sum_{j<=k} e^(-r1 d) (r1 d)^(k-j)/(k-j)! C(a2+j-1, j) (r1/(r1+r2))^j (r2/(r1+r2))^a2
//
// (a Poisson count of the first process before the second is through), here with 300 bits and e^(-r1 d)
// by its series.
func TestGammaLineExactSums(t *testing.T) {
	seed := rand.Uint64()
	r := rand.New(rand.NewPCG(seed, 4))
	t.Logf("seed %d", seed)
	worst := 0.0
	for range 40 {
		a1, a2 := 1+r.IntN(60), 1+r.IntN(60)
		r1, r2 := float64(1+r.IntN(400))/16, float64(1+r.IntN(400))/16
		d := float64(r.IntN(200)) / 64
		p := exactGammaAbove(a1, a2, r1, r2, d)
		contrary := new(big.Float).Sub(big.NewFloat(1).SetPrec(precision), p)
		o := gammaLineOdds(float64(a1), r1, float64(a2), r2, 1, d)
		e := off(o, bigLog(p), bigLog(contrary))
		worst = math.Max(worst, e)
		if e > 1e-12 {
			t.Errorf("Gamma(%d,%v) over Gamma(%d,%v) + %v: %v, relative error %.1e", a1, r1, a2, r2, d, o, e)
		}
	}
	t.Logf("worst relative error %.1e", worst)
}

const precision = 600

func exactGammaAbove(a1, a2 int, r1, r2, d float64) *big.Float {
	num := func(x float64) *big.Float { return new(big.Float).SetPrec(precision).SetFloat64(x) }
	mul := func(a, b *big.Float) *big.Float { return new(big.Float).SetPrec(precision).Mul(a, b) }
	quo := func(a, b *big.Float) *big.Float { return new(big.Float).SetPrec(precision).Quo(a, b) }
	rate := mul(num(r1), num(d))
	exp := num(1) // e^(rate), all terms positive
	for term, k := num(1), 1; k < 2000 && term.Sign() > 0 && term.MantExp(nil) > -precision; k++ {
		term = quo(mul(term, rate), num(float64(k)))
		exp.Add(exp, term)
	}
	total := new(big.Float).SetPrec(precision).Add(num(r1), num(r2))
	share, rest := quo(num(r1), total), quo(num(r2), total)
	poisson, negative := make([]*big.Float, a1), make([]*big.Float, a1)
	poisson[0], negative[0] = quo(num(1), exp), num(1)
	for range a2 {
		negative[0] = mul(negative[0], rest)
	}
	for k := 1; k < a1; k++ {
		poisson[k] = quo(mul(poisson[k-1], rate), num(float64(k)))
		negative[k] = quo(mul(mul(negative[k-1], share), num(float64(a2+k-1))), num(float64(k)))
	}
	sum := num(0)
	for k := range a1 {
		for j := 0; j <= k; j++ {
			sum.Add(sum, mul(poisson[k-j], negative[j]))
		}
	}
	return sum
}

// Logarithms of window probabilities by mpmath's integral of the density with 60 digits.
func TestGammaWindow(t *testing.T) {
	for _, r := range [][5]float64{
		{12.5, 100.0, 0.1, 0.15, -0.64906082160984687954},
		{12.5, 100.0, 0.5, 0.5000000009313226, -39.935328216178952857},
		{900.5, 100.0, 7.0, 7.5, -16.742790852971626126}, {0.5, 10.0, 1e-06, 1.5e-06, -7.1284823357256259132},
		{40.5, 2.0, 30.0, 31.0, -6.3815918969683993622},
	} {
		o := gammaWindowOdds(r[0], r[1], r[2], r[3])
		if e := off(o, r[4], math.Log(-math.Expm1(r[4]))); e > 1e-12 {
			t.Errorf("Gamma(%v, %v) in %v .. %v: %v, want %v: off by %.1e", r[0], r[1], r[2], r[3], o, r[4], e)
		}
	}
}

func TestGammaEdges(t *testing.T) {
	for _, c := range []struct {
		o    Odds
		want float64
	}{
		{gammaOdds(3, 5, 0), 1}, {gammaOdds(3, 5, -1), 1}, {gammaOdds(3, 5, math.Inf(1)), 0},
		{gammaLineOdds(3, 5, 2, 9, -1, -1), 1}, {gammaLineOdds(3, 5, 2, 9, -1, 0), 1}, {gammaWindowOdds(3, 5, 2, 2), 0},
		{gammaWindowOdds(3, 5, 0, math.Inf(1)), 1},
	} {
		if c.o.LogFor != math.Log(c.want) || c.o.LogAgainst != math.Log(1-c.want) {
			t.Errorf("%v, want P = %v", c.o, c.want)
		}
	}
	if a, b := gammaLineOdds(3, 5, 2, 9, 0, 0.4), gammaOdds(3, 5, 0.4); a != b {
		t.Errorf("slope 0: %v, bound: %v", a, b)
	}
}

// Swapping the processes swaps the sides; another unit of exposure changes nothing; the
// ratio as an incomplete beta is the difference at no offset.
func TestGammaLineProperties(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		shape, rate := rapid.Float64Range(0.5, 3000), rapid.Float64Range(0.1, 3000)
		a1, r1, a2, r2 := shape.Draw(t, "a1"), rate.Draw(t, "r1"), shape.Draw(t, "a2"), rate.Draw(t, "r2")
		d := rapid.Float64Range(-3, 3).Draw(t, "sds") * (a1/r1 + a2/r2)
		o := gammaLineOdds(a1, r1, a2, r2, 1, d)
		if swapped := gammaLineOdds(a2, r2, a1, r1, 1, -d).against(); !alike(o, swapped) {
			t.Fatalf("%v, swapped %v", o, swapped)
		}
		if scaled := gammaLineOdds(a1, 8*r1, a2, 8*r2, 1, d/8); !alike(o, scaled) {
			t.Fatalf("%v, with exposure in eighths %v", o, scaled)
		}
		ratio, tiny := gammaLineOdds(a1, r1, a2, r2, 1, 0), gammaLineOdds(a1, r1, a2, r2, 1, 1e-25*a1/r1)
		if !alike(ratio, tiny) {
			t.Fatalf("ratio %v, difference %v", ratio, tiny)
		}
	})
}

// The two flanks of the integrand are equally high where its peak is first bracketed, 1400 below the peak.
func TestGammaLineLevelFlanks(t *testing.T) {
	o := gammaLineOdds(10.413307189941406, 0.4808807373046875, 1891.03125, 0.23209720973612277, 1, 6.749518722577763e-07)
	if !(o.LogFor < -2000 && o.LogFor > -2150) {
		t.Errorf("the rarer side is %v, about -2080 is right", o.LogFor)
	}
}

func TestGammaLargest(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		k := rapid.IntRange(2, 6).Draw(t, "k")
		a, r := make([]float64, k), make([]float64, k)
		for i := range a {
			a[i] = rapid.Float64Range(0.5, 2000).Draw(t, "shape")
			r[i] = rapid.Float64Range(0.1, 2000).Draw(t, "rate")
		}
		sum, least := 0.0, 0.0
		for i := range a {
			sum += math.Exp(gammaLargestOdds(a, r, i, 0).LogFor)
			least += math.Exp(gammaSmallestOdds(a, r, i, 0).LogAgainst)
		}
		if !(math.Abs(sum-1) < 1e-11 && math.Abs(least-1) < 1e-11) {
			t.Fatalf("over all the largest make %v, the smallest %v", sum, least)
		}
		d := rapid.Float64Range(-2, 2).Draw(t, "tolerance") * a[0] / r[0]
		c := gammaContest(a, r, 0, d)
		for _, c.smallest = range []bool{false, true} {
			if s := math.Exp(c.logEvent()) + math.Exp(c.logContrary()); !(math.Abs(s-1) < 1e-11) {
				t.Fatalf("smallest %v: both sides make %v", c.smallest, s)
			}
		}
		if k == 2 {
			for _, o := range []Odds{gammaLargestOdds(a, r, 0, d), gammaSmallestOdds(a, r, 0, d)} {
				if pair := gammaLineOdds(a[0], r[0], a[1], r[1], 1, d); !alike(o, pair) {
					t.Fatalf("largest of two %v, pair %v", o, pair)
				}
			}
		}
	})
}

func TestGammasAllocateNothing(t *testing.T) {
	a, r := []float64{5, 6, 7}, []float64{95, 94, 93}
	if n := testing.AllocsPerRun(20, func() {
		weighed = gammaOdds(3, 97, 0.05)
		weighed = gammaLineOdds(3.5, 97.5, 7.5, 93.5, 1, 0.01)
		weighed = gammaLineOdds(3.5, 97.5, 7.5, 93.5, 1, 0)
		weighed = gammaLargestOdds(a, r, 1, 0)
		weighed = gammaSmallestOdds(a, r, 1, 0.01)
		weighed = gammaWindowOdds(3, 97, 0.02, 0.05)
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

func BenchmarkRateDifference(b *testing.B) {
	b.Run("exact", func(b *testing.B) {
		b.ReportAllocs()
		for b.Loop() {
			weighed = gammaLineOdds(12.5, 100, 20.5, 150, 1, 0.01)
		}
	})
	b.Run("draws", func(b *testing.B) {
		src := rand.NewPCG(1, 2)
		one, two := distuv.Gamma{Alpha: 12.5, Beta: 100, Src: src}, distuv.Gamma{Alpha: 20.5, Beta: 150, Src: src}
		for b.Loop() {
			n := 0
			for range draws {
				if one.Rand()-two.Rand() > 0.01 {
					n++
				}
			}
			weighed.LogFor = math.Log(float64(n) / draws)
		}
	})
}
