// Command prove takes the long measurements of Admit, for developers: go run ./cmd/prove NAME. Each name is a package below this folder whose
// tests are the quick form.
package main

import (
	"context"
	"fmt"
	"math/rand/v2"
	"os"
	"os/signal"
	"syscall"

	"github.com/spf13/cobra"

	"example.com/admit/cmd/prove/accuracy"
	"example.com/admit/cmd/prove/fit"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	if err := command().ExecuteContext(ctx); err != nil {
		fmt.Fprintln(os.Stderr, "prove:", err)
		os.Exit(1)
	}
}

// command returns the command line.
func command() *cobra.Command {
	root := &cobra.Command{
		Use: "prove", Short: "Takes the long measurements that Admit's claims rest on",
		SilenceUsage: true, SilenceErrors: true,
		Args: cobra.NoArgs, // an unknown name ends up here
		RunE: func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	root.AddCommand(accuracyCommand(), fitCommand())
	return root
}

func accuracyCommand() *cobra.Command {
	o := accuracy.Options{Full: true}
	c := &cobra.Command{
		Use: "accuracy", Short: "The fit against the Cramer-Rao bound, at speed, under drift and out of the ordinary", Args: cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			o.Seed = seeded(o.Seed)
			return accuracy.Run(c.Context(), c.OutOrStdout(), o)
		},
	}
	c.Flags().IntVar(&o.Trials, "trials", 10000, "trials a cell; the gates are those of 10 000")
	c.Flags().Uint64Var(&o.Seed, "seed", 0, "seed of the random numbers; 0: a new one, printed")
	return c
}

func fitCommand() *cobra.Command {
	var o fit.Options
	c := &cobra.Command{
		Use: "fit", Short: "How fast the fit is, as ratios to scipy and to itself", Args: cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			o.Seed = seeded(o.Seed)
			return fit.Run(c.Context(), c.OutOrStdout(), o)
		},
	}
	c.Flags().Uint64Var(&o.Seed, "seed", 0, "seed of the random numbers; 0: a new one, printed")
	return c
}

// seeded returns the seed, or a new one for 0.
func seeded(seed uint64) uint64 {
	for seed == 0 {
		seed = rand.Uint64()
	}
	return seed
}
