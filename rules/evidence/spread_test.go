package evidence

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
	"pgregory.net/rapid"

	"steelyard/rules/posterior"
)

// spreadProcess has n units of average m and standard deviation s, and limits.
func spreadProcess(n, m, s, lower, upper float64) Process {
	return Process{
		Posterior: posterior.Posterior{Family: posterior.NormalFamily, M: m, K: n, Nu: n - 1, SS: (n - 1) * s * s},
		Lower:     lower, Upper: upper,
	}
}

var none = math.Inf(1)

// One-sided normal tolerance factors k: P(mu + z_P sigma < average + k s) = confidence, so with one
// limit at k and fraction 1-P the odds must give the confidence. Printed: n = 43, NIST/SEMATECH e-Handbook 7.2.6.3; the rest,
// Natrella, Experimental Statistics (NBS Handbook 91), table A-7, and ISO 16269-6. The last
// column is the root of an mpmath integral over log sigma to 12 digits, which the printed one rounds.
func TestTolerance(t *testing.T) {
	for _, c := range []struct{ n, coverage, confidence, printed, k float64 }{
		{43, 0.90, 0.99, 1.8740, 1.87395360585},
		{2, 0.90, 0.95, 20.581, 20.5814676242},
		{2, 0.95, 0.95, 26.260, 26.259673983},
		{2, 0.99, 0.95, 37.094, 37.0935814562},
		{3, 0.90, 0.95, 6.155, 6.15528110333},
		{3, 0.95, 0.95, 7.656, 7.65590013315},
		{3, 0.99, 0.95, 10.553, 10.5527301237},
		{4, 0.90, 0.95, 4.162, 4.16193318473},
		{4, 0.95, 0.95, 5.144, 5.14387486099},
		{4, 0.99, 0.95, 7.042, 7.04236257536},
		{5, 0.90, 0.95, 3.407, 3.4066332628},
		{5, 0.95, 0.95, 4.203, 4.20268074126},
		{5, 0.99, 0.95, 5.741, 5.74108451723},
		{10, 0.90, 0.95, 2.355, 2.35464013183},
		{10, 0.95, 0.95, 2.911, 2.91096341308},
		{10, 0.99, 0.95, 3.981, 3.98111784527},
		{20, 0.90, 0.95, 1.926, 1.92599097226},
		{20, 0.95, 0.95, 2.396, 2.39600168375},
		{20, 0.99, 0.95, 3.295, 3.29515693617},
		{30, 0.90, 0.95, 1.777, 1.77732879783},
		{30, 0.95, 0.95, 2.220, 2.21983753204},
		{30, 0.99, 0.95, 3.064, 3.06390112624},
		{50, 0.90, 0.95, 1.646, 1.64556485614},
		{50, 0.95, 0.95, 2.065, 2.06499341774},
		{50, 0.99, 0.95, 2.862, 2.86244926382},
		{100, 0.90, 0.95, 1.527, 1.52674874785},
		{100, 0.95, 0.95, 1.927, 1.92653885051},
		{100, 0.99, 0.95, 2.684, 2.68395785569},
		{10, 0.90, 0.99, 3.048, 3.04790745814},
		{10, 0.95, 0.99, 3.738, 3.73831496416},
		{10, 0.99, 0.99, 5.074, 5.07372534805},
		{20, 0.90, 0.99, 2.276, 2.2756458958},
		{20, 0.95, 0.99, 2.808, 2.80786605802},
		{20, 0.99, 0.99, 3.832, 3.8315579856},
		{50, 0.90, 0.99, 1.821, 1.82079959664},
		{50, 0.95, 0.99, 2.269, 2.26889768477},
		{50, 0.99, 0.99, 3.125, 3.12460724202},
		{10, 0.90, 0.75, 1.671, 1.67060912781},
		{10, 0.95, 0.75, 2.104, 2.10366754894},
		{10, 0.99, 0.75, 2.927, 2.9266972545},
	} {
		if math.Abs(c.k-c.printed) > 0.00051*math.Max(1, c.printed/10) {
			t.Errorf("n %v: printed %v, computed %v", c.n, c.printed, c.k)
		}
		p := spreadProcess(c.n, 0, 1, math.Inf(-1), c.k)
		o := outsideOdds(&p, 1-c.coverage)
		if e := relative(math.Exp(o.LogFor), c.confidence); e > 1e-11 {
			t.Errorf("n %v coverage %v: confidence %v, want %v", c.n, c.coverage, math.Exp(o.LogFor), c.confidence)
		}
		q := spreadProcess(c.n, 0, 1, -c.k, none)
		if mirrored := outsideOdds(&q, 1-c.coverage); !alike(o, mirrored) {
			t.Errorf("n %v: upper limit %v, lower %v", c.n, o, mirrored)
		}
	}
}

