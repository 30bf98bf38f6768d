package rules

import (
	"fmt"
	"slices"

	"steelyard/rules/posterior"
)

// Offset is what a source's rig adds to what it measures of a characteristic, learned from
// reference parts. It is a process of its own, of which claims speak as bias(Name): normal, under the
// reference prior, of what was read of a reference part minus what that part is certified to be. How
// well the parts themselves are known (Uncertainty) is stated beside it and not weighed: the sum of a
// t and a normal distribution has no closed form.
type Offset struct {
	Name           string             `json:"name"` // the source's; characteristic.source where it has several offsets
	Source         string             `json:"source"`
	Characteristic string             `json:"characteristic"`
	Title          string             `json:"title,omitempty"` // of the characteristic, for people
	Unit           string             `json:"unit,omitempty"`
	Remember       posterior.Remember `json:"remember"`
	Parts          []Reference        `json:"parts"`
}

// Reference is a reference part as it is certified.
type Reference struct {
	Name        string  `json:"name"`
	Certified   float64 `json:"certified"`             // in the characteristic's unit
	Uncertainty float64 `json:"uncertainty,omitempty"` // standard uncertainty of Certified; 0: not stated
}

// OffsetNamed is the offset of that name.
func (p *Plan) OffsetNamed(name string) (*Offset, bool) {
	for i := range p.Offsets {
		if p.Offsets[i].Name == name {
			return &p.Offsets[i], true
		}
	}
	return nil, false
}

func (p *Plan) isOffset(process string) bool {
	_, ok := p.OffsetNamed(process)
	return ok
}

// splitOffset makes an offset pass for a characteristic of its own on one line, its source.
func (p *Plan) splitOffset(process string) (c *Characteristic, line string, ok bool) {
	o, ok := p.OffsetNamed(process)
	if !ok {
		return nil, "", false
	}
	return o.asCharacteristic(), o.Source, true
}

func (o *Offset) asCharacteristic() *Characteristic {
	title := o.Title
	if title == "" {
		title = o.Characteristic
	}
	return &Characteristic{
		Name: o.Name, Title: title, Unit: o.Unit, Family: posterior.NormalFamily, Lines: []string{o.Source},
		Prior: posterior.Prior{Reference: true}, Remember: o.Remember,
	}
}

// each visits every process of the plan, in its order, and behind them the offsets.
func (p *Plan) each(visit func(name string, c *Characteristic)) {
	for i := range p.Characteristics {
		c := &p.Characteristics[i]
		for _, line := range c.Lines {
			visit(ProcessName(c.Name, line), c)
		}
	}
	for i := range p.Offsets {
		visit(p.Offsets[i].Name, p.Offsets[i].asCharacteristic())
	}
}

func (p *Plan) checkOffsets() error {
	names := p.Processes()
	for i := range p.Offsets {
		o := &p.Offsets[i]
		if slices.Index(names, o.Name) != len(names)-len(p.Offsets)+i {
			return fmt.Errorf("the offset %q has the name of another process", o.Name)
		}
		if err := o.Remember.Check(); err != nil {
			return fmt.Errorf("offset %q: %w", o.Name, err)
		}
	}
	return nil
}
