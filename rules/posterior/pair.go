package posterior

import "math"

// pair is an unevaluated sum hi + lo of two float64, |lo| at most half an ulp of hi: about 32
// decimal digits. Products that feed a sum are exact (math.FMA) or rounded explicitly, so
// that every machine gives the same bits. Algorithms: Dekker (1971), Knuth, TAOCP 2, 4.2.2.
type pair struct{ hi, lo float64 }

// twoSum is a + b exactly.
func twoSum(a, b float64) pair {
	s := a + b
	t := s - a
	return pair{s, (a - (s - t)) + (b - t)}
}

// quickSum is a + b exactly where |a| >= |b| or a is 0.
func quickSum(a, b float64) pair {
	s := a + b
	return pair{s, b - (s - a)}
}

// twoProduct is a * b exactly, short of overflow and underflow.
func twoProduct(a, b float64) pair {
	p := float64(a * b)
	return pair{p, math.FMA(a, b, -p)}
}

func (a pair) add(b pair) pair {
	s, t := twoSum(a.hi, b.hi), twoSum(a.lo, b.lo)
	s = quickSum(s.hi, s.lo+t.hi)
	return quickSum(s.hi, s.lo+t.lo)
}

func (a pair) neg() pair { return pair{-a.hi, -a.lo} }

func (a pair) mul(b pair) pair {
	p := twoProduct(a.hi, b.hi)
	return quickSum(p.hi, p.lo+(float64(a.hi*b.lo)+float64(a.lo*b.hi)))
}

func (a pair) over(b pair) pair {
	q := a.hi / b.hi
	r := a.add(b.mul(pair{hi: q}).neg())
	q2 := r.hi / b.hi
	r = r.add(b.mul(pair{hi: q2}).neg())
	q3 := r.hi / b.hi
	return quickSum(q, q2).add(pair{hi: q3})
}

// overFloat is a / b for a float64, in fewer steps.
func (a pair) overFloat(b float64) pair {
	q := a.hi / b
	rest := math.FMA(-q, b, a.hi) // exact
	return quickSum(q, (rest+a.lo)/b)
}

// ln2 to 32 digits.
var ln2 = pair{0.693147180559945286226764, 2.319046813846299558417771e-17}

// artanh holds the coefficients 1/(2k+1) of its series, as far as logPair needs them.
var artanh = func() (c [24]pair) {
	for k := range c {
		c[k] = pair{hi: 1}.overFloat(float64(2*k + 1))
	}
	return c
}()

// logPair is the natural logarithm of a positive finite number, within 1e-30 of itself or of 1e-30
// where that is larger: x = m 2^e with m between sqrt(1/2) and sqrt(2), and log m =
// 2 artanh((m-1)/(m+1)), whose 24th term is below 1e-36. It is not math.Log because that is
// assembly on some machines, and bits must not depend on the machine. TestLogPair.
func logPair(x float64) pair {
	m, e := math.Frexp(x)
	if m < math.Sqrt2/2 {
		m, e = m*2, e-1
	}
	s := twoSum(m, -1).over(twoSum(m, 1))
	s2 := s.mul(s)
	series := artanh[len(artanh)-1]
	for k := len(artanh) - 2; k >= 0; k-- {
		series = series.mul(s2).add(artanh[k])
	}
	series = series.mul(s)
	series = series.add(series)
	return ln2.mul(pair{hi: float64(e)}).add(series)
}
