package evidence

import (
	"fmt"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
)

// The naive way beside BenchmarkMeanDifference: 100,000 draws from the two posteriors with
// gonum, which is right to about two digits.
func BenchmarkMeanDifferenceByDraws(b *testing.B) {
	one, two := meanOf(new(group{36, 33.9, 0.62}.process())), meanOf(new(group{36, 33.3, 0.60}.process()))
	source := rand.NewPCG(1, 2)
	t1 := distuv.StudentsT{Mu: one.centre, Sigma: one.scale, Nu: one.nu, Src: source}
	t2 := distuv.StudentsT{Mu: two.centre, Sigma: two.scale, Nu: two.nu, Src: source}
	above := 0
	for b.Loop() {
		for range 100000 {
			if t1.Rand()-t2.Rand() > 0.4 {
				above++
			}
		}
	}
	b.ReportMetric(float64(above)/float64(b.N)/100000, "P")
}

// contrastFor is the contrast of one of n means with the average of the others.
func contrastFor(n int) (k contrast) {
	for i := range n {
		weight := 1.0
		if i > 0 {
			weight = -1 / float64(n-1)
		}
		p := group{float64(8 + 3*i), 33.9 - 0.05*float64(i), 0.5 + 0.03*float64(i)}.process()
		k.add(meanOf(&p), weight)
	}
	return k
}

func BenchmarkContrast(b *testing.B) {
	for _, n := range []int{2, 3, 4, 5, 10, 12} {
		k := contrastFor(n)
		b.Run(fmt.Sprint(n), func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				k.above(1.2)
			}
		})
	}
}

// BenchmarkLargest weighs all n at once.
func BenchmarkLargest(b *testing.B) {
	for _, n := range []int{2, 3, 10, 64} {
		var r ranking
		for i := range n {
			p := group{float64(8 + 3*i), 33.9 - 0.05*float64(i%10), 0.5 + 0.03*float64(i%10)}.process()
			r.add(meanOf(&p))
		}
		b.Run(fmt.Sprint(n), func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				r.p = [largestGroup]float64{}
				r.weigh()
			}
		})
	}
}
