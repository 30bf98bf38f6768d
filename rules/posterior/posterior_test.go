package posterior

import (
	"encoding/json"
	"math"
	"math/big"
	"os"
	"slices"
	"testing"

	"pgregory.net/rapid"
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
		// A prior sd is a square root here, so its square is off by up to an ulp.
		if want := nearest(t, c.Expected.Ssq); ulps(post.SS/post.Nu, want) > 2 {
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
		"NumAcc1": {[]float64{10000001, 10000003, 10000002}, 10000002, 1},
		"NumAcc2": {alternating(1.2, 1.1, 1.3), 1.20000000000000006650247, 0.09999999999999997779553951},
		"NumAcc3": {alternating(1000000.2, 1000000.1, 1000000.3), 1000000.200000000011583383, 0.1000000000349245965480974},
		"NumAcc4": {alternating(10000000.2, 10000000.1, 10000000.3), 10000000.20000000018533412, 0.1000000005587935447736196},
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

// log 2, log 10 and log pi to 20 digits are from tables (Abramowitz & Stegun, tables 1.1, 4.2).
func TestLogPair(t *testing.T) {
	for _, c := range []struct{ x, want float64 }{
		{2, 0.69314718055994530942}, {10, 2.3025850929940456840}, {1, 0}, {0.5, -0.69314718055994530942}, {1e-300, -690.77552789821370520},
	} {
		if got := logPair(c.x); got.hi != c.want {
			t.Errorf("log %v = %.17g, want %.17g", c.x, got.hi, c.want)
		}
	}
}

// A batch says what its units say one by one, in any order, to the last bit of the mean and an
// ulp of the sum of squares; data near 1e9 with a spread of 1e-3 lose nothing.
func TestOrderDoesNotMatter(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		base := rapid.SampledFrom([]float64{0, 33, 1e9}).Draw(t, "base")
		values := rapid.SliceOfN(rapid.Float64Range(-1e-3, 1e-3), 2, 60).Draw(t, "values")
		for i := range values {
			values[i] += base
		}
		one := add(NormalFamily, values...)
		other := add(NormalFamily, rapid.Permutation(values).Draw(t, "order")...)
		cut := rapid.IntRange(0, len(values)).Draw(t, "cut")
		merged := Merge(NormalFamily, add(NormalFamily, values[:cut]...), add(NormalFamily, values[cut:]...))
		for _, s := range []Sums{other, merged} {
			if ulps(s.Mean, one.Mean) > 1 || ulps(s.SS, one.SS) > 1 {
				t.Fatalf("%+v and %+v", one, s)
			}
		}
	})
}

var ways = []Remember{{Segment: true}, {Units: 2}, {Units: 63}, {Units: 200}, {Hours: 1}, {Discount: 0.9}}

// A memory that is saved and loaded goes on as one that was not, bit for bit; and the last N
// units are exactly the last N.
func TestMemoryReload(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		r := rapid.SampledFrom(ways).Draw(t, "remember")
		whole, split := NewMemory(NormalFamily, r), NewMemory(NormalFamily, r)
		var all []float64
		at := int64(1e18)
		for range rapid.IntRange(1, 30).Draw(t, "batches") {
			batch := rapid.SliceOfN(rapid.Float64Range(-10, 10), 1, 40).Draw(t, "batch")
			times := make([]int64, len(batch))
			for i := range times {
				at += rapid.Int64Range(0, 2e11).Draw(t, "pause")
				times[i] = at
			}
			all = append(all, batch...)
			whole.AddBatch(batch, nil, times)
			split.AddBatch(batch, nil, times)
			saved, err := split.AppendBinary(nil)
			if err != nil {
				t.Fatal(err)
			}
			split = NewMemory(NormalFamily, r)
			if err := split.UnmarshalBinary(saved); err != nil {
				t.Fatal(err)
			}
			if whole.Sums() != split.Sums() {
				t.Fatalf("%+v as it went on, %+v after loading", whole.Sums(), split.Sums())
			}
		}
		if r.Units > 0 {
			want := add(NormalFamily, all[max(0, len(all)-r.Units):]...)
			if got := whole.Sums(); got.N != want.N || ulps(got.Mean, want.Mean) > 1 || ulps(got.SS, want.SS) > 1 {
				t.Fatalf("%+v, want %+v", got, want)
			}
		}
	})
}

func FuzzMemory(f *testing.F) {
	for i, r := range ways {
		m := NewMemory(NormalFamily, r)
		m.AddBatch([]float64{1, 2, 3}, nil, []int64{1, 2, 3})
		b, err := m.AppendBinary(nil)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(i, b)
	}
	f.Fuzz(func(t *testing.T, i int, b []byte) {
		r := ways[max(i%len(ways), -(i%len(ways)))]
		m := NewMemory(NormalFamily, r)
		if m.UnmarshalBinary(slices.Clone(b)) == nil {
			m.AddBatch([]float64{1}, nil, []int64{5})
			m.Sums()
		}
	})
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
