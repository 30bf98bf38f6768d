package config

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"time"
	_ "time/tzdata" // zones are known on machines that have none installed

	"steelyard/rules"
	"steelyard/rules/claim"
)

// Load reads a configuration file. Paths in it are relative to its own folder. The error is
// Faults where the file can be read but is wrong.
func Load(name string) (*Config, error) {
	text, err := os.ReadFile(name)
	if err != nil {
		return nil, err
	}
	base, err := filepath.Abs(filepath.Dir(name))
	if err != nil {
		return nil, err
	}
	return Parse(name, text, base)
}

// Parse reads the text of a configuration. Name is what it is called in errors; base is the
// folder that relative paths start from.
func Parse(name string, text []byte, base string) (*Config, error) {
	src := newSourceText(name, text)
	raw, faults := decode(src, text)
	if raw == nil {
		return nil, faults
	}
	sum := sha256.Sum256(text)
	c := &checker{src: src, at: places(src, text), base: base, faults: faults}
	c.cfg = &Config{File: name, Digest: hex.EncodeToString(sum[:])}
	c.site(&raw.Site)
	c.characteristics(raw)
	c.feeds(raw)
	c.sources(raw)
	c.marks(raw)
	c.retestsHaveSerials()
	c.censored(raw)
	c.references(raw)
	c.lines(raw)
	c.rules(raw)
	if len(c.faults) > 0 {
		return nil, c.faults.sorted()
	}
	return c.cfg, nil
}

// checker turns what the file holds into a Config, collecting every fault.
type checker struct {
	src    *sourceText
	at     map[string]place
	base   string
	cfg    *Config
	faults Faults
}

// fault notes a fault at a key; a key that is not in the file is shown at the nearest table
// that is.
func (c *checker) fault(key, nearest, expected, what string, args ...any) {
	where, ok := c.at[key]
	for parent := key; !ok && parent != ""; {
		parent = parent[:max(strings.LastIndexByte(parent, '.'), 0)]
		where, ok = c.at[parent]
	}
	if !ok {
		where = place{1, 1}
	}
	c.faults = append(c.faults, &Fault{
		File: c.src.name, Line: where.line, Column: where.column, Key: key, Text: c.src.line(where.line),
		What: fmt.Sprintf(what, args...), Expected: expected, Nearest: nearest,
	})
}

// has says whether the key stands in the file.
func (c *checker) has(key string) bool { _, ok := c.at[key]; return ok }

// inOrder are the names of the tables under a prefix, in the order of the file.
func inOrder[T any](c *checker, prefix string, tables map[string]T) []string {
	var names []string
	for name := range tables {
		names = append(names, name)
	}
	slices.SortFunc(names, func(a, b string) int {
		if d := c.at[prefix+a].line - c.at[prefix+b].line; d != 0 {
			return d
		}
		return strings.Compare(a, b)
	})
	return names
}

func (c *checker) site(r *rawSite) {
	s := &c.cfg.Site
	s.Name = r.Name
	if r.Name == "" {
		c.fault("site.name", "", `a name such as "Tessmoor Pumpworks"`, "the site has no name")
	}
	s.Zone = c.zone("site.time_zone", r.TimeZone, time.UTC)
	s.DayStarts = c.clock("site.day_starts", r.DayStarts)
	s.State = c.path("site.state", r.State, "state")
	s.DayLogs = c.path("site.day_logs", r.DayLogs, "daylogs")
	s.DiskWarning = c.size("site.disk_warning", r.DiskWarning, 1e9)
	c.cfg.Plan.Site = r.Name
}

func (c *checker) path(key, value, def string) string {
	if value == "" {
		value = def
	}
	if strings.ContainsRune(value, 0) {
		c.fault(key, "", "a path", "the path %q holds a zero byte", value)
	}
	if !filepath.IsAbs(value) {
		value = filepath.Join(c.base, value)
	}
	return filepath.Clean(value)
}

func (c *checker) zone(key, name string, def *time.Location) *time.Location {
	if name == "" {
		return def
	}
	zone, err := time.LoadLocation(name)
	if err != nil || name == "Local" {
		c.fault(key, "", `a zone of the IANA database, such as "Europe/Lisbon"`, "there is no time zone %q", name)
		return def
	}
	return zone
}

func (c *checker) clock(key, text string) Clock {
	if text == "" {
		return Clock{}
	}
	t, err := time.Parse("15:04", text)
	if err != nil {
		c.fault(key, "", `a time of day such as "06:00"`, "read %q", text)
	}
	return Clock{t.Hour(), t.Minute()}
}

