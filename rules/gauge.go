package rules

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strconv"
	"time"

	"steelyard/rules/posterior"
)

// Gauge is what is asked of the readings of a characteristic beside their values. The zero value
// asks nothing. All of it is for normal and lognormal processes.
type Gauge struct {
	// Censored says that a reading may lie beyond the gauge's limits (">200"). Such a reading is
	// counted, but it is no value: while more than CensoredAtMost of the readings remembered lie
	// beyond (a share, from 0 up to but not including 1), no claim about the values is weighed.
	Censored       bool    `json:"censored,omitempty"`
	CensoredAtMost float64 `json:"censored_at_most,omitempty"`

	// Stuck is how many times running one and the same value makes a gauge look stuck; 0: never,
	// else from 2 on. A batch that brings it there is remarked on or, with StuckHeld, refused.
	Stuck     int  `json:"stuck,omitempty"`
	StuckHeld bool `json:"stuck_held,omitempty"`

	// Far is how many standard deviations of its process the median of a batch may lie from the
	// process's mean (of logarithms, for lognormal); one that lies farther is refused. 0: any.
	Far float64 `json:"far,omitempty"`
}

// farNeeds is how many units a process must remember before a batch can be far from it.
const farNeeds = 12

func (g Gauge) check(f posterior.Family) error {
	switch {
	case g == Gauge{}:
		return nil
	case f != posterior.NormalFamily && f != posterior.LognormalFamily:
		return fmt.Errorf("a gauge's limits, one that is stuck and batches that lie far off are for normal and lognormal, not %s", f)
	case !(g.CensoredAtMost >= 0 && g.CensoredAtMost < 1):
		return fmt.Errorf("censored_at_most %v: a share from 0 up to 1 is expected", g.CensoredAtMost)
	case g.Stuck < 0 || g.Stuck == 1:
		return fmt.Errorf("stuck %d: a number of values from 2 on is expected", g.Stuck)
	case !(g.Far >= 0) || math.IsInf(g.Far, 0):
		return fmt.Errorf("far %v: a number of standard deviations above 0 is expected", g.Far)
	}
	return nil
}

// Bound is a reading of which the gauge could only say that it lies beyond a limit.
type Bound struct {
	Row   int     `json:"row"`   // index into Rows
	Limit float64 `json:"limit"` // in the characteristic's unit
	Above bool    `json:"above"` // the reading lies above the limit; else below
}

// Beyond says how many of the readings that a process remembers lie beyond the gauge's limits.
// Both numbers are fractional under a discount.
type Beyond struct {
	N      float64 `json:"n"`
	Of     float64 `json:"of"`
	AtMost float64 `json:"at_most"` // the share up to which claims about the values are weighed
}

// Share is N over Of; 0 where nothing is remembered.
func (b *Beyond) Share() float64 {
	if b.Of == 0 {
		return 0
	}
	return b.N / b.Of
}

// Aside says that rows of a file were left out as declared, and why.
type Aside struct {
	Kind  string `json:"kind"`  // Fault or Variant
	Text  string `json:"text"`  // the fault code, or the variant, as it was written
	Rows  int    `json:"rows"`  // how many
	First int    `json:"first"` // line of the first of them
	Last  int    `json:"last"`  // and of the last
}

// Kinds of rows left out.
const (
	Fault   = "fault code" // the rig was at fault, not the unit
	Variant = "variant"    // the row is about a variant that is not weighed
)

// gauge is what a process keeps beside its memory for what is asked of its gauge.
type gauge struct {
	Asked    Gauge     `json:"asked"`
	Readings *readings `json:"readings,omitempty"` // nil where nothing can be censored
	Last     float64   `json:"last"`
	Same     int       `json:"same"` // the newest so many values are Last; counted where Stuck is asked
}

// readings remember, as the process does its values, which readings lay beyond the gauge's limits:
// each is one of one that does or does not. In a window of units they are the last so many readings.
type readings struct{ *posterior.Memory }

// savedReadings are readings as they are kept.
type savedReadings struct {
	Remember posterior.Remember `json:"remember"`
	Memory   []byte             `json:"memory"`
}

func newReadings(r posterior.Remember) *readings {
	return &readings{posterior.NewMemory(posterior.BinomialFamily, r)}
}

// MarshalJSON is for encoding/json.
func (r *readings) MarshalJSON() ([]byte, error) {
	memory, err := r.AppendBinary(nil)
	if err != nil {
		return nil, err
	}
	return json.Marshal(savedReadings{r.Remembers(), memory})
}

