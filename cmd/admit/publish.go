package main

import (
	"fmt"
	"os"

	"github.com/spf13/cobra"

	"example.com/admit/fixtures/folder"
)

// publishCommand makes part types and calibrations known to a server.
func publishCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "publish",
		Short: "Make part types or calibrations known to a server",
		Args:  bad(cobra.NoArgs),
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(publishPartTypeCommand(), publishCalibrationCommand())
	return c
}

func publishPartTypeCommand() *cobra.Command {
	var a access
	c := &cobra.Command{
		Use:   "part-type FILE...",
		Short: "Publish limits files; every fault is listed at once",
		Args:  bad(cobra.MinimumNArgs(1)),
		RunE: func(c *cobra.Command, args []string) error {
			client, err := a.dial()
			if err != nil {
				return err
			}
			defer client.Close()
			for _, file := range args {
				source, err := os.ReadFile(file)
				if err != nil {
					return badInput{err}
				}
				answer, err := client.PublishPartType(c.Context(), source)
				if err != nil {
					return fmt.Errorf("%s: %w", file, answered(err))
				}
				published(c, answer.GetPartType().GetName()+fmt.Sprintf(" version %d", answer.GetPartType().GetVersion()), answer.GetAlreadyPublished())
				for _, w := range answer.GetWarnings() {
					fmt.Fprintf(c.OutOrStdout(), "  note: %s\n", w)
				}
			}
			return nil
		},
	}
	a.flags(c)
	return c
}

func publishCalibrationCommand() *cobra.Command {
	var a access
	c := &cobra.Command{
		Use:   "calibration FILE...",
		Short: "Publish calibrations, each a calibration.yaml beside its sweeps",
		Args:  bad(cobra.MinimumNArgs(1)),
		RunE: func(c *cobra.Command, args []string) error {
			client, err := a.dial()
			if err != nil {
				return err
			}
			defer client.Close()
			for _, file := range args {
				cal, err := folder.ReadCalibration(file)
				if err != nil {
					return badInput{err}
				}
				answer, err := client.PublishCalibration(c.Context(), cal)
				if err != nil {
					return fmt.Errorf("%s: %w", file, answered(err))
				}
				published(c, "calibration "+cal.ID, answer.GetAlreadyPublished())
			}
			return nil
		},
	}
	a.flags(c)
	return c
}

func published(c *cobra.Command, what string, already bool) {
	word := "published"
	if already {
		word = "known already"
	}
	fmt.Fprintf(c.OutOrStdout(), "%s: %s\n", what, word)
}
