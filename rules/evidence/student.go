package evidence

import "math"

// student is Student's t with nu degrees of freedom, prepared for many evaluations of its tail
//
//	S(y) = P(T > y) = 1/2 I_x(nu/2, 1/2), x = 1/(1+r), r = y^2/nu, y >= 0
//
// (Abramowitz & Stegun 26.7.1). With v = log(1+r) everything below has the factor e^(-nu v/2), which stays
// outside, so that the relative error is the same however rare the tail is:
//
//   - for v >= seriesFrom the series of I_x, whose terms are positive (Abramowitz & Stegun 26.5.4);
//   - else, where nu is below fewest, the recurrence I_x(a,1/2) = I_x(a+1,1/2) + x^a sqrt(1-x)
//     Gamma(a+1/2)/(Gamma(a+1) sqrt(pi)) (26.5.16), whose terms are positive too, until M = nu+2J is not;
//   - and for M degrees of freedom the substitution w^2 = M v, which makes it
//     C int_w^inf e^(-t^2/2) g(t^2/M) dt, g(v) = sqrt(v/(1-e^-v)), integrated by parts, g being a
//     polynomial, into one Mills' ratio and a polynomial in w^2.
//
// Valid for nu > 0; relative error below 1e-13 for nu to 1e9 where P > 1e-260. TestStudentTails.
type student struct {
	nu      float64
	density float64 // C of nu: the density at 0

	steps  int                // J
	rise   [mostSteps]float64 // of the recurrence, in powers of x
	m      float64            // M
	first  float64            // C times the factor of Mills' ratio
	rest   [len(rootFit)]float64
	series [14]float64
}

const (
	fewest     = 30
	mostSteps  = 16
	seriesFrom = 2.6
)

// rootFit is g on [0, 4.4], from its values at Chebyshev's points with 60 digits; relative error 2e-17.
// Beyond, where the polynomial strays, there is less than 1e-11 of what is integrated, and it strays by
// less than 1e-7 of that.
var rootFit = [20]float64{
	1.0,
	0.249999999999999122,
	0.0104166666666950696,
	-0.00260416666704829591,
	-0.0000976562471955132698,
	0.000051540785733373692,
	1.27564237639517697e-6,
	-1.11018476817389826e-6,
	-1.95292571612560624e-8,
	2.46651754177078163e-8,
	4.97967477511292865e-10,
	-6.82011441513787745e-10,
	5.620400854507309e-11,
	-1.35315819483481191e-11,
	8.9068687373041181e-12,
	-2.46443863222737866e-12,
	3.71747387522201205e-13,
	-3.32884251894762605e-14,
	1.68991844846337284e-15,
	-3.79479635893331978e-17,
}

func newStudent(nu float64) (t student) {
	t.prepare(nu)
	return t
}

func (t *student) prepare(nu float64) {
	const rootPi = 1.77245385090551602729816748334114518
	t.nu, t.m, t.steps = nu, nu, 0
	for t.m < fewest {
		t.m += 2
		t.steps++
	}
	a := t.m / 2
	ratio := gammaRatio(a) // Gamma(a+1/2)/Gamma(a), also on the way down to nu/2
	c := ratio / math.Sqrt(math.Pi*t.m)
	b := 0.0
	inverse := 1 / t.m
	for i := len(rootFit) - 1; i >= 1; i-- {
		// p_i (w^2/M)^i by parts leaves w^(2i-1) and 2i-1 times the integral of the power below.
		b = float64(rootFit[i]*powers(inverse, i)) + float64(float64(2*i+1)*b)
		t.rest[i-1] = float64(c * b)
	}
	t.first = float64(c * (1 + b))
	for j := t.steps - 1; j >= 0; j-- {
		a--
		ratio *= a / (a + 0.5)
		t.rise[j] = ratio / a / (2 * rootPi)
	}
	t.density = ratio / math.Sqrt(math.Pi*nu)
	k := ratio / (2 * rootPi) // 1/(2 B(nu/2, 1/2)) (1/2)_i/i!
	for i := range t.series {
		t.series[i] = k / (float64(nu/2) + float64(i))
		k *= (float64(i) + 0.5) / float64(i+1)
	}
}

// powers is x^n.
func powers(x float64, n int) float64 {
	p := x
	for range n - 1 {
		p *= x
	}
	return p
}

