// Command unsheard watches the drop folders of a streak camera and a reference
// camera, reconstructs every shot as a space-time cube and measures it.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"

	"github.com/spf13/cobra"

	"unsheard/daemon"
	"unsheard/pipeline"
)

// The exit codes.
const (
	exitGood = 0 // it ran, and all is well
	exitBad  = 1 // it ran, and the answer is bad
	exitFail = 2 // it could not run
)

// errBad is returned by a command that ran and whose answer is bad; what there
// is to say has been printed.
var errBad = errors.New("the answer is bad")

func main() { os.Exit(run()) }

func run() int {
	if len(os.Args) > 1 && os.Args[1] == daemon.ChildCommand {
		// A terminal and a service manager signal the whole group. The
		// parent decides what becomes of its children, by their standard
		// input.
		signal.Ignore(os.Interrupt, syscall.SIGTERM)
		return execute(context.Background(), os.Args[1:], os.Stdin, os.Stdout, os.Stderr)
	}
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	return execute(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr)
}

// execute runs one command line and returns its exit code.
func execute(ctx context.Context, args []string, in io.Reader, out, errw io.Writer) int {
	root := command()
	root.SetArgs(args)
	root.SetIn(in)
	root.SetOut(out)
	root.SetErr(errw)
	switch err := root.ExecuteContext(ctx); {
	case err == nil:
		return exitGood
	case errors.Is(err, errBad):
		return exitBad
	default:
		fmt.Fprintln(errw, "unsheard:", err)
		return exitFail
	}
}

func command() *cobra.Command {
	root := &cobra.Command{
		Use:   "unsheard",
		Short: "reconstruct and measure coded streak camera shots as they come in",
		Long: `unsheard stays on a laboratory PC during a campaign. It watches the folders
into which a streak camera and a reference camera drop their frames, pairs the
frames of each shot, reconstructs the shot as a space-time cube, measures what
happened in it and leaves all of that beside the raw data.

It controls no laser, camera or interlock and is no safety device.

Exit codes: 0 it ran and all is well, 1 it ran and the answer is bad, 2 it could
not run.`,
		Version:       pipeline.Version,
		SilenceUsage:  true,
		SilenceErrors: true,
		Args:          cobra.NoArgs, // says "unknown command", which needs a RunE
		RunE:          func(cmd *cobra.Command, _ []string) error { return cmd.Help() },
	}
	root.CompletionOptions.HiddenDefaultCmd = true
	root.AddCommand(watchCommand(), demoCommand(), reconstructCommand(), calibrateCommand(),
		simulateCommand(), shotsCommand(), checkCommand(), childCommand())
	return root
}
