package claim

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"steelyard/rules/posterior"
)

// families are those whose processes have a quantity of each kind.
var families = map[Kind][]posterior.Family{
	Mean: {posterior.NormalFamily}, SD: {posterior.NormalFamily}, Capability: {posterior.NormalFamily},
	Bias: {posterior.NormalFamily}, Median: {posterior.LognormalFamily},
	Next:       {posterior.NormalFamily, posterior.LognormalFamily},
	Outside:    {posterior.NormalFamily, posterior.LognormalFamily},
	Proportion: {posterior.BinomialFamily}, Rate: {posterior.PoissonFamily},
}

// Bind checks a claim against the processes there are and fills in the limits of `within
// limits`. Names are all processes, from which an error offers the nearest. The result is a
// copy; the error is an *Error at the name that is wrong.
func (c *Claim) Bind(known func(process string) (Known, bool), names []string) (*Claim, error) {
	bound := *c
	for i, name := range c.Processes {
		k, ok := known(name)
		if !ok {
			return nil, &Error{Column: c.place(i), Read: fmt.Sprintf("the process %q, which is not configured", name),
				Expected: "a configured process", Nearest: Nearest(name, names)}
		}
		if !slices.Contains(families[c.Kind], k.Family) {
			return nil, &Error{Column: c.place(i), Read: fmt.Sprintf("%s of %s, whose family is %s", c.Kind, name, k.Family),
				Expected: "a quantity of that family: " + kindsOf(k.Family)}
		}
		none := math.IsInf(k.Lower, -1) && math.IsInf(k.Upper, 1)
		if none && (c.Limits || c.Kind == Outside || c.Kind == Capability) {
			return nil, &Error{Column: c.place(i), Read: fmt.Sprintf("%s, whose characteristic has no limits", name),
				Expected: "a characteristic with limits"}
		}
		if c.Limits {
			bound.Low, bound.High = k.Lower, k.Upper
		}
	}
	return &bound, nil
}

// place is the column of the first mention of a process.
func (c *Claim) place(i int) int {
	if i < len(c.places) {
		return c.places[i]
	}
	return 1
}

func kindsOf(f posterior.Family) string {
	var of []string
	for _, k := range kinds {
		if slices.Contains(families[k], f) {
			of = append(of, string(k))
		}
	}
	return strings.Join(of, ", ")
}

// This and Others are the names that stand for each line in turn, and for the rest of them,
// in a rule spread over the lines of a characteristic.
const (
	This   = "this"
	Others = "others"
)

// IsSpread says whether the claim speaks of this or others.
func (c *Claim) IsSpread() bool {
	return slices.Contains(c.Processes, This) || slices.Contains(c.Processes, Others)
}

// Spread writes the claim out for one line of a characteristic: `this` is that line, and
// `others` the equal-weight average of the rest or, within max and min, each of the rest.
func (c *Claim) Spread(characteristic, line string, lines []string) (*Claim, error) {
	out := *c
	out.Processes, out.Terms, out.places = nil, nil, nil
	add := func(process string, weight float64, column int) {
		i := slices.Index(out.Processes, process)
		if i < 0 {
			i = len(out.Processes)
			out.Processes, out.places = append(out.Processes, process), append(out.places, column)
		}
		if j := slices.IndexFunc(out.Terms, func(t Term) bool { return t.Process == i }); j >= 0 && c.Form != Ratio {
			out.Terms[j].Weight += weight
			return
		}
		out.Terms = append(out.Terms, Term{weight, i})
	}
	rest := slices.DeleteFunc(slices.Clone(lines), func(l string) bool { return l == line })
	for _, t := range c.Terms {
		column := c.place(t.Process)
		switch name := c.Processes[t.Process]; {
		case name == This:
			add(characteristic+"."+line, t.Weight, column)
		case name == Others && len(rest) == 0:
			return nil, &Error{Column: column, Read: Others, Expected: "a characteristic with more than one line"}
		case name == Others && (c.Form == Largest || c.Form == Smallest):
			for _, l := range rest {
				add(characteristic+"."+l, 1, column)
			}
		case name == Others && c.Form != Linear && c.Form != Absolute:
			return nil, &Error{Column: column, Read: Others, Expected: "others in a difference, or within max or min"}
		case name == Others:
			for _, l := range rest {
				add(characteristic+"."+l, t.Weight/float64(len(rest)), column)
			}
		default:
			add(name, t.Weight, column)
		}
	}
	if err := out.route(1); err != nil {
		return nil, err
	}
	return &out, nil
}

// Nearest is the word nearest to one that was read, by the number of letters to change; empty
// where none is near.
func Nearest(word string, words []string) string {
	best, least := "", 1+max(1, len(word)/3)
	for _, w := range words {
		if d := distance(strings.ToLower(word), strings.ToLower(w)); d < least {
			best, least = w, d
		}
	}
	return best
}

// distance is Damerau and Levenshtein's: letters to change, add, leave out, or swap with the
// next one.
func distance(a, b string) int {
	rows := make([][]int, len(a)+1)
	for i := range rows {
		rows[i] = make([]int, len(b)+1)
		rows[i][0] = i
	}
	for j := range rows[0] {
		rows[0][j] = j
	}
	for i := 1; i <= len(a); i++ {
		for j := 1; j <= len(b); j++ {
			change := rows[i-1][j-1]
			if a[i-1] != b[j-1] {
				change++
			}
			rows[i][j] = min(change, rows[i-1][j]+1, rows[i][j-1]+1)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				rows[i][j] = min(rows[i][j], rows[i-2][j-2]+1)
			}
		}
	}
	return rows[len(a)][len(b)]
}
