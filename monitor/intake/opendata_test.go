package intake

import (
	"math"
	"os"
	"testing"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// TestOpenData reads the open data of testdata/data. Means of oxide: R 4.2.2 on nlme::Oxide; of
// the others: sums over counts, by awk, as 838/27 and 682/27 for the breaks.
func TestOpenData(t *testing.T) {
	for _, c := range []struct {
		file, line, column string
		lines              []string
		n                  int
		means              []float64
	}{
		{"oxide.csv", "source", "thickness", []string{"1", "2"}, 36, []float64{1995.111111111111, 2005.194444444444}},
		{"morley.csv", "experiment", "speed", []string{"1", "2", "3", "4", "5"}, 20, []float64{909, 856, 845, 820.5, 831.5}},
		{"warpbreaks.csv", "wool", "breaks", []string{"A", "B"}, 27, []float64{31.03703703703704, 25.25925925925926}},
	} {
		content, err := os.ReadFile("../../testdata/data/" + c.file)
		if err != nil {
			t.Fatal(err)
		}
		plan := &rules.Plan{Characteristics: []rules.Characteristic{{Name: "x", Family: "normal", Lines: c.lines}}}
		src := someSource(func(s *config.Source) {
			s.Columns = config.Columns{Line: c.line, Measured: []config.Measured{measuring("x", c.column)}}
		})
		g := NewReader(src, plan).Read(c.file, written, content)
		if g.Batch == nil || len(g.Batch.Held) > 0 || len(g.Batch.Series) != len(c.lines) {
			t.Fatalf("%s: %+v", c.file, g)
		}
		for i, s := range g.Batch.Series {
			sum := 0.0
			for _, x := range s.Value {
				sum += x
			}
			mean := sum / float64(len(s.Value))
			if s.Process != "x."+c.lines[i] || len(s.Value) != c.n || math.Abs(mean-c.means[i]) > 1e-12*mean {
				t.Errorf("%s, %s: %d values, mean %.16g, want %d, %.16g", c.file, s.Process, len(s.Value), mean, c.n, c.means[i])
			}
		}
	}
}
