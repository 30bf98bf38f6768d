package posterior

import (
	"math"
	"math/big"
	"testing"

	"pgregory.net/rapid"
)

// off is how far a pair is from a decimal, relative to it.
func off(t *testing.T, got pair, want string) float64 {
	t.Helper()
	w, _, err := big.ParseFloat(want, 10, 300, big.ToNearestEven)
	if err != nil {
		t.Fatal(err)
	}
	d := new(big.Float).SetPrec(300).SetFloat64(got.hi)
	d.Add(d, new(big.Float).SetFloat64(got.lo)).Sub(d, w)
	if w.Sign() != 0 {
		d.Quo(d, w)
	}
	x, _ := d.Float64()
	return math.Abs(x)
}

// log 2 and log 10 are from tables (Abramowitz & Stegun, table 1.1); the others, logarithms of the
// float64, by mpmath with 60 digits.
func TestLogPair(t *testing.T) {
	for _, c := range []struct {
		x    float64
		want string
	}{
		{1, "0"}, {2, "0.693147180559945309417232121458176568"}, {10, "2.302585092994045684017991454684364208"},
		{4.1e-5, "-10.1019384912599662886798880426135939"},
		{1 + 0x1p-52, "2.22044604925031283432823045461548793e-16"},
		{1 - 0x1p-53, "-1.11022302462515660205338988848237217e-16"},
		{5e-324, "-744.440071921381262314107298446081634"},
		{math.MaxFloat64, "709.782712893383996732223389910657146"},
		{0.70710678118654746, "-0.346573590279972743359775352487368472"},
		{0.70710678118654757, "-0.34657359027997258635052948410986094"},
	} {
		if d := off(t, logPair(c.x), c.want); d > 1e-30 {
			t.Errorf("log %v = %+v, off by %v", c.x, logPair(c.x), d)
		}
	}
}

// The logarithm of a product is the sum of the logarithms, to nearly all digits of a pair; and
// its float64 is within an ulp of the standard library's.
func TestLogOfProducts(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		// 26 bits each: the product is exact.
		a := math.Ldexp(float64(rapid.IntRange(1, 1<<26).Draw(t, "a")), rapid.IntRange(-400, 400).Draw(t, "e"))
		b := math.Ldexp(float64(rapid.IntRange(1, 1<<26).Draw(t, "b")), rapid.IntRange(-400, 400).Draw(t, "f"))
		product, total := logPair(a*b), logPair(a).add(logPair(b))
		d := product.add(total.neg())
		if math.Abs(d.hi) > 1e-29*(math.Abs(logPair(a).hi)+math.Abs(logPair(b).hi)+1) {
			t.Fatalf("log(%v * %v) = %+v, the sum of the logarithms is %+v", a, b, product, total)
		}
		if ulps(product.hi, math.Log(a*b)) > 1 {
			t.Fatalf("log %v = %.17g, the library says %.17g", a*b, product.hi, math.Log(a*b))
		}
	})
}

// Pairs hold what exact rational arithmetic says, to 31 digits.
func TestPairArithmetic(t *testing.T) {
	exact := func(p pair) *big.Rat {
		return new(big.Rat).Add(new(big.Rat).SetFloat64(p.hi), new(big.Rat).SetFloat64(p.lo))
	}
	rapid.Check(t, func(t *rapid.T) {
		draw := func(name string) pair {
			hi := math.Ldexp(rapid.Float64Range(0.5, 1).Draw(t, name), rapid.IntRange(-60, 60).Draw(t, name+" exponent"))
			return quickSum(hi, hi*0x1p-53*rapid.Float64Range(-1, 1).Draw(t, name+" low"))
		}
		a, b := draw("a"), draw("b")
		x, y := exact(a), exact(b)
		for name, c := range map[string]struct {
			got  pair
			want *big.Rat
		}{
			"sum": {a.add(b), new(big.Rat).Add(x, y)}, "product": {a.mul(b), new(big.Rat).Mul(x, y)},
			"quotient":        {a.over(b), new(big.Rat).Quo(x, y)},
			"quotient by one": {a.overFloat(b.hi), new(big.Rat).Quo(x, new(big.Rat).SetFloat64(b.hi))},
		} {
			d := new(big.Rat).Sub(exact(c.got), c.want)
			if relative, _ := d.Quo(d, c.want).Float64(); math.Abs(relative) > 1e-31 {
				t.Fatalf("%s of %+v and %+v is %+v, off by %v", name, a, b, c.got, relative)
			}
		}
	})
}
