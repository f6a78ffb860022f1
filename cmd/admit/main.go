// Command admit is the service behind a quartz-crystal test floor: it judges crystal units from frequency sweeps, keeps the evidence and
// shows what happened. This folder is thin: one file a subcommand, each wires packages together.
package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"os/signal"
	"syscall"

	"github.com/spf13/cobra"
)

// Exit statuses. The first three are the verdicts of `admit judge`.
const (
	exitPass    = 0
	exitFail    = 1
	exitRetest  = 2
	exitBad     = 3 // bad input: a file, a flag, a configuration
	exitTrouble = 4 // anything else: a server that does not answer, a store that cannot be opened
)

// exitStatus is an error that only sets the exit status: what is to be said has been said.
type exitStatus int

func (s exitStatus) Error() string { return fmt.Sprintf("exit status %d", int(s)) }

// badInput marks an error as the caller's: exit status 3.
type badInput struct{ error }

func (b badInput) Unwrap() error { return b.error }

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	os.Exit(run(ctx, os.Args[1:], streams{os.Stdin, os.Stdout, os.Stderr}))
}

// run executes one command line and returns its exit status.
func run(ctx context.Context, args []string, s streams) int {
	root := &cobra.Command{
		Use:           "admit",
		Short:         "Judges quartz crystal units from frequency sweeps and keeps the evidence",
		SilenceUsage:  true,
		SilenceErrors: true,
		Version:       revision(),
		Args:          bad(cobra.NoArgs), // an unknown command ends up here
		RunE:          func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	root.SetArgs(args)
	root.SetIn(s.in)
	root.SetOut(s.out)
	root.SetErr(s.err)
	root.SetFlagErrorFunc(func(_ *cobra.Command, err error) error { return badInput{err} })
	root.AddCommand(judgeCommand(), orderCommand(), serveCommand(), replayCommand(), showCommand(), demoCommand(), publishCommand(), checkConfigCommand())
	err := root.ExecuteContext(ctx)
	var code exitStatus
	var input badInput
	switch {
	case err == nil:
		return exitPass
	case errors.As(err, &code):
		return int(code)
	case errors.As(err, &input):
		fmt.Fprintln(s.err, "admit:", err)
		return exitBad
	}
	fmt.Fprintln(s.err, "admit:", err)
	return exitTrouble
}

// bad marks the errors of an argument check as bad input.
func bad(check cobra.PositionalArgs) cobra.PositionalArgs {
	return func(c *cobra.Command, args []string) error {
		if err := check(c, args); err != nil {
			return badInput{err}
		}
		return nil
	}
}