// gammaRatio is Gamma(a+1/2)/Gamma(a) for a >= 12, from Stirling's formula with the large logarithms joined:
// log(a)/2 + a log(1+1/(2a)) - 1/2 + stirling(a+1/2) - stirling(a).
func gammaRatio(a float64) float64 {
	h := 0.5 / a
	return math.Sqrt(a) * exp(stirling(a+0.5)-stirling(a)-float64(a*deviance(1+h, h)))
}

// at is the tail and the density at y = sqrt(nu r), r >= 0, both over e^logarithm.
func (t *student) at(r float64) (logarithm, tail, density float64) {
	v := log1p(r)
	x := 1 / (1 + r)
	root := math.Sqrt(x)
	density = float64(t.density * root)
	logarithm = -float64(t.nu / 2 * v)
	if v >= seriesFrom {
		return logarithm, polynomial(t.series[:], x), density
	}
	w2 := t.m * v
	w := math.Sqrt(w2)
	tail = math.FMA(t.first, mills(w), float64(w*polynomial(t.rest[:len(rootFit)-1], w2)))
	if t.steps == 0 {
		return logarithm, tail, density
	}
	low := 0.0
	for j := t.steps - 1; j >= 0; j-- {
		low = math.FMA(low, x, t.rise[j])
		tail *= x
	}
	return logarithm, math.FMA(low, float64(math.Sqrt(r)*root), tail), density
}

// tail is P(T > y) for y >= 0 as factor e^logarithm.
func (t *student) tail(y float64) (logarithm, factor float64) {
	r := y / math.Sqrt(t.nu)
	if r > 1e150 { // whose square is too large, and by far the greater part of 1+r
		if math.IsInf(r, 1) {
			return math.Inf(-1), 1
		}
		return -float64(t.nu * log(r)), t.series[0]
	}
	logarithm, factor, _ = t.at(r * r)
	return logarithm, factor
}

// logTail is log P(T > y) for y >= 0.
func (t *student) logTail(y float64) float64 {
	l, f := t.tail(y)
	return l + log(f)
}

// logWindow is log P(lo < T < hi), width being hi - lo, which the caller knows without
// cancellation. A window whose ends have nearly one tail probability is integrated from the
// density, so that nothing cancels. TestPublicMeans, TestWindowsInTheTail.
func (t *student) logWindow(lo, hi, width float64) float64 {
	switch {
	case width <= 0:
		return math.Inf(-1)
	case hi <= 0:
		return t.logWindow(-hi, -lo, width)
	case lo < 0:
		return logSum(t.logWindow(0, -lo, -lo), t.logWindow(0, hi, hi))
	}
	a, b := t.logTail(lo), t.logTail(hi)
	switch {
	case b-a < -math.Ln2:
		return a + log1mexp(b-a)
	case lo > 1e100*math.Sqrt(t.nu): // where the tail is a power
		return a + log1mexp(-float64(t.nu*log1p(width/lo)))
	}
	return t.logDensity(lo) + log(t.panel(lo, width))
}

// logDensity is the logarithm of the density.
func (t *student) logDensity(y float64) float64 {
	return log(t.density) - float64((t.nu+1)/2*log1p(float64(y*y)/t.nu))
}

// panel is the integral of the density over a width from lo on, in units of its value at lo, by
// Gauss and Legendre's rule of 20 points; the density changes little over such a window.
func (t *student) panel(lo, width float64) float64 {
	half := float64(width / 2)
	mid := lo + half
	at0 := log1p(float64(lo*lo) / t.nu)
	sum := 0.0
	for i, x := range legendreX {
		for _, side := range [2]float64{-1, 1} {
			y := mid + float64(side*half*x)
			sum += float64(legendreW[i] * exp(-float64((t.nu+1)/2*(log1p(float64(y*y)/t.nu)-at0))))
		}
	}
	return half * sum
}

// legendreX and legendreW are the positive nodes of the 20-point rule and their weights
// (Abramowitz & Stegun, table 25.4).
var legendreX = [10]float64{
	0.0765265211334973337546404, 0.2277858511416450780804962, 0.3737060887154195606725482, 0.5108670019508270980043641,
	0.6360536807265150254528367, 0.7463319064601507926143051, 0.8391169718222188233945291, 0.9122344282513259058677524,
	0.9639719272779137912676661, 0.9931285991850949247861224,
}

var legendreW = [10]float64{
	0.1527533871307258506980843, 0.1491729864726037467878287, 0.1420961093183820513292983, 0.1316886384491766268984945,
	0.1181945319615184173123774, 0.1019301198172404350367501, 0.0832767415767047487247581, 0.0626720483341090635695065,
	0.0406014298003869413310400, 0.0176140071391521183118620,
}
