package main

import (
	"bytes"
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// Placenta praevia births and asthma deaths are worked examples of Gelman et al., Bayesian Data
// Analysis, sections 2.4 and 2.6 (from memory; the values here were computed anew with mpmath). The
// two lines are a public case of testdata/checks/posterior_claims.json.
func TestWeighLines(t *testing.T) {
	questions := `{"id":"births","claim":"proportion(girls) < 0.485","processes":{"girls":{"family":"binomial","summary":{"counted":437,"of":980},"prior":{"a":1,"b":1}}}}
{"id":"asthma","claim":"rate(deaths) > 1","processes":{"deaths":{"family":"poisson","summary":{"count":30,"exposure":20},"prior":{"shape":3,"rate":5}}}}
{"id":"lines","claim":"mean(one) - mean(two) > 0","processes":{"one":{"summary":{"n":12,"mean":25.013,"sd":0.021}},"two":{"summary":{"n":15,"mean":25.001,"sd":0.034}}}}
{"id":"both","claim":"mean(a) > 0","processes":{"a":{"values":[1,2],"summary":{"n":3}}}}
{"id":"nothing","clam":"x"}
{"id":"last","claim":"mean(a) > 0","processes":{"a":{"values":[-1,1]}}}
`
	var out bytes.Buffer
	d := &desk{commandLine: &commandLine{JSON: true}, out: &out, err: &out}
	if err := d.answerLines(strings.NewReader(questions)); err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(strings.TrimSpace(out.String()), "\n")
	want := []struct {
		id   string
		p    float64
		says string
	}{
		{"births", 0.99282598856065194, ""}, {"asthma", 0.92854396875994141, ""}, {"lines", 0.8552351911904148867212706, ""},
		{"both", 0, "one of them is expected"}, {"nothing", 0, "not a question"}, {"last", 0.5, ""},
	}
	if len(lines) != len(want) {
		t.Fatalf("%d answers to %d questions: %s", len(lines), len(want), out.String())
	}
	for i, w := range want {
		var got struct {
			Type, ID, Error string
			Probability     float64
			Estimate        struct{ Median, Lower, Upper float64 }
		}
		if err := json.Unmarshal([]byte(lines[i]), &got); err != nil {
			t.Fatal(err)
		}
		if w.says != "" {
			if got.Type != "refused" || !strings.Contains(got.Error, w.says) {
				t.Errorf("%s: %s", w.id, lines[i])
			}
			continue
		}
		if got.Type != "weighed" || got.ID != w.id || math.Abs(got.Probability/w.p-1) > 1e-12 || !(got.Estimate.Lower < got.Estimate.Median && got.Estimate.Median < got.Estimate.Upper) {
			t.Errorf("%s: %s, want %v", w.id, lines[i], w.p)
		}
	}
}

func TestWeighFigures(t *testing.T) {
	folder := t.TempDir()
	if err := os.WriteFile(filepath.Join(folder, "a.csv"), []byte("x,head\n1,33.1\n2,33.4\n3,33.2\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	for args, says := range map[string]string{
		"A=a.csv:head|mean(A) > 33": "Best estimate of the quantity 33.2333", "A=counted:3,of:120|proportion(A) > 0.01": "Probability",
		"A=n:12,mean:1,sd:1,lower:-3|capability(A) > 0.5": "Probability", "A=n:x|mean(A) > 1": `read "n:x"`, "A=a.csv:tail|mean(A) > 1": "no column",
		"A=n:3,mean:1,sd:0|mean(A) > 1": "spread is zero",
	} {
		figures, claim, _ := strings.Cut(args, "|")
		_, out, errOut := verb(t, folder, "weigh", claim, figures)
		if !strings.Contains(out+errOut, says) {
			t.Errorf("%s: want %q: %s%s", args, says, out, errOut)
		}
	}
}
