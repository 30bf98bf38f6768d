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
	// A claim about processes named this and others has not been through this check yet.
	if err := c.route(); err != nil {
		return nil, err
	}
	bound := *c
	for i, name := range c.Processes {
		k, ok := known(name)
		if !ok && (name == This || name == Others) {
			return nil, &Error{Column: c.place(i), Read: name,
				Expected: "a configured process: this and others belong to rules spread over the lines of a characteristic"}
		}
		if !ok {
			return nil, &Error{Column: c.place(i), Read: fmt.Sprintf("the process %q, which is not configured", name),
				Expected: "a configured process", Nearest: Nearest(name, names)}
		}
		if !slices.Contains(families[c.Kind], k.Family) {
			return nil, &Error{Column: c.place(i), Read: fmt.Sprintf("%s of %s, whose family is %s", c.Kind, name, k.Family),
				Expected: "a quantity of that family: " + kindsOf(k.Family)}
		}
		if k.Offset != (c.Kind == Bias) {
			return nil, &Error{Column: c.place(i), Read: fmt.Sprintf("%s of %s", c.Kind, name), Expected: offsetKind(k.Offset)}
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

// offsetKind says what a claim may say of a rig's offset, or of any other process.
func offsetKind(offset bool) string {
	if offset {
		return "bias: a rig has an offset and nothing else"
	}
	return "the name of a rig that measures reference parts"
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
