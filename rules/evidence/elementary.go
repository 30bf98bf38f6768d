package evidence

import "math"

// The elementary functions are this package's own, because those of package math are other code, with
// other last bits, on other machines. Every product that feeds a sum is rounded by itself or is a
// math.FMA, which is one rounding everywhere. Errors stay below one ulp, of expm1 below two. TestElementary.

const (
	log2e = 1.44269504088896340735992468100189214
	ln2Hi = 0.693147180369123816490e+00 // 32 bits, so that a multiple is exact
	ln2Lo = 1.90821492927058770002e-10
	// rounding added to a number below 2^51 rounds it to an integer.
	rounding = 3 << 51
)

// reduced splits x = k ln 2 + r, |r| <= ln(2)/2, and gives q = (e^r - 1 - r)/r^2.
func reduced(x float64) (k, r, q float64) {
	k = float64(x*log2e) + rounding - rounding
	r = math.FMA(-k, ln2Hi, x)
	r = math.FMA(-k, ln2Lo, r)
	// Taylor's series; the term after the last is below 1e-17.
	v := r * r
	even := math.FMA(math.FMA(math.FMA(math.FMA(math.FMA(1./87178291200, v, 1./479001600), v, 1./3628800), v, 1./40320), v, 1./720), v, 1./24)
	odd := math.FMA(math.FMA(math.FMA(math.FMA(math.FMA(1./1307674368000, v, 1./6227020800), v, 1./39916800), v, 1./362880), v, 1./5040), v, 1./120)
	q = math.FMA(math.FMA(odd, r, even), v, math.FMA(1./6, r, 0.5))
	return k, r, q
}

// exp is e^x: 2^k 2^(i/32) e^r with |r| <= ln(2)/64, e^r - 1 by Taylor's series, whose next term is below 4e-18.
func exp(x float64) float64 {
	if !(math.Abs(x) <= 708) {
		return expFar(x)
	}
	n := float64(x*(32*log2e)) + rounding
	i := int64(math.Float64bits(n)) // its last bits are those of the integer
	n -= rounding
	r := math.FMA(-n, ln2Hi/32, x)
	r = math.FMA(-n, ln2Lo/32, r)
	v := r * r
	p := math.FMA(math.FMA(math.FMA(1./720, r, 1./120), r, 1./24), float64(v*v), math.FMA(math.FMA(1./6, r, 0.5), v, r))
	t := roots[i&31]
	return math.FMA(t, p, t) * math.Float64frombits(uint64((i>>5<<52)+1023<<52))
}

// expFar is exp where the scale alone could over- or underflow.
func expFar(x float64) float64 {
	switch {
	case x > 709.782712893384:
		return math.Inf(1)
	case x < -745.2:
		return 0
	case x != x:
		return x
	}
	// In two factors, so that neither over- nor underflows before the product does.
	k, r, q := reduced(x)
	e := 1 + math.FMA(float64(r*r), q, r)
	half := int64(k) / 2
	return e * math.Float64frombits(uint64(half+1023)<<52) * math.Float64frombits(uint64(int64(k)-half+1023)<<52)
}

// roots are 2^(i/32).
var roots = [32]float64{
	1.0, 1.0218971486541166782, 1.0442737824274138403, 1.0671404006768236182,
	1.0905077326652576592, 1.1143867425958925363, 1.1387886347566916537, 1.1637248587775775138,
	1.1892071150027210667, 1.2152473599804688781, 1.2418578120734840486, 1.2690509571917332226,
	1.2968395546510096659, 1.3252366431597412946, 1.3542555469368927283, 1.3839098819638319549,
	1.4142135623730950488, 1.44518080697704662, 1.4768261459394993114, 1.5091644275934227398,
	1.5422108254079408236, 1.5759808451078864865, 1.6104903319492543082, 1.6457554781539648445,
	1.6817928305074290861, 1.7186192981224779156, 1.7562521603732994831, 1.7947090750031071864,
	1.8340080864093424635, 1.8741676341102999013, 1.9152065613971472939, 1.957144124175400269,
}

// expm1 is e^x - 1, with relative accuracy near 0.
func expm1(x float64) float64 {
	switch {
	case x > 40:
		return exp(x)
	case x < -40:
		return -1
	case x != x:
		return x
	}
	k, r, q := reduced(x)
	e := math.FMA(float64(r*r), q, r)
	if k == 0 {
		return e
	}
	scale := math.Float64frombits(uint64(int64(k)+1023) << 52)
	return math.FMA(scale, e, scale-1)
}

// log is the natural logarithm of x; -Inf of 0, NaN below.
func log(x float64) float64 {
	switch {
	case x < 0 || x != x:
		return math.NaN()
	case x == 0:
		return math.Inf(-1)
	case x > math.MaxFloat64:
		return x
	}
	k, m := mantissa(x)
	return logOf(k, m-1, 0)
}

// log1p is log(1+x), with relative accuracy near 0.
func log1p(x float64) float64 {
	switch {
	case x < -1 || x != x:
		return math.NaN()
	case x == -1:
		return math.Inf(-1)
	case x > math.MaxFloat64:
		return x
	case x > -0.29 && x < 0.41:
		return logOf(0, x, 0)
	}
	u := 1 + x
	lost := x - (u - 1)
	if x > 1 {
		lost = 1 - (u - x)
	}
	k, m := mantissa(u)
	return logOf(k, m-1, lost/u)
}

// mantissa splits x > 0 into m 2^k, m from sqrt(1/2) to sqrt(2).
func mantissa(x float64) (k, m float64) {
	const rootHalf = 0x3fe6a09e667f3bcd
	bits := math.Float64bits(x)
	shift := int64(0)
	if bits < 1<<52 { // subnormal
		bits = math.Float64bits(x * (1 << 54))
		shift = 54
	}
	e := (int64(bits) - rootHalf) >> 52
	return float64(e - shift), math.Float64frombits(uint64(int64(bits) - e<<52))
}

// logOf is k ln 2 + log(1+f) + low. With s = f/(2+f), log(1+f) = f - f^2/2 + s (f^2/2 + R), R = s^2 times a
// polynomial in s^2 that is the best for |s| < 0.1716 (the method and the coefficients are those of
// fdlibm's e_log.c, Sun Microsystems 1993).
func logOf(k, f, low float64) float64 {
	s := f / (2 + f)
	v := s * s
	w := v * v
	odd := float64(w * math.FMA(math.FMA(1.531383769920937332e-01, w, 2.222219843214978396e-01), w, 3.999999999940941908e-01))
	even := float64(v * math.FMA(math.FMA(math.FMA(1.479819860511658591e-01, w, 1.818357216161805012e-01), w, 2.857142874366239149e-01), w, 6.666666666666735130e-01))
	half := float64(0.5 * float64(f*f))
	inner := math.FMA(s, half+(odd+even), math.FMA(k, ln2Lo, low))
	return float64(k*ln2Hi) - ((half - inner) - f)
}

// hypot is sqrt(x^2 + y^2) for numbers whose squares neither over- nor underflow.
func hypot(x, y float64) float64 { return math.Sqrt(math.FMA(x, x, float64(y*y))) }
