package main

import (
	"fmt"
	"strconv"
	"strings"
)

type acknowledgeVerb struct {
	Alarm string `arg:"" help:"The alarm: A7."`
	By    string `help:"Who answers; the account of the operating system where not given." placeholder:"NAME"`
	Note  string `help:"What was seen or done." placeholder:"TEXT"`
}

// Run answers an alarm.
func (v *acknowledgeVerb) Run(d *desk) error {
	number, err := alarmNumber(v.Alarm)
	if err != nil {
		return err
	}
	c, running, cfg, err := d.counter()
	if err != nil {
		return err
	}
	defer c.Close()
	by, how := whoever(v.By)
	a, err := c.Acknowledge(number, by, how, v.Note)
	if err != nil {
		return err
	}
	if d.JSON {
		return d.object(a)
	}
	fmt.Fprintf(d.out, "%s is %s, answered by %s at %s: %s\n", a.Alarm, a.State, a.By, clock(a.At, cfg.Site.Zone), a.Says)
	d.notWatching(running)
	return nil
}

// alarmNumber reads A7 or 7.
func alarmNumber(text string) (int, error) {
	n, err := strconv.Atoi(strings.TrimPrefix(strings.ToUpper(text), "A"))
	if err != nil || n < 1 {
		return 0, fmt.Errorf("alarm %q: a name such as A7 is expected; status lists those that stand", text)
	}
	return n, nil
}
