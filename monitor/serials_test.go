package monitor

import (
	"fmt"
	"strings"
	"testing"

	"github.com/rs/zerolog"

	"steelyard/monitor/config"
	"steelyard/rules"
)

// Situations 11 and 16: parts are tested again, in the same file and in a later one, with another
// value. The first test counts, or the last, or every one; that is said wherever a number stands.
func TestSituation11And16Retests(t *testing.T) {
	for count, want := range map[string]float64{"first": 12, "last": 12, "all": 24} {
		t.Run(count, func(t *testing.T) {
			cfg := plant(t, strings.Replace(twoLines, "plausible", "retests = \""+count+"\"\nserials = { units = 100 }\nplausible", 1))
			folder := cfg.Sources[0].Folder
			d := start(t, cfg)
			drop(t, folder, "l1.csv", rows("L1", 0, 12, 33))
			d.until("L1 is counted", func(s *Status) bool { return s.Sources[0].Counted == 1 })
			drop(t, folder, "a.csv", rows("L4", 0, 12, 34))
			d.until("L4 is counted", func(s *Status) bool { return s.Sources[0].Counted == 2 })
			d.stop()
			d = start(t, cfg)
			drop(t, folder, "b.csv", rows("L4", 0, 12, 36))
			st := d.until("the retests are taken in", func(s *Status) bool { return s.Sources[0].Counted == 1 })
			p := standingOf(st.Processes, "head.L4")
			mean := map[string]float64{"first": 34, "last": 36, "all": 35}[count]
			if p.Units != want || p.Estimate == nil || p.Estimate.Median < mean-0.3 || p.Estimate.Median > mean+0.3 || p.Taken != 24 {
				t.Errorf("%+v", p)
			}
			says := cfg.Plan.Characteristics[0].Retests.Says()
			x, err := d.Explain(1)
			if err != nil || x.Priors[0].Tests != says || !strings.Contains(asText(t, x.Steps), says) {
				t.Errorf("the explanation: %+v, %v", x, err)
			}
			log, err := d.DayLog("")
			if err != nil {
				t.Fatal(err)
			}
			if text := string(log.Markdown(cfg.Site.Zone)); strings.Count(text, says) < 3 || !strings.Contains(strings.Join(log.Remarks, " "), "head.L4: 12 of 12 measurements of file b.csv of rig") {
				t.Errorf("the day log says %s", text)
			}
		})
	}
}

// BenchmarkRetests is what a batch of 12 costs, committed, where 10,000 serials are known: none of
// it tested before, and one part in each batch tested before. Beside it, without serials.
func BenchmarkRetests(b *testing.B) {
	for _, c := range []struct {
		count string
		again int
	}{{"", 0}, {"first", 0}, {"first", 1}, {"last", 0}, {"last", 1}} {
		b.Run(fmt.Sprintf("count=%s/again=%d", c.count, c.again), func(b *testing.B) {
			cfg, err := config.Parse("config.toml", []byte(twoLines), b.TempDir())
			if err != nil {
				b.Fatal(err)
			}
			if c.count != "" {
				cfg.Plan.Characteristics[0].Retests = rules.Retests{Count: c.count, Units: 10000}
			}
			d, err := Open(cfg, Options{Log: zerolog.Nop()})
			if err != nil {
				b.Fatal(err)
			}
			defer d.Close()
			if err := d.Adopt(); err != nil {
				b.Fatal(err)
			}
			n := 0
			next := func() happening {
				batch := batchOf("head.L1", 33)
				for i := range batch.Rows.Serial {
					batch.Rows.Serial[i] = fmt.Sprintf("s%07d", n)
					n++
				}
				if c.again > 0 && n > 2000 {
					batch.Rows.Serial[0] = fmt.Sprintf("s%07d", n-1500)
				}
				return happening{event: rules.Event{Batch: batch}}
			}
			var known []happening
			for range 850 {
				known = append(known, next())
			}
			if _, _, err := d.commit(known); err != nil {
				b.Fatal(err)
			}
			for b.Loop() {
				if _, _, err := d.commit([]happening{next()}); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