// R datasets::PlantGrowth, trt2 against trt1: F 0.31095 on 9 and 9, two-sided p 0.0968035285077801 (R var.test);
// P(sigma_trt2 > sigma_trt1) = p/2 = 0.048401764253890 by mpmath.
func TestPublishedSD(t *testing.T) {
	s2, s1 := 0.44257328332278606, 0.79367569643470326
	o := sdRatioOdds(9*s2*s2, 9, 9*s1*s1, 9, 1)
	if e := relative(math.Exp(o.LogFor), 0.048401764253890); e > 1e-13 {
		t.Errorf("P = %v, off by %.1e", math.Exp(o.LogFor), e)
	}
}

// F(nu1, nu2) tails have closed forms: for nu1 = nu2 = 2, P(sigma1/sigma2 > r) = 1/(1 + r^2 SS2/SS1); for one
// sigma and nu = 2, P(sigma > x) = 1 - exp(-SS/(2x^2)).
func TestSDClosedForms(t *testing.T) {
	for _, r := range []float64{1e-12, 1e-3, 0.3, 1, 7, 1e4, 1e10} {
		rho := r * r * 3 / 5
		if e := off(sdRatioOdds(5, 2, 3, 2, r), -math.Log1p(rho), -math.Log1p(1/rho)); e > 1e-14 {
			t.Errorf("ratio %v: off by %.1e", r, e)
		}
		u := 3 / (2 * r * r)
		if u < 700 {
			if e := off(sdOdds(3, 2, r), math.Log(-math.Expm1(-u)), -u); e > 1e-13 {
				t.Errorf("sigma > %v: off by %.1e", r, e)
			}
		}
	}
	for _, c := range []struct {
		o    Odds
		want float64
	}{
		{sdOdds(3, 5, 0), 1}, {sdOdds(3, 5, -1), 1}, {sdOdds(3, 5, none), 0}, {sdOdds(0, 5, 0.1), 0},
		{sdRatioOdds(3, 5, 3, 5, 0), 1}, {sdRatioOdds(3, 5, 3, 5, -1), 1}, {sdRatioOdds(3, 5, 3, 5, none), 0},
		{sdRatioOdds(0, 5, 3, 5, 1), 0}, {sdRatioOdds(3, 5, 0, 5, 1), 1},
	} {
		if c.o.LogFor != math.Log(c.want) || c.o.LogAgainst != math.Log(1-c.want) {
			t.Errorf("%v, want P = %v", c.o, c.want)
		}
	}
}

// spread.txt: outside and capability with one and two limits, n from 2 to 6e5, informative priors (K apart
// from Nu+1), probabilities down to 1e-60. Independent route, in 113-bit arithmetic (libquadmath): an integral
// over mu by 20-point Gauss panels, the admissible sigma_max(mu) solved to 31 digits at each node, and the
// tail of sigma given mu, which is chi-squared with Nu+1 degrees of freedom, summed up panel by panel
// from its density. Taken where both sides add up to 1 within 1e-15 and narrower panels agree.
func TestSweepSpread(t *testing.T) {
	worst := 0.0
	words, values := rows(t, "spread.txt", 9)
	for i, v := range values {
		p := Process{Lower: -v[5], Upper: v[5]}
		p.Posterior = posterior.Posterior{Family: posterior.NormalFamily, M: v[0], K: v[1], Nu: v[2], SS: v[3]}
		if v[4] == 1 {
			p.Lower = math.Inf(-1)
		}
		o := outsideOdds(&p, v[6])
		if words[i] == "capability" {
			o = capabilityOdds(&p, v[6])
		}
		e := off(o, v[7], v[8])
		worst = math.Max(worst, e)
		if e > 1e-11 {
			t.Errorf("%s %v: %v, relative error %.1e", words[i], v[:7], o, e)
		}
	}
	t.Logf("%d cases, worst relative error %.1e", len(values), worst)
	if len(values) < 150 {
		t.Errorf("only %d cases in the table", len(values))
	}
}

