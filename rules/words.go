package rules

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"steelyard/rules/claim"
	"steelyard/rules/evidence"
)

// ReleaseNote stands wherever the program speaks of evidence.
const ReleaseNote = "This is statistical evidence, not a release decision; it does not replace the site's release procedures."

// Says is the claim of a rule in plain words, with the characteristic's label and unit:
// "delivery head: L4 is running above L1 by more than 0.4 kPa".
func (p *Plan) Says(rule string) string {
	r, ok := p.Rule(rule)
	if !ok {
		return rule
	}
	if r.Quiet != nil {
		return r.Quiet.says()
	}
	c, err := claim.Parse(r.Claim)
	if err == nil {
		c, err = c.Bind(p.Known, p.Processes())
	}
	if err != nil {
		return r.Claim
	}
	return p.Statement(c)
}

// Statement is a bound claim in plain words.
func (p *Plan) Statement(c *claim.Claim) string {
	t := teller{c: c}
	for _, process := range c.Processes {
		ch, line, ok := p.split(process)
		if !ok || (t.ch != nil && t.ch != ch && c.Kind != claim.Bias) {
			return fmt.Sprintf("%s holds", c)
		}
		t.ch = ch
		t.lines = append(t.lines, line)
	}
	if t.ch == nil {
		return fmt.Sprintf("%s holds", c)
	}
	return t.ch.Label() + ": " + t.statement()
}

// teller puts a claim about one characteristic into words.
type teller struct {
	c     *claim.Claim
	ch    *Characteristic
	lines []string
}

func (t *teller) line(term int) string { return t.lines[t.c.Terms[term].Process] }

func (t *teller) statement() string {
	switch t.c.Form {
	case claim.Ratio:
		return t.ratio()
	case claim.Absolute:
		return t.absolute()
	case claim.Largest, claim.Smallest:
		return t.extreme()
	}
	switch {
	case len(t.c.Terms) == 1 && t.c.Terms[0].Weight == 1:
		return t.single()
	case t.plainDifference():
		return t.difference()
	}
	return fmt.Sprintf("%s holds", t.c)
}

// plainDifference says whether the quantity is one line minus another.
func (t *teller) plainDifference() bool {
	return len(t.c.Terms) == 2 && t.c.Terms[0].Weight == 1 && t.c.Terms[1].Weight == -1
}

// noun is what the quantity of one line is called.
var noun = map[claim.Kind]string{
	claim.Mean: "the mean", claim.SD: "the spread (standard deviation)", claim.Next: "the next unit",
	claim.Outside: "the fraction outside the limits", claim.Capability: "the capability",
	claim.Median: "the median", claim.Proportion: "the proportion", claim.Rate: "the rate",
	claim.Bias: "the rig's offset",
}

func (t *teller) single() string { return t.subject() + " is " + t.bounds() }

// subject is the one quantity that the claim is about.
func (t *teller) subject() string {
	subject := fmt.Sprintf("on %s, %s", t.line(0), noun[t.c.Kind])
	if t.c.Kind == claim.Bias {
		subject = fmt.Sprintf("%s of %s", noun[t.c.Kind], t.line(0))
	}
	return subject
}

// bounds is the comparison with the bound, or bounds, of the claim.
func (t *teller) bounds() string {
	switch t.c.Test {
	case claim.Above:
		return "above " + t.amount(t.c.Bound)
	case claim.Below:
		return "below " + t.amount(t.c.Bound)
	}
	if t.c.Limits {
		return "within its limits"
	}
	switch {
	case math.IsInf(t.c.Low, -1):
		return "below " + t.amount(t.c.High)
	case math.IsInf(t.c.High, 1):
		return "above " + t.amount(t.c.Low)
	}
	return fmt.Sprintf("between %s and %s", number(t.c.Low), t.amount(t.c.High))
}

// amount is a value of the quantity with the unit it has.
func (t *teller) amount(x float64) string {
	switch t.c.Kind {
	case claim.Outside, claim.Proportion:
		return number(math.Round(x*1e10)/1e8) + " %"
	case claim.Capability:
		return number(x)
	case claim.Rate:
		return withUnit(number(x), t.ch.Unit)
	}
	return withUnit(number(x), t.ch.Unit)
}

// step is a difference of two values of the quantity with the unit it has.
func (t *teller) step(x float64) string {
	if t.c.Kind == claim.Proportion {
		return number(math.Round(x*1e10)/1e8) + " percentage points"
	}
	return t.amount(x)
}

