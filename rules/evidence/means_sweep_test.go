package evidence

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// convolved is log P(s1 T1 + s2 T2 > d) by the direct convolution, int f1(x) S2((d - s1 x)/s2) dx: another
// integral than the mixture that is tested, over another variable, of tails from another expansion (law).
// Panels of Gauss and Legendre are graded towards the middle of either law and halved until the integrand
// changes little over each.
func convolved(s1, nu1, s2, nu2, d float64) float64 {
	second := betaLaw(0.5, nu2/2)
	first := betaLaw(0.5, nu1/2)
	f := func(x float64) float64 {
		// The density of T1 from that of B = T^2/(nu+T^2), whose logit has the law's density.
		x2 := x * x
		density := first.logDensity(x2/(nu1+x2), nu1/(nu1+x2)) - log(math.Abs(x))
		return density + tailOf(&second, nu2, (d-s1*x)/s2)
	}
	return panels(f, 110, []float64{0, d / s1}, []float64{1, s2 / s1})
}

// tailOf is log P(T > y).
func tailOf(l *law, nu, y float64) float64 {
	y2 := y * y
	below, above := l.logTails(y2/(nu+y2), nu/(nu+y2))
	if y == 0 {
		return -math.Ln2
	}
	if y > 0 {
		return above - math.Ln2
	}
	// 1 - S(|y|) = 1/2 + P(B < b)/2.
	return log1p(exp(below)) - math.Ln2
}

// panels is the logarithm of the integral of e^f over the line, graded about some places by their scales.
func panels(f func(float64) float64, widest float64, at, scale []float64) float64 {
	var edges []float64
	for k := -3.0; k < widest; k++ {
		for i := range at {
			edges = append(edges, at[i]-scale[i]*math.Exp2(k), at[i]+scale[i]*math.Exp2(k))
		}
	}
	edges = append(edges, at...)
	slices.Sort(edges)
	edges = slices.Compact(edges)
	top := math.Inf(-1)
	for _, x := range edges {
		if x != 0 {
			top = math.Max(top, f(x))
		}
	}
	sum, lost := 0.0, 0.0
	var piece func(a, b float64, depth int)
	piece = func(a, b float64, depth int) {
		if depth == 0 && a != 0 && b != 0 && math.Max(f(a), f(b))-top < -90-math.Log(b-a) {
			return
		}
		half, mid := (b-a)/2, a+(b-a)/2
		whole, least, most := 0.0, math.Inf(1), math.Inf(-1)
		for i, node := range legendreX {
			for _, side := range []float64{-1, 1} {
				v := f(mid + side*half*node)
				least, most = math.Min(least, v), math.Max(most, v)
				whole += legendreW[i] * math.Exp(v-top)
			}
		}
		if most-least > 5 && most > top-50 && depth < 40 {
			piece(a, mid, depth+1)
			piece(mid, b, depth+1)
			return
		}
		// Neumaier's summation.
		v := half * whole
		t := sum + v
		if math.Abs(sum) >= math.Abs(v) {
			lost += (sum - t) + v
		} else {
			lost += (v - t) + sum
		}
		sum = t
	}
	for i := 1; i < len(edges); i++ {
		piece(edges[i-1], edges[i], 0)
	}
	return math.Log(sum+lost) + top
}

// A wide random sweep of differences and single means: n from 2 to 1e6, ratios of spread from 1e-6 to 1e6,
// probabilities down to 1e-30.
func TestSweepMeans(t *testing.T) {
	r := rand.New(rand.NewPCG(2026, 12))
	worst, cases, least := 0.0, 0, 0.0
	for cases < 300 {
		nu1, nu2 := math.Floor(math.Exp(r.Float64()*math.Log(1e6))), math.Floor(math.Exp(r.Float64()*math.Log(1e6)))
		ratio := math.Exp((r.Float64() - 0.5) * 2 * math.Log(1e6))
		if cases%2 == 0 {
			ratio = math.Exp(r.NormFloat64())
		}
		k := pairOf(1, nu1, ratio, nu2)
		d := math.Hypot(1, ratio) * math.Exp(5*r.Float64()-2)
		got := k.above(d)
		if got.LogFor < -69 {
			continue
		}
		want := convolved(1, nu1, ratio, nu2, d)
		cases++
		e := math.Abs(math.Expm1(got.LogFor - want))
		worst, least = math.Max(worst, e), math.Min(least, got.LogFor)
		if e > 1e-11 {
			t.Errorf("nu %v and %v, ratio %v, distance %v: %v, by convolution %v, relative error %.1e", nu1, nu2, ratio, d, got.LogFor, want, e)
		}
	}
	t.Logf("%d differences down to %.0e: worst relative error %.1e", cases, math.Exp(least), worst)
}

