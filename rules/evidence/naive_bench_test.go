package evidence

import (
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