func (c *checker) duration(key, text string, def, least, most time.Duration) time.Duration {
	if text == "" {
		return def
	}
	d, err := time.ParseDuration(text)
	if err != nil || d < least || d > most {
		c.fault(key, "", fmt.Sprintf(`a time such as "2s" or "500ms", from %s to %s`, least, most), "read %q", text)
		return def
	}
	return d
}

// size reads a number of bytes such as "64MB".
func (c *checker) size(key, text string, def int64) int64 {
	if text == "" {
		return def
	}
	for _, unit := range []struct {
		name  string
		bytes int64
	}{{"kB", 1e3}, {"MB", 1e6}, {"GB", 1e9}, {"B", 1}} {
		digits, ok := strings.CutSuffix(text, unit.name)
		if !ok {
			continue
		}
		if n, err := strconv.ParseInt(strings.TrimSpace(digits), 10, 64); err == nil && n > 0 && n <= math.MaxInt64/unit.bytes {
			return n * unit.bytes
		}
	}
	c.fault(key, "", `a size such as "64MB" (B, kB, MB or GB)`, "read %q", text)
	return def
}

func (c *checker) finite(key string, x float64) bool {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		c.fault(key, "", "a finite number", "read %v", x)
		return false
	}
	return true
}

// name refuses names that can't stand in a process's name or a key.
func (c *checker) name(key, name string) {
	for _, r := range name {
		if r < ' ' || r == '"' || r == '\\' || r == '\x7f' {
			c.fault(key, "", "letters, digits, blanks and signs", "the name %q holds a character that names can't have", name)
			return
		}
	}
	if name == "" || name == claim.This || name == claim.Others {
		c.fault(key, "", "another name", "the name %q is not allowed", name)
	}
}

func (c *checker) feeds(raw *rawFile) {
	paths := map[string]string{}
	for _, name := range inOrder(c, "feed.", raw.Feed) {
		f, key := raw.Feed[name], "feed."+name
		c.name(key, name)
		if f.Kind != "file" {
			c.fault(key+".kind", claim.Nearest(f.Kind, []string{"file"}), `"file"`, "there is no kind of feed %q", f.Kind)
		}
		if f.Path == "" {
			c.fault(key+".path", "", `a file such as "alerts/leads.jsonl"`, "the feed has no path")
		}
		p := c.path(key+".path", f.Path, "alerts.jsonl")
		if other, ok := paths[p]; ok {
			c.fault(key+".path", "", "a file of its own", "the feed %q writes to the same file", other)
		}
		paths[p] = name
		c.cfg.Feeds = append(c.cfg.Feeds, Feed{Name: name, Kind: f.Kind, Path: p})
	}
}

func (c *checker) rules(raw *rawFile) {
	seen := map[string]bool{}
	for i := range raw.Rule {
		r, key := &raw.Rule[i], fmt.Sprintf("rule[%d]", i)
		for _, rule := range c.rule(key, r) {
			if seen[rule.Name] {
				c.fault(key+".name", "", "a name that no other rule has", "the name %q stands twice", rule.Name)
			}
			seen[rule.Name] = true
			c.cfg.Plan.Rules = append(c.cfg.Plan.Rules, rule)
		}
	}
}

// rule checks one [[rule]], and writes it out over the lines where it is spread.
func (c *checker) rule(key string, r *rawRule) []rules.Rule {
	if r.Name == "" {
		c.fault(key+".name", "", "a name", "the rule has no name")
	}
	out := rules.Rule{Name: r.Name, Priority: r.Priority, Tell: r.Tell, FirstCheck: r.FirstCheck, Raise: 0.99, Clear: 0.80}
	c.thresholds(key, r, &out)
	if out.Priority == "" {
		out.Priority = "medium"
	}
	priorities := []string{"low", "medium", "high"}
	if !slices.Contains(priorities, out.Priority) {
		c.fault(key+".priority", claim.Nearest(out.Priority, priorities), `"low", "medium" or "high"`, "read %q", out.Priority)
	}
	c.tell(key, r)
	if c.has(key + ".quiet") {
		return c.quiet(key, out, r)
	}
	c.onlyQuiet(key)
	parsed, err := claim.Parse(r.Claim)
	if err != nil {
		c.claimFault(key+".claim", err)
		return nil
	}
	if r.Spread == "" {
		return c.bindRule(key, out, parsed, r)
	}
	ch, ok := c.cfg.Plan.Characteristic(r.Spread)
	if !ok {
		c.fault(key+".spread", claim.Nearest(r.Spread, c.characteristicNames()), "a characteristic", "there is no characteristic %q", r.Spread)
		return nil
	}
	if !parsed.IsSpread() {
		c.fault(key+".claim", "", "`this`, and `others` where wanted, as in mean(this) - mean(others) > 0.8", "the rule is spread and its claim speaks of neither this nor others")
		return nil
	}
	var all []rules.Rule
	for _, line := range ch.Lines {
		one, err := parsed.Spread(ch.Name, line, ch.Lines)
		if err != nil {
			c.claimFault(key+".claim", err)
			return nil
		}
		spread := out
		spread.Name, spread.SpreadOf = fmt.Sprintf("%s (%s)", r.Name, line), r.Name
		all = append(all, c.bindRule(key, spread, one, r)...)
	}
	return all
}

