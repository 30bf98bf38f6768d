package main

import (
	"bufio"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"

	"steelyard/rules"
	"steelyard/rules/evidence"
)

type weighVerb struct {
	Claim   string   `arg:"" optional:"" help:"The claim: \"mean(B) - mean(A) > 0.5\"."`
	Figures []string `arg:"" optional:"" help:"What is known of each process: A=n:12,mean:10.2,sd:0.31, A=counted:3,of:120, A=count:17,exposure:240, A=n:9,log_mean:1.2,log_sd:0.3, with lower: and upper: for limits; or A=file.csv:column."`
}

// Run answers one question on the command line or, with --json, the questions on standard input,
// one a line.
func (v *weighVerb) Run(d *desk) error {
	if v.Claim == "" {
		if !d.JSON {
			return errors.New(`a claim is expected, as in: steelyard weigh "mean(B) - mean(A) > 0.5" A=n:12,mean:10.2,sd:0.31 B=n:15,mean:10.9,sd:0.28`)
		}
		return d.answerLines(os.Stdin)
	}
	q := rules.Question{Claim: v.Claim, Processes: map[string]rules.QuestionProcess{}}
	for _, text := range v.Figures {
		name, p, err := figures(text)
		if err != nil {
			return err
		}
		q.Processes[name] = p
	}
	if d.JSON {
		return d.object(answer(&q))
	}
	w, err := q.Weigh()
	if err != nil {
		return err
	}
	d.line("%s", w.Claim)
	d.line("Probability %s, %s; the contrary %s.", rules.ProbabilityText(w.Odds), rules.OddsText(w.Odds),
		rules.ProbabilityText(evidence.Odds{LogFor: w.Odds.LogAgainst, LogAgainst: w.Odds.LogFor}))
	d.line("Best estimate of the quantity %.6g, 95 %% between %.6g and %.6g.", w.Quantity.Median, w.Quantity.Lower, w.Quantity.Upper)
	d.line("\n%s\n\n%s", beam(w.Odds), rules.ReleaseNote)
	return nil
}

// answerLines answers JSON lines in order; a bad one is refused and does not stop the rest.
func (d *desk) answerLines(in io.Reader) error {
	lines := bufio.NewScanner(in)
	lines.Buffer(nil, 64<<20)
	for lines.Scan() {
		if strings.TrimSpace(lines.Text()) == "" {
			continue
		}
		var q rules.Question
		decoder := json.NewDecoder(strings.NewReader(lines.Text()))
		decoder.DisallowUnknownFields()
		var reply any
		if err := decoder.Decode(&q); err != nil {
			reply = refused{"refused", q.ID, "the line is not a question: " + err.Error()}
		} else {
			reply = answer(&q)
		}
		if err := d.object(reply); err != nil {
			return err
		}
	}
	return lines.Err()
}

type weighed struct {
	Type        string   `json:"type"`
	ID          string   `json:"id"`
	Probability exact    `json:"probability"`
	Contrary    exact    `json:"contrary"`
	Log10Odds   exact    `json:"log10_odds"`
	Estimate    estimate `json:"estimate"`
}

type estimate struct {
	Median exact `json:"median"`
	Lower  exact `json:"lower"`
	Upper  exact `json:"upper"`
}

type refused struct {
	Type  string `json:"type"`
	ID    string `json:"id"`
	Error string `json:"error"`
}

// exact is a number with 17 significant digits; null where it is infinite.
type exact float64

func (x exact) MarshalJSON() ([]byte, error) {
	if math.IsInf(float64(x), 0) || math.IsNaN(float64(x)) {
		return []byte("null"), nil
	}
	return strconv.AppendFloat(nil, float64(x), 'e', 16, 64), nil
}

func answer(q *rules.Question) any {
	w, err := q.Weigh()
	if err != nil {
		return refused{"refused", q.ID, err.Error()}
	}
	return weighed{"weighed", q.ID, exact(w.Odds.Probability()), exact(w.Odds.Contrary()), exact(w.Odds.Log10()),
		estimate{exact(w.Quantity.Median), exact(w.Quantity.Lower), exact(w.Quantity.Upper)}}
}

// figures reads NAME=key:value,... or NAME=file.csv:column.
func figures(text string) (name string, p rules.QuestionProcess, err error) {
	name, rest, ok := strings.Cut(text, "=")
	if !ok || name == "" {
		return "", p, fmt.Errorf("read %q; NAME=n:12,mean:10.2,sd:0.31 or NAME=file.csv:column is expected", text)
	}
	if file, column, ok := cutLast(rest, ":"); ok && !strings.Contains(rest, ",") && isFile(file) {
		p.Values, err = columnOf(file, column)
		return name, p, err
	}
	p.Summary = &rules.Summary{}
	fields := map[string]**float64{
		"n": &p.Summary.N, "mean": &p.Summary.Mean, "sd": &p.Summary.SD, "log_mean": &p.Summary.LogMean, "log_sd": &p.Summary.LogSD,
		"counted": &p.Summary.Counted, "of": &p.Summary.Of, "count": &p.Summary.Count, "exposure": &p.Summary.Exposure,
		"lower": &p.Limits.Lower, "upper": &p.Limits.Upper,
	}
	for _, part := range strings.Split(rest, ",") {
		key, value, _ := strings.Cut(part, ":")
		field, known := fields[key]
		x, err := strconv.ParseFloat(value, 64)
		if !known || err != nil {
			return "", p, fmt.Errorf("%s: read %q; a part such as n:12, mean:10.2 or counted:3 is expected", name, part)
		}
		*field = &x
	}
	switch {
	case p.Summary.Counted != nil:
		p.Family = "binomial"
	case p.Summary.Count != nil:
		p.Family = "poisson"
	case p.Summary.LogMean != nil:
		p.Family = "lognormal"
	}
	return name, p, nil
}

func cutLast(s, sep string) (before, after string, found bool) {
	i := strings.LastIndex(s, sep)
	if i < 0 {
		return s, "", false
	}
	return s[:i], s[i+len(sep):], true
}

func isFile(name string) bool {
	info, err := os.Stat(name)
	return err == nil && info.Mode().IsRegular()
}

// columnOf reads the numbers of a column of a CSV file with a header.
func columnOf(file, column string) ([]float64, error) {
	f, err := os.Open(file)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		return nil, fmt.Errorf("%s: %w", file, err)
	}
	if len(rows) == 0 || !slices.Contains(rows[0], column) {
		return nil, fmt.Errorf("%s has no column %q in its header", file, column)
	}
	at := slices.Index(rows[0], column)
	values := []float64{}
	for i, row := range rows[1:] {
		x, err := strconv.ParseFloat(strings.TrimSpace(row[at]), 64)
		if err != nil {
			return nil, fmt.Errorf("%s, row %d, column %q: read %q; a number is expected", file, i+2, column, row[at])
		}
		values = append(values, x)
	}
	return values, nil
}

// beam draws the odds: a scale from a million to 1 against, over even, to a million to 1 for,
// with the weight where they are.
func beam(o evidence.Odds) string {
	const half = 30 // columns for six powers of ten
	at := int(math.Round(math.Max(-1, math.Min(1, o.Log10()/6)) * half))
	scale := []rune(strings.Repeat("─", 2*half+1))
	for power := -6; power <= 6; power += 2 {
		scale[half+power*half/6] = '┬'
	}
	marks := "1 to 10^6 " + strings.Repeat(" ", half-12) + "even" + strings.Repeat(" ", half-12) + " 10^6 to 1"
	return strings.Repeat(" ", half+at) + "▼\n" + string(scale) + "\n" + marks
}
