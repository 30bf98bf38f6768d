package evidence

import "math"

// student is Student's t with nu degrees of freedom; its survival function is half an
// incomplete beta function, of which betaOdds keeps both tails:
//
//	P(T > y) = 1/2 P(B > y^2/(nu+y^2)), B ~ Beta(1/2, nu/2), y >= 0
//
// (Abramowitz & Stegun 26.7.1). TestStudentTails.
type student struct {
	nu  float64
	law law // of B
}

func newStudent(nu float64) student { return student{nu, betaLaw(0.5, nu/2)} }

// tail is P(T > y) for y >= 0 as factor e^logarithm.
func (t *student) tail(y float64) (logarithm, factor float64) {
	if y == 0 {
		return 0, 0.5
	}
	y2 := float64(y * y)
	if math.IsInf(y2, 1) {
		return math.Inf(-1), 1
	}
	logarithm, factor = t.law.tailAt(y2/(t.nu+y2), t.nu/(t.nu+y2), true)
	return logarithm, factor / 2
}

// logTail is log P(T > y) for y >= 0.
func (t *student) logTail(y float64) float64 {
	l, f := t.tail(y)
	return l + math.Log(f)
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
	if b-a < -math.Ln2 {
		return a + log1mexp(b-a)
	}
	return t.logDensity(lo) + math.Log(t.panel(lo, width))
}

// logDensity is the logarithm of the density, with Stirling's corrections in place of the
// difference of two large logarithms of gamma functions.
func (t *student) logDensity(y float64) float64 {
	a := t.nu / 2
	// log Gamma(a+1/2) - log Gamma(a) = log(a)/2 + a log1p(1/(2a)) - 1/2 + stirling(a+1/2) - stirling(a)
	ratio := math.Log(a)/2 - deviance(1+0.5/a, 0.5/a)*a + stirling(a+0.5) - stirling(a)
	return ratio - 0.5*math.Log(math.Pi*t.nu) - float64((a+0.5)*math.Log1p(float64(y*y)/t.nu))
}

// panel is the integral of the density over a width from lo on, in units of its value at lo, by
// Gauss and Legendre's rule of 20 points; the density changes little over such a window.
func (t *student) panel(lo, width float64) float64 {
	half := width / 2
	mid := lo + half
	at0 := math.Log1p(float64(lo*lo) / t.nu)
	sum := 0.0
	for i, x := range legendreX {
		for _, side := range [2]float64{-1, 1} {
			y := mid + float64(side*half*x)
			sum += float64(legendreW[i] * math.Exp(-float64((t.nu+1)/2*(math.Log1p(float64(y*y)/t.nu)-at0))))
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