// Student's tails against those of the Beta law, another expansion, and against closed forms for one and two
// degrees of freedom: 1/2 - atan(y)/pi and (1 - y/sqrt(2+y^2))/2 (Johnson, Kotz & Balakrishnan,
// Continuous Univariate Distributions 2, chapter 28).
func TestStudentTails(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 7))
	worst := 0.0
	check := func(nu, y, want float64) {
		s := newStudent(nu)
		l, f := s.tail(y)
		e := math.Abs(math.Expm1(l + math.Log(f) - want))
		worst = math.Max(worst, e)
		if !(e < 3e-13) { // the Beta law errs the more of the two: 2e-13 where it is 1 less the other tail
			t.Errorf("nu %v, y %v: log P = %v, want %v, relative error %.1e", nu, y, l+math.Log(f), want, e)
		}
	}
	for range 20000 {
		nu := math.Exp(r.Float64()*math.Log(1e10) - 1)
		y := math.Exp(6*r.Float64() - 3)
		b := betaLaw(0.5, nu/2)
		if want := tailOf(&b, nu, y); want > -600 {
			check(nu, y, want)
		}
		y = math.Exp(40*r.Float64() - 10)
		check(1, y, math.Log(math.Atan(1/y)/math.Pi))
		check(2, y, -math.Log(math.Sqrt(2+y*y))-math.Log(math.Sqrt(2+y*y)+y))
	}
	check(1, 1e200, -200*math.Log(10)-math.Log(math.Pi))
	t.Logf("worst relative error %.1e", worst)
}

// A contrast of n means is the convolution of one of n-1 with the last.
func TestSweepContrasts(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 3))
	worst := 0.0
	for _, n := range []int{3, 3, 3, 3, 3, 4, 4, 5} {
		{
			var whole, part contrast
			var last scaled
			for i := range n {
				s := scaled{scale: math.Exp(2 * r.NormFloat64()), nu: math.Floor(4 + math.Exp(7*r.Float64()))}
				whole.add(s, 1)
				if last = s; i < n-1 {
					part.add(s, 1)
				}
			}
			d := whole.width() * math.Exp(2.2*r.Float64()-0.7)
			got := whole.above(d).LogFor
			law := betaLaw(0.5, last.nu/2)
			want := panels(func(x float64) float64 {
				y := x / last.scale
				return law.logDensity(y*y/(last.nu+y*y), last.nu/(last.nu+y*y)) - log(math.Abs(x)) + part.above(d-x).LogFor
			}, 40, []float64{0, d}, []float64{last.scale, part.width()})
			e := math.Abs(math.Expm1(got - want))
			worst = math.Max(worst, e)
			if !(e < 1e-11) {
				t.Errorf("%d means, scales %v, nu %v, d %v: log P = %v, by convolution %v, relative error %.1e",
					n, whole.scale[:n], whole.nu[:n], d, got, want, e)
			}
		}
	}
	t.Logf("worst relative error %.1e", worst)
}

// The largest of two is the difference of two, weighed by the mixture; of several, P of one may be weighed as an
// integral of its own (panels), and the sum over all is 1.
func TestSweepRankings(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 8))
	worst, worstSum, most := 0.0, 0.0, 0
	for i := range 160 {
		n := 2 + r.IntN(2)*r.IntN(12)
		if i%40 == 0 {
			n = largestGroup
		}
		var k ranking
		for range n {
			k.add(scaled{centre: 3 * r.NormFloat64(), scale: math.Exp(2 * r.NormFloat64()), nu: math.Floor(1 + math.Exp(9*r.Float64()))})
		}
		if n == 2 && i%3 == 0 {
			k.scale[1] = k.scale[0] * math.Exp(27*r.Float64()-13)
		}
		all := k
		all.weigh()
		sum := 0.0
		for _, p := range all.p[:n] {
			sum += p
		}
		worstSum = math.Max(worstSum, math.Abs(sum-1))
		for which := range n {
			want := rankedAlone(&k, which)
			if n == 2 {
				pair := pairOf(k.scale[which], k.law[which].nu, k.scale[1-which], k.law[1-which].nu)
				want = pair.above(k.centre[1-which] - k.centre[which]).LogFor
			} else if which > 1 || n > 20 {
				break
			}
			if want < -650 {
				continue
			}
			e := math.Abs(math.Expm1(math.Log(all.p[which]) - want))
			worst, most = math.Max(worst, e), max(most, n)
			if !(e < 1e-11) {
				t.Errorf("%d means, centres %v, scales %v, nu %v: log P of %d is %v, want %v, relative error %.1e",
					n, k.centre[:n], k.scale[:n], k.nus(), which, math.Log(all.p[which]), want, e)
			}
		}
	}
	t.Logf("up to %d means: worst relative error %.1e, of the sums %.1e", most, worst, worstSum)
	if worstSum > 1e-12 {
		t.Errorf("the probabilities add up to 1 but for %v", worstSum)
	}
}

func (r *ranking) nus() (nu []float64) {
	for j := range r.n {
		nu = append(nu, r.law[j].nu)
	}
	return nu
}

// rankedAlone is log P_which by adaptive panels about every centre, tails from the Beta law.
func rankedAlone(k *ranking, which int) float64 {
	laws := make([]law, k.n)
	for j := range laws {
		laws[j] = betaLaw(0.5, k.law[j].nu/2)
	}
	at := func(j int, x float64) (b, q, z float64) {
		z = (x - k.centre[j]) / k.scale[j]
		return z * z / (k.law[j].nu + z*z), k.law[j].nu / (k.law[j].nu + z*z), z
	}
	f := func(x float64) float64 {
		b, q, z := at(which, x)
		s := laws[which].logDensity(b, q) - math.Log(math.Abs(z)*k.scale[which])
		for j := range laws {
			if j != which {
				_, _, z := at(j, x)
				s += tailOf(&laws[j], k.law[j].nu, -z)
			}
		}
		return s
	}
	var places []float64
	for j := range laws {
		places = append(places, k.centre[j]+1e-9*k.scale[j])
	}
	return panels(f, 60, places, k.scale[:k.n])
}
