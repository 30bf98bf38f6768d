package evidence

import (
	"math"
	"sync"
)

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

// A level is log h_j over z = w/(w+1), w = 8 sigma/far, far being the larger of |lo| and |hi| and sigma^2 =
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
var grades = [...]float64{260, 150, 85, 45, 24, 12, 5, 0}

var surfaces = sync.Pool{New: func() any { return new(surface) }}

func (f *surface) begin(m *mixture, k *contrast) {
	f.used = 1 // 0 stands for none
	far := math.Max(math.Abs(m.lo), math.Abs(m.hi))
	scale := 64 / (far * far)
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
