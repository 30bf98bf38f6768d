package main

import (
	"fmt"
	"io"
	"time"

	"steelyard/monitor"
)

// printRigs prints the rigs' offsets, with the age of the last reading of a reference part.
func printRigs(w io.Writer, st *monitor.Status, zone *time.Location) {
	first := true
	for i := range st.Processes {
		p := &st.Processes[i]
		if !p.IsOffset() {
			continue
		}
		if first {
			fmt.Fprintln(w, "\nRigs, by reference parts\treadings\toffset\t95 % between\tunit\tlast reading\tof")
		}
		first = false
		last := "never"
		if !p.LastMeasured.IsZero() {
			last = fmt.Sprintf("%s (%s ago)", clock(p.LastMeasured, zone), max(st.Now.Sub(p.LastMeasured), 0).Round(time.Second))
		}
		fmt.Fprintf(w, "  %s: %s\t%s\t%s\t%s\t%s\n", p.Line, p.Label, units(p.Units), estimateCells(p), last, p.PartsText())
	}
}

// printNotes prints what to bear in mind with the figures.
func printNotes(w io.Writer, st *monitor.Status, zone *time.Location) {
	var notes []string
	for i := range st.Processes {
		notes = append(notes, st.Processes[i].Notes()...)
	}
	if s := st.Stepped; s != nil {
		notes = append(notes, fmt.Sprintf("The clock on the wall stepped from %s to %s: it was set, or the machine slept.", clock(s.Was, zone), clock(s.Is, zone)))
	}
	if len(notes) > 0 {
		fmt.Fprintln(w, "\nBear in mind")
	}
	for _, note := range notes {
		fmt.Fprintln(w, "  "+note)
	}
}
