// Steelyard weighs parallel production lines against one another while their rigs drop
// measurement files. README.md says what it does; DEVELOPERS.md how it is built.
//
// What a person sees follows these rules. Answers go to standard output; progress, remarks
// and errors to standard error. An error is one sentence that begins with "steelyard: " and
// says what to do. With --json, standard output is one object a line with a "type", and an
// error has the same shape. Progress shows on a terminal only.
package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"

	"github.com/alecthomas/kong"

	"steelyard/monitor"
	"steelyard/monitor/config"
	"steelyard/store"
)

// commandLine is every verb with what they have in common.
type commandLine struct {
	Config string `short:"c" default:"config.toml" placeholder:"FILE" help:"The configuration (config.toml)."`
	JSON   bool   `name:"json" help:"Answer for machines: one JSON object a line."`

	Run         runVerb         `cmd:"" help:"Watch the drop folders until told to stop."`
	Demo        demoVerb        `cmd:"" help:"Show the whole of it at work on invented rigs, in a minute."`
	Check       checkVerb       `cmd:"" help:"Read the configuration, and say how sample files would be read."`
	Status      statusVerb      `cmd:"" help:"Say where everything stands."`
	Acknowledge acknowledgeVerb `cmd:"" help:"Answer an alarm."`
	Explain     explainVerb     `cmd:"" help:"Show what an alarm rests on."`
	Daylog      daylogVerb      `cmd:"" help:"Write the log of a production day."`
	Withdraw    withdrawVerb    `cmd:"" help:"Take batches out of what counts, with a reason."`
	Mark        markVerb        `cmd:"" help:"Start a segment: a tool was changed, new material came."`
	Held        heldVerb        `cmd:"" help:"What was not counted and waits: list, show, decide."`
	Verify      verifyVerb      `cmd:"" help:"Show that the record was not changed, and that every outcome follows from it."`
	Backup      backupVerb      `cmd:"" help:"Copy the store, also while the daemon runs."`
	Export      exportVerb      `cmd:"" help:"Write measurements, looks or crossings as CSV or JSON lines."`
	Weigh       weighVerb       `cmd:"" help:"Weigh a claim once, on given figures."`
}

// desk carries what the verbs need from the outside.
type desk struct {
	*commandLine
	out, err io.Writer
}

// Exit statuses, as README.md lists them.
const (
	exitDone          = 0
	exitFailed        = 1
	exitUsage         = 2
	exitHeld          = 10 // done, but something was held
	exitAlarm         = 11 // an alarm stands, where that was asked
	exitNotVerified   = 12 // the record did not verify
	exitStoreTaken    = 13
	exitConfiguration = 78
	exitInterrupted   = 130
)

// outcome ends a verb with an exit status that is not a failure; there is nothing to print.
type outcome int

func (o outcome) Error() string { return fmt.Sprintf("exit status %d", int(o)) }

func main() { os.Exit(run(os.Args[1:], os.Stdout, os.Stderr)) }

// run is the whole program but for the process around it; it returns the exit status.
func run(args []string, out, errOut io.Writer) int {
	line := &commandLine{}
	status, exited := 0, false
	parser, err := kong.New(line,
		kong.Name("steelyard"),
		kong.Description("Weighs parallel production lines against one another while their rigs drop measurement files.\n\n"+
			"It never releases or rejects product, and does not replace the site's release procedures.\n\n"+
			"Begin with:  steelyard demo"),
		kong.Writers(out, errOut), kong.ConfigureHelp(kong.HelpOptions{Compact: true}),
		kong.Exit(func(code int) { status, exited = code, true }),
	)
	if err != nil {
		fmt.Fprintln(errOut, "steelyard:", err)
		return exitFailed
	}
	bare := len(args) == 0
	if bare {
		args = []string{"--help"}
	}
	ctx, err := parser.Parse(args)
	switch {
	case exited && bare:
		return exitUsage
	case exited:
		return status
	}
	d := &desk{commandLine: line, out: out, err: errOut}
	if err != nil {
		d.say(err, exitUsage)
		fmt.Fprintln(errOut, "steelyard --help lists the verbs, and steelyard VERB --help what one takes.")
		return exitUsage
	}
	return d.end(ctx.Run(d))
}

// end maps the error of a verb to the exit status, and says it once.
func (d *desk) end(err error) int {
	var (
		silent outcome
		faults config.Faults
	)
	switch {
	case err == nil:
		return exitDone
	case errors.As(err, &silent):
		return int(silent)
	case errors.As(err, &faults), errors.Is(err, errConfiguration):
		return d.say(err, exitConfiguration)
	case errors.Is(err, monitor.ErrNotVerified):
		return d.say(err, exitNotVerified)
	case errors.Is(err, store.ErrHeld):
		return d.say(err, exitStoreTaken)
	}
	return d.say(err, exitFailed)
}

// say prints an error, in the shape that was asked for.
func (d *desk) say(err error, status int) int {
	if d.JSON {
		_ = d.object(struct {
			Type  string `json:"type"`
			Error string `json:"error"`
			Exit  int    `json:"exit"`
		}{"error", err.Error(), status})
		return status
	}
	fmt.Fprintln(d.err, "steelyard:", err)
	return status
}

// object prints one JSON object on a line of its own.
func (d *desk) object(v any) error {
	text, err := json.Marshal(v)
	if err != nil {
		return err
	}
	_, err = fmt.Fprintf(d.out, "%s\n", text)
	return err
}

// errConfiguration is what keeps a verb from its configuration, short of Faults in it.
var errConfiguration = errors.New("no configuration")

// configuration reads the configuration that the command line names.
func (d *desk) configuration() (*config.Config, error) {
	cfg, err := config.Load(d.Config)
	if errors.Is(err, os.ErrNotExist) {
		return nil, fmt.Errorf("%w: there is no file %s here; name one with --config, or copy config.example.toml and change it",
			errConfiguration, d.Config)
	}
	return cfg, err
}

// counter reaches the running daemon, or the store itself.
func (d *desk) counter() (monitor.Counter, bool, *config.Config, error) {
	cfg, err := d.configuration()
	if err != nil {
		return nil, false, nil, err
	}
	c, running, err := monitor.Reach(cfg, monitor.Options{Log: d.quietLog()})
	return c, running, cfg, err
}