func withUnit(text, unit string) string {
	if unit == "" || unit == "1" || unit == "-" {
		return text
	}
	return text + " " + unit
}

func (t *teller) difference() string {
	a, b := t.line(0), t.line(1)
	if t.c.Kind != claim.Mean {
		a, b = fmt.Sprintf("%s on %s", noun[t.c.Kind], a), "that on "+b
	}
	verb := "is running"
	if t.c.Kind != claim.Mean {
		verb = "is"
	}
	d := t.c.Bound
	switch {
	case t.c.Test == claim.Within:
		return fmt.Sprintf("%s minus %s is between %s and %s", a, b, number(t.c.Low), t.step(t.c.High))
	case d == 0 && t.c.Test == claim.Above:
		return fmt.Sprintf("%s %s above %s", a, verb, b)
	case d == 0:
		return fmt.Sprintf("%s %s below %s", a, verb, b)
	case t.c.Test == claim.Above && d > 0:
		return fmt.Sprintf("%s %s above %s by more than %s", a, verb, b, t.step(d))
	case t.c.Test == claim.Below && d < 0:
		return fmt.Sprintf("%s %s below %s by more than %s", a, verb, b, t.step(-d))
	case t.c.Test == claim.Below:
		return fmt.Sprintf("%s is not above %s by as much as %s", a, b, t.step(d))
	}
	return fmt.Sprintf("%s is not below %s by as much as %s", a, b, t.step(-d))
}

func (t *teller) absolute() string {
	if len(t.c.Terms) == 1 && t.c.Test != claim.Within {
		where := map[claim.Test]string{claim.Above: "more than %s away from 0", claim.Below: "within %s of 0"}[t.c.Test]
		return t.subject() + " is " + fmt.Sprintf(where, t.amount(t.c.Bound))
	}
	if !t.plainDifference() {
		return fmt.Sprintf("%s holds", t.c)
	}
	pair := fmt.Sprintf("%ss of %s and %s", noun[t.c.Kind], t.line(0), t.line(1))
	switch t.c.Test {
	case claim.Below:
		return fmt.Sprintf("%s agree within %s", pair, t.step(t.c.Bound))
	case claim.Above:
		return fmt.Sprintf("%s differ by more than %s", pair, t.step(t.c.Bound))
	}
	return fmt.Sprintf("%s differ by between %s and %s", pair, number(t.c.Low), t.step(t.c.High))
}

func (t *teller) ratio() string {
	what := fmt.Sprintf("%s on %s", noun[t.c.Kind], t.line(0))
	switch t.c.Test {
	case claim.Above:
		return fmt.Sprintf("%s is more than %s times that on %s", what, number(t.c.Bound), t.line(1))
	case claim.Below:
		return fmt.Sprintf("%s is less than %s times that on %s", what, number(t.c.Bound), t.line(1))
	}
	return fmt.Sprintf("%s is between %s and %s times that on %s",
		what, number(t.c.Low), number(t.c.High), t.line(1))
}

func (t *teller) extreme() string {
	var others []string
	for i := range t.c.Terms[1:] {
		others = append(others, t.line(i+1))
	}
	side, contrary := "above", "highest"
	d := t.c.Bound
	if t.c.Form == claim.Smallest {
		side, contrary, d = "below", "lowest", -d
	}
	beyond := (t.c.Test == claim.Above) == (t.c.Form == claim.Largest)
	what := fmt.Sprintf("%s on %s", noun[t.c.Kind], t.line(0))
	switch {
	case t.c.Test == claim.Within:
		return fmt.Sprintf("%s holds", t.c)
	case beyond && d == 0:
		return fmt.Sprintf("%s is %s every one of %s", what, side, strings.Join(others, ", "))
	case beyond && d > 0:
		return fmt.Sprintf("%s is %s every one of %s by more than %s", what, side, strings.Join(others, ", "), t.step(d))
	case !beyond && d == 0:
		return fmt.Sprintf("%s is not the %s of %s, %s", what, contrary, t.line(0), strings.Join(others, ", "))
	}
	return fmt.Sprintf("%s holds", t.c)
}

