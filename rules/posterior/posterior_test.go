package posterior

import (
	"encoding/json"
	"errors"
	"math"
	"math/big"
	"os"
	"testing"
)

// cases reads the cases of one kind from a file of testdata/checks; testdata/README.md names
// their sources.
func cases[T any](t *testing.T, file, kind string) (found []T) {
	t.Helper()
	text, err := os.ReadFile("../../testdata/checks/" + file)
	if err != nil {
		t.Fatal(err)
	}
	var all struct{ Cases []json.RawMessage }
	if err := json.Unmarshal(text, &all); err != nil {
		t.Fatal(err)
	}
	for _, raw := range all.Cases {
		var head struct{ Kind string }
		var c T
		if err := json.Unmarshal(raw, &head); err != nil {
			t.Fatal(err)
		}
		if head.Kind != kind {
			continue
		}
		if err := json.Unmarshal(raw, &c); err != nil {
			t.Fatal(err)
		}
		found = append(found, c)
	}
	if len(found) == 0 {
		t.Fatalf("%s has no case of kind %s", file, kind)
	}
	return found
}

func add(f Family, values ...float64) (s Sums) {
	for _, v := range values {
		s = s.Add(f, v, 1)
	}
	return s
}

// ulps is how many representable numbers lie between two.
func ulps(a, b float64) float64 {
	return math.Abs(float64(int64(math.Float64bits(a)) - int64(math.Float64bits(b))))
}

func nearest(t *testing.T, decimal string) float64 {
	t.Helper()
	x, _, err := big.ParseFloat(decimal, 10, 400, big.ToNearestEven)
	if err != nil {
		t.Fatal(err)
	}
	y, _ := x.Float64()
	return y
}

// Exact rational arithmetic on the float64 inputs is the reference.
func TestNormalUpdate(t *testing.T) {
	type update struct {
		ID     string
		Inputs struct {
			Prior struct{ M0, K0, Nu0, S0sq float64 }
			Data  []float64
		}
		Expected struct{ M, K, Nu, Ssq string }
	}
	for _, c := range cases[update](t, "posterior_claims.json", "normal_update") {
		p := Prior{Reference: true}
		if in := c.Inputs.Prior; in.K0 != 0 {
			p = Prior{Mean: in.M0, MeanWorth: in.K0, SD: math.Sqrt(in.S0sq), SDWorth: in.Nu0}
		}
		post := p.Posterior(NormalFamily, add(NormalFamily, c.Inputs.Data...))
		if want := nearest(t, c.Expected.M); post.M != want {
			t.Errorf("%s: m %.17g, want %.17g", c.ID, post.M, want)
		}
		if post.K != nearest(t, c.Expected.K) || post.Nu != nearest(t, c.Expected.Nu) {
			t.Errorf("%s: k %v and nu %v, want %s and %s", c.ID, post.K, post.Nu, c.Expected.K, c.Expected.Nu)
		}
		if want := nearest(t, c.Expected.Ssq); ulps(post.SS/post.Nu, want) > 1 {
			t.Errorf("%s: ssq %.17g, want %.17g", c.ID, post.SS/post.Nu, want)
		}
	}
}

// NIST StRD univariate sets; the reference is the exact mean and sd of the data as float64 holds
// them, computed with mpmath.
func TestNISTUnivariate(t *testing.T) {
	alternating := func(first, a, b float64) []float64 {
		v := []float64{first}
		for range 500 {
			v = append(v, a, b)
		}
		return v
	}
	for name, c := range map[string]struct {
		values   []float64
		mean, sd float64
	}{
		"Mavro":    {mavro, 2.00185599999999997322675, 0.0004291234540030854092852462},
		"Michelso": {michelson(t), 299.8524000000000000909495, 0.07901054781905066715148854},
		"Lew":      {lew, -177.435, 277.3321680443161357649225},
		"NumAcc1":  {[]float64{10000001, 10000003, 10000002}, 10000002, 1},
		"NumAcc2":  {alternating(1.2, 1.1, 1.3), 1.20000000000000006650247, 0.09999999999999997779553951},
		"NumAcc3":  {alternating(1000000.2, 1000000.1, 1000000.3), 1000000.200000000011583383, 0.1000000000349245965480974},
		"NumAcc4":  {alternating(10000000.2, 10000000.1, 10000000.3), 10000000.20000000018533412, 0.1000000005587935447736196},
	} {
		s := add(NormalFamily, c.values...)
		if sd := math.Sqrt(s.SS / (s.N - 1)); s.Mean != c.mean || ulps(sd, c.sd) > 1 {
			t.Errorf("%s: mean %.17g and sd %.17g, want %.17g and %.17g", name, s.Mean, sd, c.mean, c.sd)
		}
	}
}

func near(got, want float64) bool { return math.Abs(got-want) <= 1e-11*math.Max(1, math.Abs(want)) }

