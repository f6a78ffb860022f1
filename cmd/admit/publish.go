package main

import (
	"context"
	"fmt"
	"os"

	"github.com/spf13/cobra"

	"example.com/admit/fixtures/folder"
	"example.com/admit/fixtures/station"
)

// publishCommand makes part types and calibrations known to a server.
func publishCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "publish",
		Short: "Make part types or calibrations known to a server",
		Args:  bad(cobra.NoArgs),
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(
		publishFiles("part-type FILE...", "Publish limits files; every fault is listed at once", publishPartType),
		publishFiles("calibration FILE...", "Publish calibrations, each a calibration.yaml beside its sweeps", publishCalibration),
	)
	return c
}

// published is what a server says of one file: the name of what is in it, whether it was known, and what its writer should know.
type published struct {
	what    string
	already bool
	notes   []string
}

// publishFiles is a command that publishes files one after the other, and stops at the first that is refused.
func publishFiles(use, short string, publish func(context.Context, *station.Client, string) (published, error)) *cobra.Command {
	var a access
	c := &cobra.Command{
		Use:   use,
		Short: short,
		Args:  bad(cobra.MinimumNArgs(1)),
		RunE: func(c *cobra.Command, args []string) error {
			client, err := a.dial()
			if err != nil {
				return err
			}
			defer client.Close()
			for _, file := range args {
				p, err := publish(c.Context(), client, file)
				if err != nil {
					return fmt.Errorf("%s: %w", file, answered(err))
				}
				word := "published"
				if p.already {
					word = "known already"
				}
				fmt.Fprintf(c.OutOrStdout(), "%s: %s\n", p.what, word)
				for _, n := range p.notes {
					fmt.Fprintf(c.OutOrStdout(), "  note: %s\n", n)
				}
			}
			return nil
		},
	}
	a.flags(c)
	return c
}

func publishPartType(ctx context.Context, client *station.Client, file string) (published, error) {
	source, err := os.ReadFile(file)
	if err != nil {
		return published{}, badInput{err}
	}
	answer, err := client.PublishPartType(ctx, source)
	if err != nil {
		return published{}, err
	}
	p := answer.GetPartType()
	return published{fmt.Sprintf("%s version %d", p.GetName(), p.GetVersion()), answer.GetAlreadyPublished(), answer.GetWarnings()}, nil
}

func publishCalibration(ctx context.Context, client *station.Client, file string) (published, error) {
	cal, err := folder.ReadCalibration(file)
	if err != nil {
		return published{}, badInput{err}
	}
	answer, err := client.PublishCalibration(ctx, cal)
	if err != nil {
		return published{}, err
	}
	return published{"calibration " + cal.ID, answer.GetAlreadyPublished(), nil}, nil
}