// Tell is what people are told of a change, as sentences: what, how sure, from how many
// units, how much, when and with which file, what to look at first, and what this is not.
// Times are given by the clock of zone.
func (p *Plan) Tell(c *Change, zone *time.Location) []string {
	says := p.Says(c.Rule)
	at := c.At.In(zone).Format("15:04:05 on 2006-01-02")
	var told []string
	if r, ok := p.Rule(c.Rule); ok && r.Quiet != nil && (c.Cause == Raised || c.Cause == Cleared) {
		return append(r.tellQuiet(c, zone), ReleaseNote)
	}
	switch c.Cause {
	case Raised:
		told = append(told, says+".", p.how(c)+".")
		told = append(told, fmt.Sprintf("It crossed %s at %s%s%s.", threshold(p, c), at, withFile(c), afterWithdrawal(c)))
		if r, ok := p.Rule(c.Rule); ok && r.FirstCheck != "" {
			told = append(told, "Look first at: "+strings.TrimSuffix(r.FirstCheck, ".")+".")
		}
	case Cleared:
		told = append(told, "No longer evident: "+says+".", p.how(c)+".")
		told = append(told, fmt.Sprintf("It fell to %s at %s%s; %s.", threshold(p, c), at, withFile(c), stands(c.To)))
	case TakenOut:
		told = append(told, "No longer evident: "+says+".")
		if c.Look != nil {
			told = append(told, p.how(c)+".")
		}
		told = append(told, fmt.Sprintf("A%d does not stand without what was withdrawn at %s%s; %s.",
			c.Alarm, at, withdrawnBy(c), stands(c.To)))
	case Answered:
		told = append(told, fmt.Sprintf("%s acknowledged A%d (%s) at %s; %s.", c.By, c.Alarm, says, at, stands(c.To)))
		if c.Note != "" {
			told = append(told, "Note: "+c.Note+".")
		}
	case Replaced:
		told = append(told, fmt.Sprintf("A%d (%s) was never acknowledged; a new alarm takes its place at %s.", c.Alarm, says, at))
	case PlanChanged:
		told = append(told, fmt.Sprintf("A%d (rule %q) is over: the rule was changed or taken out at %s.", c.Alarm, c.Rule, at))
	case EvidenceRestart:
		told = append(told, fmt.Sprintf("A%d (%s) is over: a new segment began at %s (%s); %s.",
			c.Alarm, says, at, orNone(c.Note), stands(c.To)))
	}
	return append(told, ReleaseNote)
}

func orNone(note string) string {
	if note == "" {
		return "no note"
	}
	return note
}

// stands says what is left to do in a state.
func stands(s AlarmState) string {
	switch s {
	case Unacknowledged:
		return "it waits for an acknowledgement"
	case Acked:
		return "the condition still stands"
	case Returned:
		return "it has returned to normal and still waits for an acknowledgement"
	}
	return "it is back to normal"
}

// withdrawnBy says who took batches out, and why; or which file took the place of another.
func withdrawnBy(c *Change) string {
	if c.By == "" {
		return withFile(c) + ", which takes the place of what was counted before"
	}
	return fmt.Sprintf(" by %s (%s)", c.By, orNone(c.Note))
}

// afterWithdrawal says that it took a withdrawal for an alarm to be raised.
func afterWithdrawal(c *Change) string {
	if c.By == "" {
		return ""
	}
	return fmt.Sprintf(", once batches were withdrawn by %s (%s)", c.By, orNone(c.Note))
}

func withFile(c *Change) string {
	if c.File == "" {
		return ""
	}
	return fmt.Sprintf(" with file %s of %s", c.File, c.Source)
}

// threshold is the level that a change passed.
func threshold(p *Plan, c *Change) string {
	r, ok := p.Rule(c.Rule)
	switch {
	case !ok:
		return "its threshold"
	case c.Cause == Raised:
		return number(r.Raise)
	}
	return number(r.Clear)
}

// how is the probability, what it rests on and the size of the quantity.
func (p *Plan) how(c *Change) string {
	if c.Look == nil {
		return "No probability was weighed"
	}
	odds := c.Look.Odds()
	var from []string
	for _, u := range c.Units {
		_, line, _ := p.split(u.Process)
		if line == "" {
			line = u.Process
		}
		from = append(from, fmt.Sprintf("%s units of %s", number(math.Round(u.N*10)/10), line))
	}
	text := fmt.Sprintf("Probability %s (%s), from %s", ProbabilityText(odds), OddsText(odds), list(from))
	if c.Quantity != nil {
		text += "; " + p.QuantityText(c.Rule, *c.Quantity)
	}
	for _, says := range p.tests(c) {
		text += "; " + says
	}
	return text
}

// tests says which test of a serial counts in the numbers of a change.
func (p *Plan) tests(c *Change) (says []string) {
	for _, u := range c.Units {
		ch, _, ok := p.split(u.Process)
		if !ok {
			continue
		}
		if text := ch.Retests.Says(); text != "" && !slices.Contains(says, text) {
			says = append(says, text)
		}
	}
	return says
}