func TestDiscounts(t *testing.T) {
	type nig struct {
		ID     string
		Inputs struct {
			Batches [][]float64
			Lambda  float64
			Prior   struct{ M0, Kappa0, Alpha0, Beta0 float64 }
		}
		Expected struct {
			PerBatch []struct{ M, Kappa, Alpha, Beta float64 } `json:"per_batch"`
		}
	}
	for _, c := range cases[nig](t, "sequential.json", "discount_nig") {
		in := c.Inputs
		p := Prior{Mean: in.Prior.M0, MeanWorth: in.Prior.Kappa0, SDWorth: 2 * in.Prior.Alpha0, SD: math.Sqrt(in.Prior.Beta0 / in.Prior.Alpha0)}
		if in.Prior.Kappa0 == 0 {
			p = Prior{Reference: true}
		}
		m := NewMemory(NormalFamily, Remember{Discount: in.Lambda})
		for i, b := range in.Batches {
			m.AddBatch(b, nil, nil)
			post, want := p.Posterior(NormalFamily, m.Sums()), c.Expected.PerBatch[i]
			if !near(post.M, want.M) || !near(post.K, want.Kappa) || !near(post.Nu/2, want.Alpha) || !near(post.SS/2, want.Beta) {
				t.Errorf("%s, batch %d: %+v, want %+v", c.ID, i, post, want)
			}
		}
	}
	type counts struct {
		ID     string
		Inputs struct {
			Batches        [][2]float64
			Lambda, A0, B0 float64
			Shape0, Rate0  float64
		}
		Expected struct {
			PerBatch []struct{ A, B, Shape, Rate float64 } `json:"per_batch"`
		}
	}
	for kind, f := range map[string]Family{"discount_beta": BinomialFamily, "discount_gamma": PoissonFamily} {
		for _, c := range cases[counts](t, "sequential.json", kind) {
			in := c.Inputs
			p := Prior{A: in.A0, B: in.B0, Shape: in.Shape0, Rate: in.Rate0}
			m := NewMemory(f, Remember{Discount: in.Lambda})
			for i, b := range in.Batches {
				m.AddBatch(b[:1], b[1:], nil)
				post, want := p.Posterior(f, m.Sums()), c.Expected.PerBatch[i]
				if !near(post.A, want.A+want.Shape) || !near(post.B, want.B+want.Rate) {
					t.Errorf("%s, batch %d: %+v, want %+v", c.ID, i, post, want)
				}
			}
		}
	}
}

func TestWindowMerge(t *testing.T) {
	type merge struct {
		ID       string
		Inputs   struct{ Chunks [][]float64 }
		Expected struct {
			N, Mean float64
			SS      float64 `json:"sum_sq_dev"`
		}
	}
	for _, c := range cases[merge](t, "sequential.json", "window_merge") {
		var s Sums
		for _, chunk := range c.Inputs.Chunks {
			s = Merge(NormalFamily, s, add(NormalFamily, chunk...))
		}
		// The file's values are of the decimal data; the last digits of a sum of squares of data near
		// 1e6 are those of their rounding to float64.
		if s.N != c.Expected.N || !near(s.Mean, c.Expected.Mean) || math.Abs(s.SS/c.Expected.SS-1) > 1e-9 {
			t.Errorf("%s: %+v, want %+v", c.ID, s, c.Expected)
		}
	}
}

func TestPriorsAreChecked(t *testing.T) {
	for _, c := range []struct {
		f  Family
		p  Prior
		ok bool
	}{
		{NormalFamily, Prior{Reference: true}, true}, {NormalFamily, Prior{Mean: 1, MeanWorth: 1, SD: 1, SDWorth: 1}, true},
		{NormalFamily, Prior{Mean: 1, MeanWorth: 0, SD: 1, SDWorth: 1}, false}, {NormalFamily, Prior{Mean: math.NaN(), MeanWorth: 1, SD: 1, SDWorth: 1}, false},
		{LognormalFamily, Prior{Mean: -1, MeanWorth: 1, SD: 1, SDWorth: 1}, false}, {BinomialFamily, Prior{A: -1}, false},
		{BinomialFamily, Prior{A: 1, B: 1}, true}, {PoissonFamily, Prior{Shape: math.Inf(1)}, false}, {"other", Prior{Reference: true}, false},
	} {
		if err := c.p.Check(c.f); (err == nil) != c.ok {
			t.Errorf("%s %+v: %v", c.f, c.p, err)
		}
	}
	if err := (Prior{Reference: true}).Posterior(NormalFamily, add(NormalFamily, 3)).Proper(); err == nil {
		t.Error("one unit under the reference prior was taken for enough")
	}
}

