package evidence

import "math"

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
