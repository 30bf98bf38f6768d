package evidence

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

// The reference is a Taylor series in big.Float arithmetic of 200 bits, an independent route.
func TestElementary(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 5))
	worst := map[string]float64{}
	ulps := func(name string, x, got float64, want *big.Float) {
		near, _ := want.Float64()
		if math.IsInf(got, 0) || math.IsNaN(got) {
			t.Fatalf("%s(%v) = %v", name, x, got)
		}
		diff, _ := new(big.Float).Sub(new(big.Float).SetPrec(200).SetFloat64(got), want).Float64()
		ulp := math.Nextafter(math.Abs(near), math.Inf(1)) - math.Abs(near)
		worst[name] = math.Max(worst[name], math.Abs(diff)/ulp)
	}
	for range 4000 {
		x := (r.Float64() - 0.5) * math.Pow(10, 4*r.Float64()-1.2)
		x = math.Max(math.Min(x, 700), -700)
		ulps("exp", x, exp(x), bigExp(x))
		ulps("expm1", x/100, expm1(x/100), new(big.Float).Sub(bigExp(x/100), big.NewFloat(1)))
		small := (r.Float64() - 0.5) * math.Pow(10, -12*r.Float64())
		ulps("expm1", small, expm1(small), new(big.Float).Sub(bigExp(small), big.NewFloat(1)))
		y := math.Exp(300 * (r.Float64() - 0.5) * r.Float64())
		ulps("log", y, log(y), bigLogarithm(new(big.Float).SetPrec(200).SetFloat64(y)))
		for _, z := range []float64{y, small, 2*r.Float64() - 1} {
			if math.Abs(z) < 1e-20 {
				continue // 1+z would need more bits than the reference has
			}
			ulps("log1p", z, log1p(z), bigLogarithm(new(big.Float).SetPrec(200).Add(big.NewFloat(1).SetPrec(200), big.NewFloat(z))))
		}
	}
	for name, w := range worst {
		t.Logf("%s: worst error %.3f ulp", name, w)
		if bound := map[string]float64{"exp": 1, "expm1": 2, "log": 1, "log1p": 1}[name]; w > bound {
			t.Errorf("%s errs by %.3f ulp", name, w)
		}
	}
	for _, c := range []struct{ got, want float64 }{
		{exp(0), 1}, {exp(-800), 0}, {exp(710), math.Inf(1)}, {exp(-745), 5e-324}, {exp(math.Inf(-1)), 0}, {log(0), math.Inf(-1)}, {log(1), 0},
		{log(5e-324), -744.4400719213812}, {log(math.MaxFloat64), 709.782712893384}, {log1p(0), 0}, {log1p(-1), math.Inf(-1)}, {expm1(-100), -1}, {expm1(0), 0},
		{log1p(math.Inf(1)), math.Inf(1)}, {log(math.Inf(1)), math.Inf(1)}, {exp(709.78), 1.7928227943945155e308}, {log1p(1e-300), 1e-300},
	} {
		if c.got != c.want && !(math.Abs(c.got/c.want-1) < 4e-16) {
			t.Errorf("%v, want %v", c.got, c.want)
		}
	}
	for _, x := range []float64{log(-1), log1p(-2), exp(math.NaN()), log(math.NaN()), log1p(math.NaN()), expm1(math.NaN())} {
		if !math.IsNaN(x) {
			t.Errorf("%v, want NaN", x)
		}
	}
}

// bigExp is e^x by Taylor's series of x/2^20, squared 20 times.
func bigExp(x float64) *big.Float {
	const prec = 300
	y := new(big.Float).SetPrec(prec).SetFloat64(x)
	y.SetMantExp(y, -20)
	sum, term := big.NewFloat(1).SetPrec(prec), big.NewFloat(1).SetPrec(prec)
	for k := 1; k < 40; k++ {
		term.Mul(term, y)
		term.Quo(term, big.NewFloat(float64(k)))
		sum.Add(sum, term)
	}
	for range 20 {
		sum.Mul(sum, sum)
	}
	return sum
}

// bigLogarithm is log x by Newton's method on bigExp, from the float64 one.
func bigLogarithm(x *big.Float) *big.Float {
	near, _ := x.Float64()
	guess := math.Log(near)
	// log x = g + log(x e^-g), and the latter is a short series of z = x e^-g - 1.
	z := new(big.Float).SetPrec(300).Mul(x, bigExp(-guess))
	z.Sub(z, big.NewFloat(1))
	sum, power := new(big.Float).SetPrec(300), big.NewFloat(1).SetPrec(300)
	for k := 1; k < 8; k++ {
		power.Mul(power, z)
		term := new(big.Float).SetPrec(300).Quo(power, big.NewFloat(float64(k)))
		if k%2 == 0 {
			term.Neg(term)
		}
		sum.Add(sum, term)
	}
	return sum.Add(sum, big.NewFloat(guess))
}

func BenchmarkElementary(b *testing.B) {
	x := 0.7
	b.Run("exp", func(b *testing.B) {
		for b.Loop() {
			x = exp(x-1.9) + 0.5
		}
	})
	b.Run("math.Exp", func(b *testing.B) {
		for b.Loop() {
			x = math.Exp(x-1.9) + 0.5
		}
	})
	b.Run("log", func(b *testing.B) {
		for b.Loop() {
			x = log(x+3) + 0.5
		}
	})
	b.Run("math.Log", func(b *testing.B) {
		for b.Loop() {
			x = math.Log(x+3) + 0.5
		}
	})
	b.Run("log1p", func(b *testing.B) {
		for b.Loop() {
			x = log1p(x) + 0.1
		}
	})
}
