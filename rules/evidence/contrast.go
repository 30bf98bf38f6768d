package evidence

import (
	"math"

	"steelyard/rules/claim"
)

// mostMeans is the most means a contrast may have: the claim language refuses more.
const mostMeans = 12

// scaled is a mean's posterior: centre + centreLow + scale t_nu.
type scaled struct {
	centre, centreLow, scale, nu float64
}

// meanOf is what is believed of the mean (of logarithms, for lognormal).
func meanOf(p *Process) scaled {
	return scaled{p.M, p.MLow, math.Sqrt(p.SS / p.Nu / p.K), p.Nu}
}

// A contrast is a weighted sum of independent means: centre + sum scale_i T_i, T_i Student variables. The
// centre is a pair, so that means of 1e9 with spreads of 1e-3 lose nothing.
type contrast struct {
	centre, centreLow float64
	n                 int
	scale, nu         [mostMeans]float64 // in ascending order of nu
}

// contrastOf is the contrast that a linear claim about means speaks of.
func contrastOf(c *claim.Claim, p []Process) (k contrast) {
	for _, t := range c.Terms {
		k.add(meanOf(&p[t.Process]), t.Weight)
	}
	return k
}

// add adds a mean with its weight.
func (k *contrast) add(s scaled, weight float64) {
	hi, lo := times(s.centre, s.centreLow, weight)
	k.centre, k.centreLow = addPairs(k.centre, k.centreLow, hi, lo)
	i := k.n
	for ; i > 0 && k.nu[i-1] > s.nu; i-- {
		k.scale[i], k.nu[i] = k.scale[i-1], k.nu[i-1]
	}
	k.scale[i], k.nu[i] = float64(math.Abs(weight)*s.scale), s.nu
	k.n++
}

// times multiplies a pair by a number.
func times(hi, lo, by float64) (float64, float64) {
	p := float64(hi * by)
	return p, math.FMA(hi, by, -p) + float64(lo*by)
}

// addPairs adds two pairs.
func addPairs(a, aLow, b, bLow float64) (hi, lo float64) {
	s := a + b
	t := s - a
	e := (a - (s - t)) + (b - t) + (aLow + bLow)
	hi = s + e
	return hi, e - (hi - s)
}

// beyond is x minus the centre.
func (k *contrast) beyond(x float64) float64 {
	hi, lo := addPairs(x, 0, -k.centre, -k.centreLow)
	return hi + lo
}

// width is a scale of the contrast.
func (k *contrast) width() float64 {
	w := 0.0
	for _, s := range k.scale[:k.n] {
		w = hypot(w, s)
	}
	return w
}

// above is the odds of the contrast lying above x.
func (k *contrast) above(x float64) Odds {
	d := k.beyond(x)
	if d < 0 {
		return k.tail(-d).against()
	}
	return k.tail(d)
}

// tail is the odds of the contrast lying more than d >= 0 above its centre.
func (k *contrast) tail(d float64) Odds {
	if d == 0 {
		return oddsOf(-math.Ln2)
	}
	if k.n == 1 {
		t := newStudent(k.nu[0])
		l, f := t.tail(d / k.scale[0])
		return oddsOf(l + log(f))
	}
	if d > farAway*k.width() {
		return oddsOf(k.single(func(t *student, s float64) float64 {
			l, f := t.tail(d / s)
			return l + log(f)
		}))
	}
	m := mixture{lo: d}
	return oddsOf(m.probability(k))
}

// farAway is so far, in scales, that a sum of Student variables gets there by one of them alone: the tails fall
// off as powers, and two at once are rarer by 1e-200.
const farAway = 1e100

// single is the logarithm of the probability that one variable does what of takes the logarithm for.
func (k *contrast) single(of func(t *student, scale float64) float64) float64 {
	sum := math.Inf(-1)
	for j := range k.n {
		t := newStudent(k.nu[j])
		sum = logSum(sum, of(&t, k.scale[j]))
	}
	return sum
}

// within is the odds of the contrast lying between lo and hi, each side integrated for itself: the
// contrary is the sum of the two tails.
func (k *contrast) within(lo, hi float64) Odds {
	contrary := logSum(k.above(lo).LogAgainst, k.above(hi).LogFor)
	if contrary < -math.Ln2 {
		return oddsOf(contrary).against()
	}
	a, b, width := k.beyond(lo), k.beyond(hi), hi-lo
	var inside float64
	if k.n == 1 {
		t, s := newStudent(k.nu[0]), k.scale[0]
		inside = t.logWindow(a/s, b/s, width/s)
	} else if math.Min(math.Abs(a), math.Abs(b)) > farAway*k.width() {
		inside = k.single(func(t *student, s float64) float64 { return t.logWindow(a/s, b/s, width/s) })
	} else {
		m := mixture{lo: a, hi: b, width: width}
		inside = m.probability(k)
	}
	return Odds{LogFor: math.Min(inside, 0), LogAgainst: math.Min(contrary, 0)}
}