// UnmarshalJSON is for encoding/json.
func (r *readings) UnmarshalJSON(text []byte) error {
	var saved savedReadings
	if err := json.Unmarshal(text, &saved); err != nil {
		return err
	}
	*r = *newReadings(saved.Remember)
	return r.UnmarshalBinary(saved.Memory)
}

// asked is what the process keeps its gauge for.
func (p *process) asked() Gauge {
	if p.Gauge == nil {
		return Gauge{}
	}
	return p.Gauge.Asked
}

// fitGauge makes the process keep what its characteristic asks for now, from now on.
func (p *process) fitGauge(c *Characteristic) {
	if p.asked() == c.Gauge {
		return
	}
	if (c.Gauge == Gauge{}) {
		p.Gauge = nil
		return
	}
	fit := &gauge{Asked: c.Gauge}
	if p.Gauge != nil {
		fit.Last, fit.Same = p.Gauge.Last, p.Gauge.Same
		fit.Readings = p.Gauge.Readings
	}
	switch {
	case !c.Gauge.Censored:
		fit.Readings = nil
	case fit.Readings == nil:
		fit.Readings = newReadings(p.Remember)
	}
	p.Gauge = fit
}

// startGauge forgets the readings of the segment before. What was kept of them is left as it is: it
// may be that of a process which is only tried.
func (p *process) startGauge() {
	if p.Gauge == nil {
		return
	}
	fresh := &gauge{Asked: p.Gauge.Asked}
	if p.Gauge.Readings != nil {
		fresh.Readings = newReadings(p.Remember)
	}
	p.Gauge = fresh
}

// pass lets time go on; it reports whether anything has left a window of time.
func (p *process) pass(now time.Time) bool {
	gone := p.memory.Pass(now.UnixNano())
	if p.Gauge != nil && p.Gauge.Readings != nil && p.Gauge.Readings.Pass(now.UnixNano()) {
		return true
	}
	return gone
}

// gauged takes a series into what is kept for the gauge. A sentence says that the gauge looks stuck,
// when it begins to.
func (p *process) gauged(e *Event, series *Series) (remark string) {
	if p.Gauge == nil {
		return ""
	}
	if p.Gauge.Readings != nil {
		p.readAll(e, series)
	}
	if n := p.Gauge.Asked.Stuck; n > 0 {
		r := p.Gauge.run(series.Value)
		p.Gauge.Last, p.Gauge.Same = r.last, r.same
		if r.began {
			return fmt.Sprintf("%s: source %s, file %s: one value has come %d times running (%s); the gauge may be stuck",
				series.Process, e.Batch.Source, e.Batch.File, r.longest, number(r.value))
		}
	}
	return ""
}

// run is what equal values come to.
type run struct {
	last    float64 // the newest value
	same    int     // the newest so many are equal
	longest int     // of the runs among the values taken
	value   float64 // of the longest
	began   bool    // a run has become long enough to look stuck
}

// run follows equal values on through more of them.
func (g *gauge) run(values []float64) run {
	r := run{last: g.Last, same: g.Same}
	for _, v := range values {
		if r.same == 0 || v != r.last {
			r.last, r.same = v, 0
		}
		if r.same++; r.same > r.longest {
			r.longest, r.value = r.same, v
		}
		r.began = r.began || r.same == g.Asked.Stuck
	}
	return r
}

// readAll takes the values and the readings beyond the limits, in the order of their rows.
func (p *process) readAll(e *Event, series *Series) {
	n := len(series.Value) + len(series.Beyond)
	beyond, at := make([]float64, 0, n), make([]int64, 0, n)
	now := e.At.UnixNano()
	add := func(isBeyond float64, row int) {
		t := now
		if e.Batch.Rows.Time != nil {
			t = e.Batch.Rows.Time[row]
		}
		if p.SegmentFrom.IsZero() || t >= p.SegmentFrom.UnixNano() {
			beyond, at = append(beyond, isBeyond), append(at, min(t, now))
		}
		if measured := time.Unix(0, t).UTC(); isBeyond == 1 && measured.After(p.LastMeasured) {
			p.LastMeasured = measured
		}
	}
	rest := series.Beyond
	for i := range series.Value {
		for len(rest) > 0 && rest[0].Row < series.Row[i] {
			add(1, rest[0].Row)
			rest = rest[1:]
		}
		add(0, series.Row[i])
	}
	for _, b := range rest {
		add(1, b.Row)
	}
	p.Gauge.Readings.AddBatch(beyond, nil, at)
}