func (c *checker) bindRule(key string, out rules.Rule, parsed *claim.Claim, r *rawRule) []rules.Rule {
	bound, err := parsed.Bind(c.cfg.Plan.Known, c.cfg.Plan.Processes())
	if err != nil {
		c.claimFault(key+".claim", err)
		return nil
	}
	out.Claim = bound.String()
	c.least(key+".least_units", r.LeastUnits, bound, &out)
	return []rules.Rule{out}
}

func (c *checker) thresholds(key string, r *rawRule, out *rules.Rule) {
	if r.Raise != nil {
		out.Raise = *r.Raise
	}
	if r.Clear != nil {
		out.Clear = *r.Clear
	}
	if !(out.Raise > 0.5 && out.Raise < 1) {
		c.fault(key+".raise", "", "a probability above 0.5 and below 1", "read %v", out.Raise)
	} else if !(out.Clear > 0 && out.Clear < out.Raise) {
		c.fault(key+".clear", "", fmt.Sprintf("a probability above 0 and below raise, which is %v", out.Raise), "read %v", out.Clear)
	}
}

func (c *checker) tell(key string, r *rawRule) {
	var names []string
	for _, f := range c.cfg.Feeds {
		names = append(names, f.Name)
	}
	for _, name := range r.Tell {
		if !slices.Contains(names, name) {
			c.fault(key+".tell", claim.Nearest(name, names), "the name of a feed", "there is no feed %q", name)
		}
	}
	if !c.has(key + ".tell") {
		c.fault(key+".tell", "", "names of feeds, or tell = [] where nobody is to be told", "the rule does not say who is told")
	}
}

// least reads least_units: a number, or numbers by process.
func (c *checker) least(key string, v any, bound *claim.Claim, out *rules.Rule) {
	out.LeastUnits = 12
	number := func(key string, v any) int {
		n, ok := v.(int64)
		if !ok || n < 2 || n > 1e9 {
			c.fault(key, "", "a whole number of units from 2 on", "read %v", v)
			return 12
		}
		return int(n)
	}
	switch v := v.(type) {
	case nil:
	case map[string]any:
		out.LeastOf = map[string]int{}
		for name, n := range v {
			if !slices.Contains(bound.Processes, name) && out.SpreadOf == "" {
				c.fault(key, claim.Nearest(name, bound.Processes), "a process of the claim", "the claim does not speak of %q", name)
			}
			out.LeastOf[name] = number(key, n)
		}
	default:
		out.LeastUnits = number(key, v)
	}
}

// claimFault places an error of the claim language inside the file: the value of the key
// begins with a quote, and a claim has no character that needs an escape but quotes.
func (c *checker) claimFault(key string, err error) {
	e, ok := err.(*claim.Error)
	if !ok {
		c.fault(key, "", "a claim", "%v", err)
		return
	}
	if !c.has(key) {
		c.fault(key, "", "a claim such as mean(head.L4) - mean(head.L1) > 0.4", "the rule has no claim")
		return
	}
	c.fault(key, e.Nearest, e.Expected, "read %s", e.Read)
	f := c.faults[len(c.faults)-1]
	runes := []rune(f.Text)
	at := f.Column - 1
	for n := 0; at < len(runes); at++ {
		if n++; n > e.Column {
			break
		}
		if runes[at] == '\\' {
			at++
		}
	}
	f.Column = min(at+1, len(runes)+1)
}

func (c *checker) characteristicNames() []string {
	var names []string
	for _, ch := range c.cfg.Plan.Characteristics {
		names = append(names, ch.Name)
	}
	return names
}

// pattern refuses a pattern that path.Match can't read.
func (c *checker) pattern(key, p string) string {
	if p == "" {
		return "*.csv"
	}
	if _, err := path.Match(p, "x"); err != nil || strings.Contains(p, "/") {
		c.fault(key, "", `a pattern of file names such as "*.csv"`, "read %q", p)
	}
	return p
}
