// Command throatwatch stands watch over the exhaust nozzle of a gas turbine on a
// test rig. It only watches: it commands nothing and trips nothing.
package main

import (
	"fmt"
	"io"
	"os"
)

func main() { os.Exit(run(os.Args[1:], os.Stdout, os.Stderr)) }

// run hands the arguments to their subcommand and returns the exit code.
func run(args []string, stdout, stderr io.Writer) int {
	if len(args) > 0 && args[0] == "point" {
		return pointCommand(args[1:], stdout, stderr)
	}
	fmt.Fprintln(stderr, "usage: throatwatch point --help")
	return 2
}