// list joins parts as a sentence does.
func list(parts []string) string {
	if len(parts) < 2 {
		return strings.Join(parts, "")
	}
	return strings.Join(parts[:len(parts)-1], ", ") + " and " + parts[len(parts)-1]
}

// QuantityText is the best estimate of a rule's quantity with its 95 % interval, with the
// digits that the interval's width deserves.
func (p *Plan) QuantityText(rule string, q evidence.Interval) string {
	what, unit := "quantity", ""
	if r, ok := p.Rule(rule); ok {
		if c, err := claim.Parse(r.Claim); err == nil {
			what, unit = quantityName(c), p.quantityUnit(c)
		}
	}
	d := Decimals(q)
	return fmt.Sprintf("best estimate of the %s %s, 95 %% between %s and %s", what,
		withUnit(strconv.FormatFloat(q.Median, 'f', d, 64), unit),
		strconv.FormatFloat(q.Lower, 'f', d, 64), strconv.FormatFloat(q.Upper, 'f', d, 64))
}

func quantityName(c *claim.Claim) string {
	switch {
	case c.Form == claim.Ratio:
		return "ratio"
	case len(c.Terms) == 1:
		return strings.TrimPrefix(noun[c.Kind], "the ")
	case c.Form == claim.Absolute || len(c.Terms) == 2 || c.Form == claim.Largest || c.Form == claim.Smallest:
		return "difference"
	}
	return "contrast"
}

// quantityUnit is the unit of a claim's quantity, where it has one.
func (p *Plan) quantityUnit(c *claim.Claim) string {
	if c.Form == claim.Ratio || len(c.Processes) == 0 {
		return ""
	}
	switch c.Kind {
	case claim.Mean, claim.SD, claim.Next, claim.Median, claim.Bias, claim.Rate:
		if ch, _, ok := p.split(c.Processes[0]); ok {
			return ch.Unit
		}
	}
	return ""
}

// Decimals is how many places an interval deserves: two figures of its width.
func Decimals(q evidence.Interval) int {
	width := q.Upper - q.Lower
	if !(width > 0) || math.IsInf(width, 0) {
		return 6
	}
	return min(max(1-int(math.Floor(math.Log10(width))), 0), 12)
}

// ProbabilityText is a probability with enough digits that it is not mistaken for certainty.
func ProbabilityText(o evidence.Odds) string {
	p, q := o.Probability(), o.Contrary()
	switch {
	case q == 0:
		return "1"
	case q < 1e-6:
		return "1 - " + strconv.FormatFloat(q, 'e', 1, 64)
	case p < 1e-4:
		return strconv.FormatFloat(p, 'e', 1, 64)
	case q < 0.1:
		return strconv.FormatFloat(p, 'f', 1-int(math.Floor(math.Log10(q))), 64)
	}
	return strconv.FormatFloat(p, 'f', 4, 64)
}

// OddsText is the odds in words: "about 144 to 1", or "about 1 to 7" against.
func OddsText(o evidence.Odds) string {
	log10 := o.Log10()
	side := "about %s to 1"
	if log10 < 0 {
		log10, side = -log10, "about 1 to %s"
	}
	switch {
	case log10 >= 7 || math.IsInf(log10, 0) || math.IsNaN(log10):
		if log10 > 300 {
			return fmt.Sprintf(strings.TrimPrefix(side, "about "), "more than 10^300")
		}
		return fmt.Sprintf(side, fmt.Sprintf("10^%.0f", math.Floor(log10)))
	case log10 < 1:
		return fmt.Sprintf(side, strconv.FormatFloat(math.Pow(10, log10), 'f', 1, 64))
	}
	return fmt.Sprintf(side, thousands(math.Pow(10, log10)))
}

// thousands is a whole number of three significant figures, with thin groups of three.
func thousands(x float64) string {
	if x >= 1000 {
		unit := math.Pow(10, math.Floor(math.Log10(x))-2)
		x = math.Round(x/unit) * unit
	}
	digits := strconv.FormatFloat(x, 'f', 0, 64)
	for i := len(digits) - 3; i > 0; i -= 3 {
		digits = digits[:i] + " " + digits[i:]
	}
	return digits
}

// number is a float in the shortest form that reads back the same.
func number(x float64) string { return strconv.FormatFloat(x, 'g', -1, 64) }
