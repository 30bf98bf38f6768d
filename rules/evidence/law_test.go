package evidence

import (
	"bufio"
	"fmt"
	"math"
	"os"
	"strings"
	"testing"
)

// rows reads a table of testdata/evidence: a word and numbers on each line, # for remarks.
func rows(t *testing.T, name string, numbers int) (words []string, values [][]float64) {
	t.Helper()
	f, err := os.Open("../../testdata/evidence/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	for s := bufio.NewScanner(f); s.Scan(); {
		line := strings.TrimSpace(s.Text())
		if line == "" || line[0] == '#' {
			continue
		}
		fields := strings.Fields(line)
		row := make([]float64, numbers)
		for i := range row {
			if _, err := fmt.Sscan(fields[i+1], &row[i]); err != nil {
				t.Fatalf("%s: %q: %v", name, line, err)
			}
		}
		words, values = append(words, fields[0]), append(values, row)
	}
	return words, values
}

// off is the relative error of both probabilities of a pair, given the logarithms of the right ones.
func off(o Odds, logFor, logAgainst float64) float64 {
	e := math.Max(math.Abs(math.Expm1(o.LogFor-logFor)), math.Abs(math.Expm1(o.LogAgainst-logAgainst)))
	if math.IsNaN(e) {
		return math.Inf(1)
	}
	return e
}

// law_tails.txt: Beta and gamma laws with parameters from 0.001 to 1e7 and both tails down to 1e-300, by
// mpmath with 90 digits (Lentz's continued fraction and the series of the incomplete functions).
func TestLawTails(t *testing.T) {
	worst := 0.0
	words, values := rows(t, "law_tails.txt", 6)
	for i, v := range values {
		l := gammaLaw(v[0])
		if words[i] == "beta" {
			l = betaLaw(v[0], v[1])
		}
		below, above := l.logTails(v[2], v[3])
		e := off(Odds{LogFor: below, LogAgainst: above}, v[4], v[5])
		worst = math.Max(worst, e)
		if e > 3e-12 {
			t.Errorf("%s %v: %v and %v, relative error %.1e", words[i], v, below, above, e)
		}
	}
	t.Logf("%d points, worst relative error %.1e", len(values), worst)
}

// The density of logit X integrates to the tails' difference: the window by its integral and by
// the tails where these do not cancel.
func TestWindowAgainstTails(t *testing.T) {
	for _, l := range []law{betaLaw(3.5, 97.5), betaLaw(0.5, 0.5), betaLaw(4e5, 6e5),
		gammaLaw(0.5), gammaLaw(44), gammaLaw(1e6)} {
		mean, sd := l.a, math.Sqrt(l.a)
		if !l.gamma {
			mean = l.a / l.n
			sd = math.Sqrt(mean * (l.b / l.n) / (l.n + 1))
		}
		lo, hi := math.Max(mean-2*sd, mean/10), mean+1.5*sd
		if !l.gamma {
			hi = math.Min(hi, 0.5+mean/2)
		}
		belowLo, _ := l.logTails(lo, 1-lo)
		_, aboveHi := l.logTails(hi, 1-hi)
		want := math.Log1p(-math.Exp(belowLo) - math.Exp(aboveHi))
		if got := l.logBetween(lo, hi); math.Abs(got-want) > 1e-12 {
			t.Errorf("a %v b %v: log P(%v < X < %v) = %v, want %v", l.a, l.b, lo, hi, got, want)
		}
	}
}
