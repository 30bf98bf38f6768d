package main

import (
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"time"
)

// demoRig is one invented rig: it writes a file for each batch of its lines, in its own way.
type demoRig struct {
	name   string
	lines  []string
	serial map[string]int
	write  func(rows []demoRow) string // a file's content
}

// demoRow is one invented cartridge on a rig.
type demoRow struct {
	at         time.Time
	line       string
	serial     string
	bore, head float64
}

// What the invented lines make: typical values of the scenario, and the change on L3.
const (
	boreMean, boreSD = 8.0110, 0.0028
	headMean, headSD = 33.4, 0.62
	boreShift        = 0.0034 // after the insert of L3's tool is changed
	cartridges       = 12     // a batch
)

// demoRigs are the three rigs of the scenario.
func demoRigs() []*demoRig {
	return []*demoRig{
		{name: "rig1", lines: []string{"L1", "L2"}, serial: map[string]int{}, write: pointFile},
		{name: "rig2", lines: []string{"L3"}, serial: map[string]int{}, write: commaFile},
		{name: "rig3", lines: []string{"L4"}, serial: map[string]int{}, write: inchFile},
	}
}

// measure makes the batch that a rig tests at a moment.
func (r *demoRig) measure(rng *rand.Rand, at time.Time, shifted bool) []demoRow {
	var rows []demoRow
	for _, line := range r.lines {
		for i := range cartridges {
			r.serial[line]++
			row := demoRow{
				at: at.Add(time.Duration(i) * 97 * time.Second), line: line,
				serial: fmt.Sprintf("%s-%05d", line, r.serial[line]),
				bore:   boreMean + boreSD*rng.NormFloat64(), head: headMean + headSD*rng.NormFloat64(),
			}
			if shifted && line == "L3" {
				row.bore += boreShift
			}
			rows = append(rows, row)
		}
	}
	return rows
}

// drop puts a file into the rig's folder as a well-behaved rig does: written under a hidden
// name, then renamed.
func (r *demoRig) drop(folder, name, content string) error {
	hidden := filepath.Join(folder, r.name, "."+name+".part")
	if err := os.WriteFile(hidden, []byte(content), 0o644); err != nil {
		return err
	}
	return os.Rename(hidden, filepath.Join(folder, r.name, name))
}

// pointFile has decimal points and ISO times.
func pointFile(rows []demoRow) string {
	var b strings.Builder
	b.WriteString("Tested at,Line,Serial,Bore mm,Head kPa\n")
	for _, r := range rows {
		fmt.Fprintf(&b, "%s,%s,%s,%.4f,%.2f\n", r.at.Format(time.RFC3339), r.line, r.serial, r.bore, r.head)
	}
	return b.String()
}

// commaFile has decimal commas, semicolons and the day first.
func commaFile(rows []demoRow) string {
	var b strings.Builder
	b.WriteString("Serial;Tested at;Bore mm;Head kPa\r\n")
	for _, r := range rows {
		line := fmt.Sprintf("%s;%s;%.4f;%.2f\r\n", r.serial, r.at.Format("02.01.2006 15:04:05"), r.bore, r.head)
		b.WriteString(strings.ReplaceAll(strings.Replace(line, ".", "\x00", 2), ".", ","))
	}
	return strings.ReplaceAll(b.String(), "\x00", ".")
}

// inchFile measures the bore in inches.
func inchFile(rows []demoRow) string {
	var b strings.Builder
	b.WriteString("Tested at,Serial,Bore in,Head kPa\n")
	for _, r := range rows {
		fmt.Fprintf(&b, "%s,%s,%.6f,%.2f\n", r.at.Format(time.RFC3339), r.serial, r.bore/25.4, r.head)
	}
	return b.String()
}
