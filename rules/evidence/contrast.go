package evidence

import (
	"math"
	"sync"

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

// A mixture weighs S = sum s_i T_i, n >= 2 independent Student variables: it is P(S > lo) for lo > 0 or,
// with a width, P(lo < S < hi).
//
// T_i is normal over the root of an independent chi-squared, and n of these are one chi-squared of N =
// sum nu_i degrees of freedom times proportions with a Dirichlet law, so that given the proportions B
//
//	S is sqrt(C/N) Student's t with N degrees of freedom, C = sum c_i/B_i, c_i = s_i^2 nu_i
//
// (for two: Ruben 1960). Breaking the Dirichlet law stick by stick makes of the expectation over B the
// recurrence
//
//	h_n(c) = P(t_N > lo sqrt(N/c)),   h_{j-1}(c) = E[h_j(c_j/X + c/(1-X))],   P = h_1(c_1),
//
// X ~ Beta(nu_j/2, (nu_1+...+nu_{j-1})/2): integrals of positive functions of one variable, so that relative
// accuracy in the tail is that of Student's law however the scales differ. Each is taken by the trapezoid
// rule in logit X, which converges exponentially. For n > 2 the functions between are read off
// polynomials fitted to log h_j (surface). TestPublicMeans, TestBehrensFisherTable,
// TestSweepMeans, TestSweepContrasts.
type mixture struct {
	lo, hi, width float64
	lo2           float64 // lo^2
	n             int
	student       student // of N degrees of freedom
	c             [mostMeans]float64
	sticks        [mostMeans]stick // of X_j, from the second on
	surface       *surface         // nil where n is 2
}

// A stick is the law of X ~ Beta(a, b) in u, which is logit of the part with the smaller parameter less
// its value at the mode.
type stick struct {
	small, large float64 // parameters
	n, share     float64 // their sum, and small over it
	ratio        float64 // large over small
	step         float64 // of the trapezoid rule
	grow, shrink float64 // e^step and its inverse
	left, right  float64 // of the mapping
	scale        float64 // step times the density at the mode
	swapped      bool    // X is the part with the larger parameter
}

// slowFall is the rate of a law's fall below which its nodes are mapped, so that they run out
// double-exponentially: u = t + left (1-e^-t) + right (e^t-1).
const slowFall = 10

// newStick prepares the law of X for the average of h(ca/X + cb/(1-X)), h being the tail beyond far, a squared
// distance times the degrees of freedom. The mapping must not set in where something still bends: before
// the weight falls off exponentially, or before C is so large that h is nearly constant.
func newStick(a, b, ca, cb, far float64) stick {
	s := stick{small: a, large: b}
	if a > b {
		s = stick{small: b, large: a, swapped: true}
		ca, cb = cb, ca
	}
	s.n = s.small + s.large
	s.share, s.ratio = s.small/s.n, s.large/s.small
	if s.small < slowFall {
		s.left = 0.5 * math.Min(1, 0.2*ca*s.ratio/far)
	}
	if s.large < slowFall {
		s.right = 0.5 * math.Min(1, 0.2*cb/far) / s.ratio
	}
	// The integrand is analytic in a strip about the line and, as far as the law itself goes, Gaussian of
	// variance 1/a + 1/b. The two widths were found by comparing with steps a third as long.
	s.step = 1 / math.Sqrt(1/(0.3*0.3)+1/(float64(0.7*0.7)*(1/a+1/b))) / (1 + s.left + s.right)
	s.grow, s.shrink = exp(s.step), exp(-s.step)
	s.scale = s.step * exp(stirling(s.n)-stirling(a)-stirling(b)-logRoot2Pi) * math.Sqrt(s.large*s.share)
	return s
}

// A node is a place of the trapezoid rule: the law's density over that at the mode, du/dt included, is
// rate e^weight.
type node struct {
	weight, rate float64
	small, large float64 // 1/X of the part with the smaller parameter, and of the other
}

// A walk goes over the nodes on one side of the mode; up is e^t and down its inverse.
type walk struct{ t, up, down float64 }

func (s *stick) begin(i int) walk {
	t := s.step * float64(i)
	return walk{t, exp(t), exp(-t)}
}

// next is the node at the walk's place, which moves on by steps of the sign of side.
func (s *stick) next(w *walk, side int) (d node) {
	u := w.t
	d.rate = 1
	if s.left != 0 || s.right != 0 {
		u += float64(s.left*(1-w.down)) + float64(s.right*(w.up-1))
		d.rate += float64(s.left*w.down) + float64(s.right*w.up)
	}
	var e, less1 float64
	if u < -1 {
		e = exp(u)
		less1 = e - 1
	} else {
		less1 = expm1(u)
		e = 1 + less1
	}
	d.weight = float64(s.small*u) - float64(s.n*log1p(float64(s.share*less1)))
	d.small, d.large = 1+s.ratio/e, 1+e/s.ratio
	if side > 0 {
		w.t, w.up, w.down = w.t+s.step, w.up*s.grow, w.down*s.shrink
	} else {
		w.t, w.up, w.down = w.t-s.step, w.up*s.shrink, w.down*s.grow
	}
	return d
}

// probability is the logarithm of what the mixture weighs.
func (m *mixture) probability(k *contrast) float64 {
	m.n, m.lo2 = k.n, m.lo*m.lo
	all := 0.0
	for j := range k.n {
		m.c[j] = k.scale[j] * k.scale[j] * k.nu[j]
		all += k.nu[j]
	}
	m.student.prepare(all)
	far := math.Max(m.lo2, m.hi*m.hi) * all
	before, root := k.nu[0], math.Sqrt(m.c[0])
	for j := 1; j < k.n; j++ {
		m.sticks[j] = newStick(k.nu[j]/2, before/2, m.c[j], root*root, far)
		before += k.nu[j]
		root += math.Sqrt(m.c[j])
	}
	if m.n > 2 {
		m.surface = surfaces.Get().(*surface)
		m.surface.begin(m, k)
		defer surfaces.Put(m.surface)
	}
	l, f := m.average(1, m.c[0])
	return l + log(f)
}

// given is h_n(c), as factor e^logarithm.
func (m *mixture) given(c float64) (logarithm, factor float64) {
	if m.width > 0 {
		root := math.Sqrt(m.student.nu / c)
		return m.student.logWindow(m.lo*root, m.hi*root, m.width*root), 1
	}
	logarithm, factor, _ = m.student.at(m.lo2 / c)
	return logarithm, factor
}

// of is h_j(c), j counted from 0. The first after the average that is asked for is wanted at too few places to
// fit anything to it.
func (m *mixture) of(j int, c float64) (logarithm, factor float64) {
	switch {
	case m.n == 2:
		return m.given(c)
	case j == 1:
		return m.average(2, c)
	}
	return m.surface.at(m, j, c), 1
}

// average is the expectation of h_j over stick j, which is h_j-1(c), going outwards from the mode of its law
// until what is left of that, h being at most 1, is below half an ulp of the sum. A tail grows with c, so that
// nodes are passed over where it can't be large enough to count.
func (m *mixture) average(j int, c float64) (logarithm, factor float64) {
	s := &m.sticks[j]
	small, large := m.c[j], c
	if s.swapped {
		small, large = large, small
	}
	sum := newGrowing()
	for _, side := range [2]int{1, -1} {
		i := 0
		if side < 0 {
			i = 1
		}
		w := s.begin(i * side)
		known, bound := 0.0, 0.0 // h is no larger than e^bound where C is no larger than known
		for ; i < mostNodes; i++ {
			var d node
			if m.surface == nil {
				d = s.next(&w, side)
			} else {
				d = *m.surface.node(s, j, side, i)
			}
			if d.weight < sum.least-reserve {
				break
			}
			at := float64(small*d.small) + float64(large*d.large)
			if at <= known && d.weight+bound < sum.least-reserve {
				continue
			}
			l, f := m.of(j, at)
			sum.add(d.weight+l, d.rate*f)
			if m.width == 0 {
				known, bound = at, l
			}
		}
	}
	return sum.from, s.scale * sum.sum
}

const (
	mostNodes = 100000
	reserve   = 2 // for the rates of the nodes that are left
)

// growing is a sum of positive terms factor e^logarithm of any size, kept as a number times e^from. What
// is below e^least is lost in its rounding.
type growing struct{ from, sum, counted, least float64 }

// newGrowing passes over terms below e^-750 from the first: probabilities below 1e-300 are rough.
func newGrowing() growing { return growing{least: -750} }

func (g *growing) add(logarithm, factor float64) {
	d := logarithm - g.from
	if !(d < 300) || g.sum == 0 {
		if math.IsInf(logarithm, -1) || factor == 0 {
			return
		}
		if g.sum != 0 {
			g.sum *= exp(-d)
		}
		g.from, g.counted, d = logarithm, 0, 0
	}
	g.sum += float64(factor * exp(d))
	if g.sum > float64(2*g.counted) {
		g.counted = g.sum
		g.least = math.Max(g.from+log(g.sum)-36.5, -750)
	}
}

// A surface keeps what is asked for many times over while one mixture of three or more is weighed: the nodes of
// its sticks, and log h_j for j >= 2, as polynomials that are made where they are asked for.
type surface struct {
	nodes  [mostMeans][2]run // to the right from the mode on, and to the left
	levels [mostMeans]level
	leaves [mostLeaves]leaf
	used   int16
	beyond node // what the runs don't hold
}

// A run are the nodes of a stick on one side.
type run struct {
	made  int
	walk  walk
	nodes [160]node
}

// A level is log h_j over z = w/(w+1), w = sigma/(8 far), far being the larger of |lo| and |hi| and sigma^2 =
// c/(nu_1+...+nu_j) + s_j+1^2 + ... + s_n^2, which is C/N with the sticks to come at their means: from near 0,
// where h is rare, to 1, where it is 1/2. (For a window it is log (w+1)h, since that goes with 1/w at
// last.) To make h a polynomial in z of few terms the 8 does well for Student's law.
type level struct {
	per, rest float64                  // w^2 is per c + rest
	edges     [len(grades) + 1]float64 // of stretches of z
	first     [len(grades)]int16       // the leaf of each stretch; 0 where there is none yet
	last      int16                    // the leaf that was asked last
}

// A leaf is a stretch of z, and the polynomial over it or its halves.
type leaf struct {
	lo, width float64
	kids      int16 // the first of two; 0 where there are none
	made      bool
	power     [fitPoints]float64
}

const (
	fitPoints  = 22
	mostLeaves = 2048
	narrowest  = 1. / 4096
)

// grades are where the stretches of z end, as far/sigma.
var grades = [...]float64{260, 150, 85, 45, 20, 7, 0}

var surfaces = sync.Pool{New: func() any { return new(surface) }}

func (f *surface) begin(m *mixture, k *contrast) {
	f.used = 1 // 0 stands for none
	far := math.Max(math.Abs(m.lo), math.Abs(m.hi))
	scale := 1 / (64 * far * far)
	root, nu, rest := math.Sqrt(m.c[0]), k.nu[0], 0.0
	for j := 1; j < m.n; j++ {
		rest += float64(k.scale[j] * k.scale[j])
	}
	for j := 1; j < m.n; j++ {
		f.nodes[j][0].made, f.nodes[j][1].made = 0, 0
		root += math.Sqrt(m.c[j])
		nu += k.nu[j]
		rest = math.Max(rest-float64(k.scale[j]*k.scale[j]), 0)
		l := &f.levels[j]
		l.last, l.per, l.rest = 0, scale/nu, scale*rest
		clear(l.first[:])
		w := float64(math.Sqrt(float64(l.per*root*root)+l.rest) * (1 - 1e-9))
		l.edges[0] = w / (w + 1) // C is at least (sum sqrt c_i)^2
		for i, g := range grades {
			l.edges[i+1] = math.Max(1/(1+float64(g/8)), l.edges[0])
		}
	}
}

// node is node i of stick j on one side of the mode.
func (f *surface) node(s *stick, j, side, i int) *node {
	r := &f.nodes[j][0]
	if side < 0 {
		r = &f.nodes[j][1]
	}
	if i >= len(r.nodes) {
		w := s.begin(i * side)
		f.beyond = s.next(&w, side)
		return &f.beyond
	}
	for ; r.made <= i; r.made++ {
		if r.made == 0 {
			r.walk = s.begin(0)
		}
		r.nodes[r.made] = s.next(&r.walk, side)
	}
	return &r.nodes[i]
}

func (f *surface) leaf(lo, width float64) int16 {
	i := f.used
	l := &f.leaves[i]
	l.lo, l.width, l.kids, l.made = lo, width, 0, false
	f.used++
	return i
}

// at is log h_j(c).
func (f *surface) at(m *mixture, j int, c float64) float64 {
	v := &f.levels[j]
	w := math.Sqrt(float64(v.per*c) + v.rest)
	z := w / (1 + w)
	l := &f.leaves[v.last]
	if v.last == 0 || z < l.lo || z > l.lo+l.width {
		l = f.find(m, j, z)
	}
	h := l.value(float64(2*(z-l.lo))/l.width - 1)
	if m.width > 0 {
		h -= log1p(w)
	}
	return h
}

// value is the polynomial at x from -1 to 1, in four chains that need not wait for each other.
func (l *leaf) value(x float64) float64 {
	p := &l.power
	x2 := x * x
	x4 := x2 * x2
	a, b, c, d := p[20], p[21], p[18], p[19]
	for i := 16; i >= 0; i -= 4 {
		a, b = math.FMA(a, x4, p[i]), math.FMA(b, x4, p[i+1])
	}
	for i := 14; i >= 2; i -= 4 {
		c, d = math.FMA(c, x4, p[i]), math.FMA(d, x4, p[i+1])
	}
	return math.FMA(math.FMA(d, x, c), x2, math.FMA(b, x, a))
}

// find goes down to the leaf that holds z, and makes it.
func (f *surface) find(m *mixture, j int, z float64) *leaf {
	v := &f.levels[j]
	stretch := 0
	for stretch+1 < len(grades) && z >= v.edges[stretch+1] {
		stretch++
	}
	i := v.first[stretch]
	if i == 0 {
		i = f.leaf(v.edges[stretch], v.edges[stretch+1]-v.edges[stretch])
		v.first[stretch] = i
	}
	for {
		l := &f.leaves[i]
		if l.kids == 0 && !l.made {
			full := int(f.used)+64 > mostLeaves
			if f.fit(m, j, l) || l.width < narrowest*l.lo || full {
				l.made = true
			} else {
				half := float64(l.width / 2)
				l.kids = f.leaf(l.lo, half)
				f.leaf(l.lo+half, half)
			}
		}
		if l.made {
			v.last = i
			return l
		}
		i = l.kids
		if z >= f.leaves[i+1].lo {
			i++
		}
	}
}

// fit makes the polynomial through the values at Chebyshev's points, and says whether its last
// coefficients are lost in the rounding of the values.
func (f *surface) fit(m *mixture, j int, l *leaf) bool {
	v := &f.levels[j]
	var y, t [fitPoints]float64
	for i := range y {
		z := l.lo + float64(l.width*(0.5+float64(0.5*cosine(2*i+1))))
		w := z / (1 - z)
		c := math.Max(float64(w*w)-v.rest, 0) / v.per
		h, factor := 0.0, 0.0
		if j == m.n-1 {
			h, factor = m.given(c)
		} else {
			h, factor = m.average(j+1, c)
		}
		y[i] = h + log(factor)
		if m.width > 0 {
			y[i] -= log1p(-z)
		}
	}
	for k := range t {
		s := 0.0
		for i := range y {
			s = math.FMA(y[i], cosine(k*(2*i+1)), s)
		}
		t[k] = s * 2 / fitPoints
	}
	t[0] *= 0.5
	l.power = powersOf(&t)
	last := math.Abs(t[fitPoints-1]) + math.Abs(t[fitPoints-2])
	return last <= 5e-14+float64(1e-15*math.Abs(y[0]))
}

// powersOf writes a sum of Chebyshev's polynomials as one of powers, by T_k+1 = 2 x T_k - T_k-1.
func powersOf(c *[fitPoints]float64) (p [fitPoints]float64) {
	var before, now [fitPoints]float64
	before[0], now[1] = 1, 1
	p[0], p[1] = c[0], c[1]
	for k := 2; k < fitPoints; k++ {
		var next [fitPoints]float64
		for i := range next {
			next[i] = -before[i]
			if i > 0 {
				next[i] += 2 * now[i-1]
			}
			p[i] = math.FMA(c[k], next[i], p[i])
		}
		before, now = now, next
	}
	return p
}

// cosine is cos(n pi/(2 fitPoints)).
func cosine(n int) float64 {
	n %= 4 * fitPoints
	if n > 2*fitPoints {
		n = 4*fitPoints - n
	}
	if n > fitPoints {
		return -cosines[2*fitPoints-n]
	}
	return cosines[n]
}

var cosines = [fitPoints + 1]float64{1.0, 0.99745211461025354136, 0.98982144188093273238, 0.97714686597115951949, 0.95949297361449738989, 0.93694972499976173582, 0.90963199535451837141, 0.87767898956725561521, 0.84125353283118116886, 0.80054124092436040397, 0.75574957435425828377, 0.7071067811865475244, 0.65486073394528506406, 0.59927766651134693453, 0.54064081745559758211, 0.4792489867200568312, 0.41541501300188642553, 0.34946417959909833671, 0.28173255684142969771, 0.21256528955297667388, 0.14231483827328514044, 0.071339183199232340327, 0}
