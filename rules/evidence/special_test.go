package evidence

import (
	"math"
	"testing"
)

// pointwise holds got against {x, value}; values by mpmath 1.3 with 40 digits at the float64
// nearest to x.
func pointwise(t *testing.T, name string, within float64, f func(float64) float64, rows [][2]float64) {
	t.Helper()
	for _, r := range rows {
		if e := relative(f(r[0]), r[1]); !(e <= within) {
			t.Errorf("%s(%v) = %v, want %v: off by %.1e", name, r[0], f(r[0]), r[1], e)
		}
	}
}

func relative(got, want float64) float64 {
	if got == want {
		return 0
	}
	return math.Abs(got-want) / math.Abs(want)
}

func TestDeviance(t *testing.T) {
	pointwise(t, "deviance", 2e-15, func(x float64) float64 { return deviance(1+x, x) }, [][2]float64{
		{-0.999, 5.9087552789821361648}, {-0.5, 0.19314718055994530942}, {-0.39, 0.1042963218147801278},
		{-0.01, 0.000050335853501441185652}, {-1e-9, 5.0000000033333339586e-19}, {3e-5, 4.4999100020249516292e-10},
		{0.2, 0.017678443206045375639}, {0.59, 0.12626598376785983096}, {0.7, 0.16937174893782958548},
		{50, 46.068174367275674228},
	})
}

func TestStirling(t *testing.T) {
	pointwise(t, "stirling", 2e-13, stirling, [][2]float64{
		{0.001, 2.5422704679670945415}, {0.5, 0.15342640972002734529}, {1, 0.08106146679532725822},
		{3.5, 0.023746163656297495971}, {11.9, 0.0070011560515342099417}, {12, 0.0069428401072095298657},
		{100, 0.00083333055563491468338}, {1e9, 8.3333333333333333331e-11},
	})
}

func TestMills(t *testing.T) {
	pointwise(t, "mills", 5e-16, mills, [][2]float64{
		{0, 1.2533141373155002512}, {0.1, 1.1592623996187363238}, {1, 0.65567954241879847154},
		{2.5, 0.35426511132979366678}, {5, 0.19280810471531576488}, {12, 0.082766286501369177252},
		{40, 0.024984404205720571147}, {1e4, 0.00009999999900000003}, {3e9, 3.333333333333333333e-10},
	})
}

func TestNormalQuantile(t *testing.T) {
	pointwise(t, "normalQuantile", 1e-15, func(p float64) float64 { return normalQuantile(p, 1-p) }, [][2]float64{
		{1e-300, 37.047096299361199237}, {1e-12, 7.0344838253011319326}, {0.001, 3.0902323061678135354},
		{0.05, 1.644853626951472688}, {0.25, 0.6744897501960817432}, {0.35, 0.38532046640756768376},
		{0.49999, 0.000025066282748960008527}, {0.5, 0}, {0.9, -1.2815515655446005935},
		{0.9999999, -5.1993375822906610837},
	})
}

// Logarithms of the window's probability by mpmath with 500 digits.
func TestNormalWindow(t *testing.T) {
	for _, r := range [][3]float64{
		{-1, 1, -0.38171514630212607227}, {-0.2, 0.3, -1.6236832388683199952},
		{2, 2.0000000000009095, -30.644825755603394613}, {5, 5.0625, -16.344312179314440834},
		{5, 30, -15.064998393988725736}, {30, 31, -454.32124395634325204},
		{30, 30.0078125, -455.8858781072252256}, {-3, -2.5, -5.3267647240790622482},
		{0.25, 8, -0.91306176481113660539}, {-40, -39.5, -784.72087910662401194},
		{-0.25, 0.75, -0.98864915340665501009},
	} {
		if got := logNormalWindow(r[0], r[1]); !(math.Abs(got-r[2]) <= 1e-15*(1+math.Abs(r[2]))) {
			t.Errorf("log P(%v < Z < %v) = %v, want %v", r[0], r[1], got, r[2])
		}
	}
}

// The two-term logarithm: hi + lo against logarithms of exact powers, log 2 in two parts by mpmath.
func TestLogPair(t *testing.T) {
	const ln2, ln2Low = 0.6931471805599453094172, 2.3190468138462996e-17
	for _, k := range []int{-40, -3, -1, 1, 2, 10, 37} {
		hi, lo := logPair(math.Ldexp(1, k))
		want, low := math.FMA(float64(k), float64(ln2), 0), float64(k)*ln2Low
		low += math.FMA(float64(k), float64(ln2), -want)
		if d := (hi - want) + (lo - low); !(math.Abs(d) < 1e-30*float64(k*k)+1e-19) {
			t.Errorf("log 2^%d = %v + %v, off by %.1e", k, hi, lo, d)
		}
	}
	// log(x^2) = 2 log x, where x^2 is exact.
	for x := 1.0; x < 3; x += 1.0 / (1 << 20) * 7919 {
		x := math.Float64frombits(math.Float64bits(x) &^ (1<<27 - 1))
		h1, l1 := logPair(x)
		h2, l2 := logPair(x * x)
		if d := (h2 - 2*h1) + (l2 - 2*l1); !(math.Abs(d) < 3e-18) {
			t.Fatalf("log(%v^2) - 2 log(%v) = %.1e", x, x, d)
		}
	}
}