// acceptsBeyond refuses readings beyond the limits of a gauge of which none were declared.
func (s *State) acceptsBeyond(b *Batch, series *Series) error {
	p := s.processes[series.Process]
	for _, r := range series.Beyond {
		if p.Gauge == nil || p.Gauge.Readings == nil {
			return fmt.Errorf("source %s, file %s: a reading of %s lies beyond the gauge's limits, which its characteristic does not provide for",
				b.Source, b.File, series.Process)
		}
		if r.Row < 0 || r.Row >= len(b.Rows.Line) {
			return fmt.Errorf("source %s, file %s: a reading of %s stands in row %d of %d", b.Source, b.File, series.Process, r.Row, len(b.Rows.Line))
		}
		if err := p.Family.Accepts(r.Limit, 1); err != nil {
			return fmt.Errorf("source %s, file %s, line %d: %w", b.Source, b.File, b.Rows.Line[r.Row], err)
		}
	}
	return nil
}

// Trust makes the state refuse no batch as unlikely any more: for a drive that leaves out some of what
// was counted when the batch was, or takes it a unit at a time.
func (s *State) Trust() { s.trusting = true }

// unlikely refuses a batch that is declared to be held: of a gauge that is stuck, or far outside
// everything its process remembers.
func (s *State) unlikely(b *Batch) error {
	if s.trusting {
		return nil
	}
	for i := range b.Series {
		series := &b.Series[i]
		p := s.processes[series.Process]
		if p.Gauge == nil || len(series.Value) == 0 {
			continue
		}
		asked := p.Gauge.Asked
		if r := p.Gauge.run(series.Value); asked.StuckHeld && r.longest >= asked.Stuck {
			return fmt.Errorf("source %s, file %s: %s reads one value %d times running (%s); fewer than %d are expected (\"stuck\"): look at the gauge",
				b.Source, b.File, series.Process, r.longest, number(r.value), asked.Stuck)
		}
		if away, median, n := p.away(series.Value); asked.Far > 0 && away > asked.Far {
			return fmt.Errorf("source %s, file %s: the median of its %d values of %s is %s, which is %s standard deviations from the mean of the %s units remembered; "+
				"at most %s are expected (\"far\")", b.Source, b.File, len(series.Value), series.Process, number(median),
				strconv.FormatFloat(away, 'f', 1, 64), number(n), number(asked.Far))
		}
	}
	return nil
}

// away is how many standard deviations of the process the median of values lies from its mean; 0
// while too little is remembered to say, or its spread is zero.
func (p *process) away(values []float64) (deviations, median, units float64) {
	sums := p.memory.Sums()
	if sums.N < farNeeds || !(sums.SS > 0) {
		return 0, 0, sums.N
	}
	sorted := slices.Sorted(slices.Values(values))
	median = sorted[(len(sorted)-1)/2] // the lower of two in the middle: a value that was read
	at := posterior.Sums{}.Add(p.Family, median, 1).Mean
	return math.Abs(at-sums.Mean) / math.Sqrt(sums.SS/(sums.N-1)), median, sums.N
}

// beyond says how many readings remembered lie beyond the limits; nil where none can.
func (p *process) beyond() *Beyond {
	if p.Gauge == nil || p.Gauge.Readings == nil {
		return nil
	}
	sums := p.Gauge.Readings.Sums()
	return &Beyond{N: sums.Total, Of: sums.Exposure, AtMost: p.Gauge.Asked.CensoredAtMost}
}

// same is how many of the newest values are one and the same, where that is enough to look stuck.
func (p *process) same() int {
	if p.Gauge == nil || p.Gauge.Asked.Stuck == 0 || p.Gauge.Same < p.Gauge.Asked.Stuck {
		return 0
	}
	return p.Gauge.Same
}

// censored says why a claim about processes can't be weighed on their values: too many readings
// lie beyond the limits of the gauge, and what is left of them would be biased. "" where it can.
func (s *State) censored(processes []string) string {
	for _, name := range processes {
		b := s.processes[name].beyond()
		if b == nil || b.Share() <= b.AtMost {
			continue
		}
		return fmt.Sprintf("%s: %s of the %s readings remembered lie beyond the gauge's limits (%s %%), and no more than %s %% may, "+
			"as what the others say of it would be biased (\"censored_at_most\")",
			name, number(math.Round(b.N*10)/10), number(math.Round(b.Of*10)/10), percent(b.Share()), percent(b.AtMost))
	}
	return ""
}

func percent(share float64) string { return strconv.FormatFloat(share*100, 'g', 3, 64) }
