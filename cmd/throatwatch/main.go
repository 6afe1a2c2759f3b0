// Command throatwatch stands watch over the exhaust nozzle of a gas turbine on a
// test rig. It only watches: it commands nothing and trips nothing.
package main

import (
	"context"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"

	"throatwatch/cmd/internal/watch"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	code := run(ctx, os.Args[1:], os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// command is a subcommand: it gets what follows its name and gives the exit code,
// 0 done, 1 not done, 2 called wrongly.
type command struct {
	name, what string
	run        func(ctx context.Context, args []string, stdout, stderr io.Writer) int
}

func commands() []command {
	return []command{
		{"watch", "watch a rig: broker, computation, alarms, archive, page", watchCommand},
		{"rehearse", "let a simulated rig publish a whole test", rehearseCommand},
		{"check", "every fault of a rig file at once, then its channels and limits", withoutContext(checkCommand)},
		{"checks", "check the data system with the engine at rest, before a run and after it", checksCommand},
		{"reload", "let a running watch take its rig and rule files in anew", reloadCommand},
		{"card", "the test card of a running watch: show, load, take, accept, reject, skip", cardCommand},
		{"handover", "the hand-over sheet of a running watch", handoverCommand},
		{"point", "one operating point from numbers given by hand", withoutContext(pointCommand)},
		{"runs", "list the stored runs", runsCommand},
		{"life", "what each engine has been through: starts, cycles, hours, time above EGT limits", lifeCommand},
		{"note", "keep, tag or comment a stored run", noteCommand},
		{"delete", "delete a stored run", deleteCommand},
		{"replay", "step a stored run again, and compare its digest", replayCommand},
		{"reduce", "step a stored run through another configuration", reduceCommand},
		{"compare", "tell stored runs apart: differences, alarms that move, baseline and scatter", compareCommand},
		{"points", "test points of a stored run with their uncertainty", pointsCommand},
		{"report", "write the report of a stored run, to be printed and signed", reportCommand},
		{"export", "write a table of a stored run for other programs", exportCommand},
		{"import", "make a run of a recording of another data system", importCommand},
		{"verify", "read stored runs to the last byte and step them again", verifyCommand},
		{"copy", "copy a stored run, also while it is recorded", copyCommand},
		{"doctor", "look at disk, clock, broker, database, ports and files before a watch is started", doctorCommand},
		{"user", "people and machines that may use a watch, and their roles", userCommand},
		{"log", "what people did in a stored run, who, when and why", logCommand},
		{"figures", "how the alarms of a stored run did, against published targets", figuresCommand},
		{"version", "the build", versionCommand},
	}
}

func withoutContext(f func([]string, io.Writer, io.Writer) int) func(context.Context, []string, io.Writer, io.Writer) int {
	return func(_ context.Context, args []string, stdout, stderr io.Writer) int { return f(args, stdout, stderr) }
}

// run hands the arguments to their subcommand and gives the exit code.
func run(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	name := ""
	if len(args) > 0 {
		name = args[0]
	}
	for _, c := range commands() {
		if c.name == name {
			return c.run(ctx, args[1:], stdout, stderr)
		}
	}
	out, code := stderr, 2
	switch name {
	case "":
	case "help", "--help", "-h":
		out, code = stdout, 0
	default:
		_, _ = fmt.Fprintf(stderr, "throatwatch: there is no command %q: throatwatch --help lists them\n", name)
		return code
	}
	_, _ = fmt.Fprintf(out, "usage: throatwatch COMMAND\n\n")
	for _, c := range commands() {
		_, _ = fmt.Fprintf(out, "  %-9s  %s\n", c.name, c.what)
	}
	_, _ = fmt.Fprintf(out, "\nthroatwatch COMMAND --help says more. %s\n", notProtection)
	return code
}

func versionCommand(_ context.Context, _ []string, stdout, _ io.Writer) int {
	_, _ = fmt.Fprintln(stdout, "throatwatch", watch.Build())
	return 0
}
