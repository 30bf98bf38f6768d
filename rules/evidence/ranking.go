package evidence

import "math"

// A ranking weighs which of several independent means, each centre + scale T with Student's law, is the
// largest: for every one at once
//
//	P_j = int f_j(x) prod_{i != j} F_i(x) dx,
//
// f the densities and F the distribution functions; and the contrary of one is the sum of the others. Every
// integrand is positive and a product of Student's laws whose exponents are summed apart, so that
// relative accuracy is that of Student's tails however the scales differ. The panels of Gauss and Legendre
// are laid outwards from the largest centre (panel); nothing is left out but what is below 1e-17 of each
// P_j. TestPublicMeans, TestSweepRankings.
type ranking struct {
	n             int
	centre, scale [largestGroup]float64
	law           [largestGroup]student
	p             [largestGroup]float64 // P_j so far
	best          [largestGroup]float64 // a logarithm that the largest value of integrand j at least has

	// A place is centre anchor + x, the anchor being the law whose centre is nearest: so x is fine enough for
	// every law that is narrow there. What follows is of the place that was looked at last.
	anchor    int
	exponent  float64 // of the product of all F whose law lies above
	logarithm [largestGroup]float64
	factor    [largestGroup]float64 // F_i but for the exponent
	density   [largestGroup]float64 // f_i but for the exponent
	before    [largestGroup + 1]float64
	lies      [largestGroup]bool // law i lies above the place
}

// add adds a mean.
func (r *ranking) add(s scaled) {
	r.centre[r.n], r.scale[r.n] = s.centre+s.centreLow, s.scale
	r.law[r.n].prepare(s.nu)
	r.n++
}

// odds is the odds of mean which being the largest.
func (r *ranking) odds(which int) Odds {
	r.weigh()
	rest := 0.0
	for j, p := range r.p[:r.n] {
		if j != which {
			rest += p
		}
	}
	return Odds{LogFor: math.Min(log(r.p[which]), 0), LogAgainst: math.Min(log(rest), 0)}
}

// weigh finds every P_j.
func (r *ranking) weigh() {
	start := 0
	for j := range r.n {
		if r.centre[j] > r.centre[start] {
			start = j
		}
		r.best[j] = math.Inf(-1)
	}
	for i := range r.n {
		r.anchor = i
		r.look(0)
		for j := range r.n {
			r.best[j] = math.Max(r.best[j], r.integrand(j))
		}
	}
	for _, side := range [2]float64{1, -1} {
		r.anchor = start
		x := 0.0
		for range 10000 {
			x = r.moor(x)
			r.look(x)
			if r.done(side) {
				break
			}
			width := r.panel(x, side)
			for i, node := range legendreNodes {
				r.count(x+float64(side*width*(0.5-float64(0.5*node))), legendreWeights[i]*width/2)
				r.count(x+float64(side*width*(0.5+float64(0.5*node))), legendreWeights[i]*width/2)
			}
			x += float64(side * width)
		}
	}
}

// moor takes the nearest law for the anchor and gives the place from there.
func (r *ranking) moor(x float64) float64 {
	from := r.centre[r.anchor]
	for j := range r.n {
		if there := (from - r.centre[j]) + x; math.Abs(there) < math.Abs((from-r.centre[r.anchor])+x) {
			r.anchor = j
		}
	}
	return (from - r.centre[r.anchor]) + x
}

// distance is how far the place lies above the centre of law j.
func (r *ranking) distance(j int, x float64) float64 { return (r.centre[r.anchor] - r.centre[j]) + x }

// look takes every law at a place.
func (r *ranking) look(x float64) {
	r.exponent = 0
	for j := range r.n {
		z := r.distance(j, x) / r.scale[j]
		t := &r.law[j]
		l, tail, density := t.at(z * z / t.nu)
		r.logarithm[j], r.density[j] = l, density/r.scale[j]
		r.lies[j] = z < 0
		if z < 0 {
			r.exponent += l
			r.factor[j] = tail
			continue
		}
		e := exp(l)
		r.density[j] *= e
		r.factor[j] = 1 - float64(tail*e)
	}
}

// count adds a node of a weight to every P_j.
func (r *ranking) count(x, weight float64) {
	r.look(x)
	if r.exponent < -740 {
		return
	}
	weight *= exp(r.exponent)
	r.before[0] = 1
	for j := range r.n {
		r.before[j+1] = r.before[j] * r.factor[j]
	}
	after := weight
	for j := r.n - 1; j >= 0; j-- {
		r.p[j] += float64(r.density[j] * r.before[j] * after)
		after *= r.factor[j]
	}
}

// integrand is the logarithm of integrand j at the place that was looked at, but for the factors F, which
// are of the order of 1.
func (r *ranking) integrand(j int) float64 {
	l := r.exponent - log(r.scale[j])
	if !r.lies[j] {
		l += r.logarithm[j]
	}
	return l
}

// done says whether what is left beyond the place is below 1e-17 of every P_j: to the right it is less than
// each law's own tail, to the left less than the product of all F.
func (r *ranking) done(side float64) bool {
	for j := range r.n {
		left := r.exponent
		if side > 0 {
			if r.lies[j] {
				return false
			}
			left = r.logarithm[j]
		}
		if left > -700 && !(left < log(r.p[j])-39) {
			return false
		}
	}
	return true
}

// deep is how far down a tail no longer shows beside 1, as a logarithm.
const deep = 40

// panel is a width over which sixteen points integrate to all digits. The laws are analytic but for
// singularities at centre +- i scale sqrt(nu); and where an integrand counts at all, it may not vary by
// more than some e^12, nor be narrower than a third of the panel.
func (r *ranking) panel(x, side float64) float64 {
	width := math.Inf(1)
	slope, bend := 0.0, 0.0   // of the logarithm of what all integrands have in common
	slope1, bend1 := 0.0, 0.0 // and of the one that varies most
	counts := false
	for j := range r.n {
		s, nu := r.scale[j], r.law[j].nu
		d := r.distance(j, x)
		away := d*side >= 0
		far := hypot(d, s*math.Sqrt(nu))
		if away && math.Abs(d) > s*math.Sqrt(nu) {
			width = math.Min(width, 1.6*far)
		} else {
			width = math.Min(width, 0.72*far)
		}
		z := math.Abs(d) / s
		w := 1 / (nu + float64(z*z))
		a, b := (nu+1)*z*w/s, (nu+1)*w/(s*s)
		relevant := r.integrand(j) > r.best[j]-45
		counts = counts || relevant
		switch {
		case r.lies[j]:
			slope += a
			bend += b
		case !relevant && r.logarithm[j] < -deep:
			if !away {
				// Up to where its tail shows in F, and no farther.
				edge := math.Sqrt(nu * expm1(2*deep/nu))
				width = math.Min(width, s*(math.Max(z-edge, 0)+1))
			}
		default:
			slope1 = math.Max(slope1, a)
			bend1 = math.Max(bend1, b)
		}
	}
	if counts {
		if slope += slope1; slope > 0 {
			width = math.Min(width, 10/slope)
		}
		width = math.Min(width, 3.2/math.Sqrt(bend+bend1))
	}
	return width
}