// The probability follows the bound; shifting and scaling the data
// with the limits changes nothing, nor does turning them round; a limit far off is no limit; the logarithm's
// process is the lognormal one.
func TestSpreadProperties(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := float64(rapid.IntRange(2, 2000).Draw(t, "n"))
		m := rapid.Float64Range(-3, 3).Draw(t, "mean")
		h := rapid.Float64Range(0.2, 8).Draw(t, "half-width")
		f := math.Exp(rapid.Float64Range(-30, -0.001).Draw(t, "log fraction"))
		p := spreadProcess(n, m, 1, -h, h)
		o := outsideOdds(&p, f)
		if more := outsideOdds(&p, math.Min(1.2*f, 1)); more.LogFor < o.LogFor-1e-11*(1+math.Abs(o.LogFor)) {
			t.Fatalf("P falls from %v to %v with the fraction", o.LogFor, more.LogFor)
		}
		turned := spreadProcess(n, -m, 1, -h, h)
		if x := outsideOdds(&turned, f); !alike(o, x) {
			t.Fatalf("%v, turned round %v", o, x)
		}
		scaled := spreadProcess(n, 4*m+1024, 4, 1024-4*h, 1024+4*h)
		if x := outsideOdds(&scaled, f); !alikeWithin(o, x, 1e-9) {
			t.Fatalf("%v, scaled %v", o, x)
		}
		c := rapid.Float64Range(-2, 3).Draw(t, "c")
		k := capabilityOdds(&p, c)
		// Both sides, each integrated apart; the commoner one is good to the agreement of its sums.
		if k.LogFor > math.Inf(-1) {
			s := newSpreadCurve(&p)
			s.v = 3 * c
			s.s0 = math.Max(s.v, 0)
			if sum := math.Exp(s.logProbability(inside)) + math.Exp(s.logProbability(beyond)); !(math.Abs(sum-1) < 1e-7) {
				t.Fatalf("both sides of capability make %v", sum)
			}
		}
		if x := capabilityOdds(&turned, c); !alike(k, x) {
			t.Fatalf("capability %v, turned round %v", k, x)
		}
		// One limit: capability above c is a fraction outside below Phi(-3c).
		if c < 0 {
			return // the fraction near 1 has lost what c still says
		}
		one := spreadProcess(n, m, 1, math.Inf(-1), h)
		if a, b := capabilityOdds(&one, c), outsideOdds(&one, normalTail(3*c)); !alikeWithin(a, b, 1e-10) {
			t.Fatalf("capability %v, outside %v", a, b)
		}
	})
}

func alikeWithin(x, y Odds, within float64) bool {
	near := func(a, b float64) bool { return a < -690 && b < -680 || math.Abs(a-b) < within*(1+math.Abs(a)) }
	return near(x.LogFor, y.LogFor) && near(x.LogAgainst, y.LogAgainst)
}

// A limit so far off that nothing is beyond it is no limit.
func TestFarLimit(t *testing.T) {
	two, one := spreadProcess(30, 0, 1, -60, 3), spreadProcess(30, 0, 1, math.Inf(-1), 3)
	if a, b := outsideOdds(&two, 0.01), outsideOdds(&one, 0.01); !alike(a, b) {
		t.Errorf("two limits %v, one %v", a, b)
	}
	if a, b := capabilityOdds(&two, 0.9), capabilityOdds(&one, 0.9); !alike(a, b) {
		t.Errorf("capability: two limits %v, one %v", a, b)
	}
}

func TestSpreadEdges(t *testing.T) {
	inside, beyond := spreadProcess(5, 0, 0, -1, 1), spreadProcess(5, 2, 0, -1, 1)
	free, usual := spreadProcess(5, 0, 1, math.Inf(-1), none), spreadProcess(5, 0, 1, -1, 1)
	for _, c := range []struct {
		o    Odds
		want float64
	}{
		{outsideOdds(&inside, 0.01), 1}, {outsideOdds(&beyond, 0.01), 0}, {capabilityOdds(&inside, 9), 1},
		{capabilityOdds(&beyond, -9), 0}, {outsideOdds(&free, 0.01), 1}, {capabilityOdds(&free, 4), 1},
		{outsideOdds(&usual, 0), 0}, {outsideOdds(&usual, -1), 0},
		{outsideOdds(&usual, 1), 1}, {outsideOdds(&usual, 2), 1},
	} {
		if c.o.LogFor != math.Log(c.want) || c.o.LogAgainst != math.Log(1-c.want) {
			t.Errorf("%v, want P = %v", c.o, c.want)
		}
	}
}

