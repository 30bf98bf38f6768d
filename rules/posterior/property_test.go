package posterior

import (
	"math"
	"testing"

	"pgregory.net/rapid"
)

// values are normal data far from 0 and close together, near 0, or of any kind.
func values(t *rapid.T, name string, least int) []float64 {
	base := rapid.SampledFrom([]float64{0, 33, -1e6, 1e9}).Draw(t, name+" base")
	drawn := rapid.SliceOfN(rapid.Float64Range(-1e-3, 1e-3), least, 60).Draw(t, name)
	for i := range drawn {
		drawn[i] += base
	}
	return drawn
}

func close1(a, b Sums) bool {
	return a.N == b.N && ulps(a.Mean, b.Mean) <= 1 && ulps(a.SS, b.SS) <= 1
}

// A batch says what its units say one by one, in any order and any grouping, within one ulp of the
// mean and of the sum of squares; data near 1e9 with a spread of 1e-3 lose nothing.
func TestOrderAndGroupingDoNotMatter(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		all := values(t, "values", 3)
		one := add(NormalFamily, all...)
		i := rapid.IntRange(0, len(all)).Draw(t, "cut")
		j := rapid.IntRange(i, len(all)).Draw(t, "second cut")
		a, b, c := add(NormalFamily, all[:i]...), add(NormalFamily, all[i:j]...), add(NormalFamily, all[j:]...)
		for name, s := range map[string]Sums{
			"other order": add(NormalFamily, rapid.Permutation(all).Draw(t, "order")...),
			"(a+b)+c":     Merge(NormalFamily, Merge(NormalFamily, a, b), c),
			"a+(b+c)":     Merge(NormalFamily, a, Merge(NormalFamily, b, c)),
			"(c+a)+b":     Merge(NormalFamily, Merge(NormalFamily, c, a), b),
		} {
			if !close1(s, one) {
				t.Fatalf("%s: %+v, one by one %+v", name, s, one)
			}
		}
	})
}

// Counts are sums, exact in any order.
func TestCountsMerge(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		f := rapid.SampledFrom([]Family{BinomialFamily, PoissonFamily}).Draw(t, "family")
		all := observations(t, f, 30)
		cut := rapid.IntRange(0, len(all)).Draw(t, "cut")
		whole := sumOfAll(f, all)
		if merged := Merge(f, sumOfAll(f, all[cut:]), sumOfAll(f, all[:cut])); merged != whole {
			t.Fatalf("%+v, want %+v", merged, whole)
		}
	})
}

// Data moved and stretched by powers of 2, and moved by whole numbers, which float64 does without
// rounding, move and stretch the belief, to the last bit of the stretch and an ulp of the move.
func TestShiftAndScale(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(2, 40).Draw(t, "n")
		by := math.Ldexp(1, rapid.IntRange(-30, 30).Draw(t, "stretch"))
		shift := float64(rapid.IntRange(-1000000, 1000000).Draw(t, "move"))
		data, stretched, moved := make([]float64, n), make([]float64, n), make([]float64, n)
		for i := range data {
			data[i] = float64(rapid.IntRange(-100000, 100000).Draw(t, "value")) / 1024
			stretched[i], moved[i] = data[i]*by, data[i]+shift
		}
		p := Prior{Mean: 12.5, MeanWorth: 3, SD: 2.25, SDWorth: 4}
		if rapid.Bool().Draw(t, "reference") {
			p = Prior{Reference: true}
		}
		one := p.Posterior(NormalFamily, add(NormalFamily, data...))
		p.Mean, p.SD = p.Mean*by, p.SD*by
		two := p.Posterior(NormalFamily, add(NormalFamily, stretched...))
		if two.M != one.M*by || two.MLow != one.MLow*by || two.SS != one.SS*by*by || two.K != one.K || two.Nu != one.Nu {
			t.Fatalf("%+v stretched by %v is %+v", one, by, two)
		}
		p.Mean, p.SD = p.Mean/by+shift, p.SD/by
		three := p.Posterior(NormalFamily, add(NormalFamily, moved...))
		gap := pair{three.M, three.MLow}.add(pair{one.M, one.MLow}.neg()).add(pair{hi: -shift})
		if math.Abs(gap.hi) > 1e-25 || ulps(three.SS, one.SS) > 1 {
			t.Fatalf("%+v moved by %v is %+v", one, shift, three)
		}
	})
}

// Lognormal is normal on logarithms: multiplying data and prior median by a power of 2 moves the belief
// by its logarithm.
func TestLognormalIsNormalOnLogs(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		data := rapid.SliceOfN(rapid.Float64Range(1e-6, 1e3), 2, 30).Draw(t, "values")
		by := rapid.IntRange(-20, 20).Draw(t, "power")
		p := Prior{Mean: 4e-5, MeanWorth: 2, SD: 0.5, SDWorth: 3}
		one := p.Posterior(LognormalFamily, add(LognormalFamily, data...))
		for i := range data {
			data[i] = math.Ldexp(data[i], by)
		}
		p.Mean = math.Ldexp(p.Mean, by)
		two := p.Posterior(LognormalFamily, add(LognormalFamily, data...))
		gap := pair{two.M, two.MLow}.add(pair{one.M, one.MLow}.neg()).add(ln2.mul(pair{hi: float64(by)}).neg())
		if math.Abs(gap.hi) > 1e-28 || ulps(two.SS, one.SS) > 1 {
			t.Fatalf("%+v times 2^%d is %+v", one, by, two)
		}
	})
}