func TestAccepts(t *testing.T) {
	inf := math.Inf(1)
	for _, c := range []struct {
		f         Family
		value, of float64
		ok        bool
	}{
		{NormalFamily, -1e150, 1, true}, {NormalFamily, 1e151, 1, false}, {NormalFamily, math.NaN(), 1, false}, {NormalFamily, inf, 1, false},
		{LognormalFamily, 5e-324, 1, true}, {LognormalFamily, math.MaxFloat64, 1, true}, {LognormalFamily, 0, 1, false}, {LognormalFamily, -1, 1, false},
		{BinomialFamily, 0, 1, true}, {BinomialFamily, 3, 3, true}, {BinomialFamily, 4, 3, false}, {BinomialFamily, 0, 0, false},
		{BinomialFamily, 0.5, 3, false}, {BinomialFamily, 1, 2.5, false}, {BinomialFamily, -1, 3, false}, {BinomialFamily, 1, 1e16, false},
		{PoissonFamily, 0, 0.25, true}, {PoissonFamily, 7, 1e-9, true}, {PoissonFamily, 1.5, 1, false}, {PoissonFamily, 1, 0, false},
		{PoissonFamily, -1, 1, false}, {PoissonFamily, 1, inf, false}, {PoissonFamily, 1e16, 1, false}, {"other", 1, 1, false},
	} {
		if err := c.f.Accepts(c.value, c.of); (err == nil) != c.ok {
			t.Errorf("%s %v of %v: %v", c.f, c.value, c.of, err)
		}
	}
}

func TestProper(t *testing.T) {
	reference := Prior{Reference: true}
	for name, c := range map[string]struct {
		p  Prior
		f  Family
		s  Sums
		ok bool
	}{
		"no unit":                    {reference, NormalFamily, Sums{}, false},
		"one unit":                   {reference, NormalFamily, add(NormalFamily, 3), false},
		"two units":                  {reference, NormalFamily, add(NormalFamily, 3, 4), true},
		"one effective unit":         {reference, NormalFamily, add(NormalFamily, 3, 4).Scale(0.5), false},
		"more than one":              {reference, LognormalFamily, add(LognormalFamily, 3, 4).Scale(0.51), true},
		"a prior alone":              {Prior{Mean: 3, MeanWorth: 1, SD: 1, SDWorth: 1}, NormalFamily, Sums{}, true},
		"nothing counted, reference": {reference, BinomialFamily, Sums{}, true},
		"nothing counted, Beta(0,0)": {Prior{}, BinomialFamily, add(BinomialFamily, 0, 0), false},
		"no exposure":                {reference, PoissonFamily, Sums{}, false},
		"some exposure":              {reference, PoissonFamily, add(PoissonFamily, 0), true},
	} {
		err := c.p.Posterior(c.f, c.s).Proper()
		if (err == nil) != c.ok || err != nil && !errors.Is(err, ErrImproper) {
			t.Errorf("%s: %v", name, err)
		}
	}
}

// n values with a given average and standard deviation say what their summary says.
func TestFromSummary(t *testing.T) {
	if s, want := FromSummary(3, 10000002, 1), add(NormalFamily, 10000001, 10000003, 10000002); s != want {
		t.Errorf("%+v, want %+v", s, want)
	}
}

// Gelman et al., Bayesian Data Analysis, section 2.6: 3 deaths over an exposure of 2 with the prior
// Gamma(3, 5) give Gamma(6, 7); section 2.4: 437 girls of 980 births with Beta(1, 1) give
// Beta(438, 544).
func TestCounts(t *testing.T) {
	p := Prior{Shape: 3, Rate: 5}.Posterior(PoissonFamily, Sums{}.Add(PoissonFamily, 3, 2))
	if p.A != 6 || p.B != 7 {
		t.Errorf("%+v", p)
	}
	p = Prior{A: 1, B: 1}.Posterior(BinomialFamily, Sums{}.Add(BinomialFamily, 437, 980))
	if p.A != 438 || p.B != 544 {
		t.Errorf("%+v", p)
	}
}

// With lambda a batch the weight comes to rest, the weighted mean is worth (sum w)^2 / sum w^2 units
// (the squares of weights decay by lambda^2), and an empty batch shows the decay.
func TestSteadyState(t *testing.T) {
	type steady struct {
		ID     string
		Inputs struct {
			Lambda float64
			Units  int `json:"units_per_batch"`
		}
		Expected struct {
			Weight   float64 `json:"weight_total"`
			Worth    float64 `json:"effective_sample_size_of_weighted_mean"`
			HalfLife float64 `json:"half_life_batches"`
		}
	}
	for _, c := range cases[steady](t, "sequential.json", "discount_steady_state") {
		weights := NewMemory(NormalFamily, Remember{Discount: c.Inputs.Lambda})
		squares := NewMemory(NormalFamily, Remember{Discount: c.Inputs.Lambda * c.Inputs.Lambda})
		batch := make([]float64, c.Inputs.Units)
		for range 5000 {
			weights.AddBatch(batch, nil, nil)
			squares.AddBatch(batch, nil, nil)
		}
		w := weights.Sums().N
		weights.AddBatch(nil, nil, nil)
		halfLife := math.Log(0.5) / math.Log(weights.Sums().N/w)
		if !near(w, c.Expected.Weight) || !near(w*w/squares.Sums().N, c.Expected.Worth) || math.Abs(halfLife/c.Expected.HalfLife-1) > 1e-10 {
			t.Errorf("%s: weight %v, worth %v, half-life %v; want %+v", c.ID, w, w*w/squares.Sums().N, halfLife, c.Expected)
		}
	}
}