// A lognormal process is the normal one of logarithms, with limits to match.
func TestLognormalLimits(t *testing.T) {
	p := spreadProcess(20, 1.5, 0.2, 0, 8)
	p.Family = posterior.LognormalFamily
	q := spreadProcess(20, 1.5, 0.2, math.Inf(-1), 3*math.Ln2)
	if a, b := outsideOdds(&p, 0.02), outsideOdds(&q, 0.02); !alikeWithin(a, b, 1e-13) {
		t.Errorf("lognormal %v, normal of logarithms %v", a, b)
	}
	p.Lower, q.Lower = 2, math.Ln2
	if a, b := outsideOdds(&p, 0.02), outsideOdds(&q, 0.02); !alikeWithin(a, b, 1e-13) {
		t.Errorf("lognormal %v, normal of logarithms %v", a, b)
	}
}

func TestSpreadAllocatesNothing(t *testing.T) {
	p, q := spreadProcess(25, 10, 0.1, 9.5, 10.5), spreadProcess(25, 10, 0.1, math.Inf(-1), 10.5)
	if n := testing.AllocsPerRun(20, func() {
		weighed = outsideOdds(&p, 0.001)
		weighed = outsideOdds(&q, 0.001)
		weighed = capabilityOdds(&p, 1.33)
		weighed = sdOdds(3, 9, 0.7)
		weighed = sdRatioOdds(3, 9, 4, 11, 1.2)
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

// The naive way beside each: 100,000 draws of sigma and mu with gonum.
func BenchmarkSpread(b *testing.B) {
	usual, off := spreadProcess(25, 10, 0.1, 9.5, 10.5), spreadProcess(300, 10.5, 0.5, 7, 13)
	one := spreadProcess(25, 10, 0.1, math.Inf(-1), 10.5)
	for _, c := range []struct {
		name string
		p    *Process
		f    func(p *Process) Odds
		hit  func(p *Process, mu, sigma float64) bool
	}{
		{"outside", &usual, func(p *Process) Odds { return outsideOdds(p, 0.001) }, fewOutside},
		{"outside/rare", &off, func(p *Process) Odds { return outsideOdds(p, 0.0001) }, nil},
		{"outside/one-limit", &one, func(p *Process) Odds { return outsideOdds(p, 0.001) }, nil},
		{"capability", &usual, func(p *Process) Odds { return capabilityOdds(p, 1.33) }, capable},
		{"capability/rare", &off, func(p *Process) Odds { return capabilityOdds(p, 1) }, nil},
		{"sd-ratio", &usual, func(p *Process) Odds { return sdRatioOdds(p.SS, p.Nu, p.SS, p.Nu, 1.2) }, nil},
	} {
		b.Run(c.name, func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				weighed = c.f(c.p)
			}
		})
		if c.hit == nil {
			continue
		}
		b.Run(c.name+"/draws", func(b *testing.B) {
			src := rand.NewPCG(1, 2)
			chi, normal := distuv.ChiSquared{K: c.p.Nu, Src: src}, distuv.Normal{Sigma: 1, Src: src}
			for b.Loop() {
				n := 0
				for range draws {
					sigma := math.Sqrt(c.p.SS / chi.Rand())
					if c.hit(c.p, c.p.M+sigma/math.Sqrt(c.p.K)*normal.Rand(), sigma) {
						n++
					}
				}
				weighed.LogFor = math.Log(float64(n) / draws)
			}
		})
	}
}

func fewOutside(p *Process, mu, sigma float64) bool {
	return distuv.UnitNormal.Survival((p.Upper-mu)/sigma)+distuv.UnitNormal.Survival((mu-p.Lower)/sigma) < 0.001
}

func capable(p *Process, mu, sigma float64) bool {
	return math.Min(p.Upper-mu, mu-p.Lower)/(3*sigma) > 1.33
}
