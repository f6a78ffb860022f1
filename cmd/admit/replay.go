package main

import (
	"context"
	"fmt"

	"github.com/spf13/cobra"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"

	"example.com/admit/fixtures/folder"
	"example.com/admit/fixtures/station"
	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
)

// replayCommand streams inspection folders to a server as a station would.
func replayCommand() *cobra.Command {
	var a access
	c := &cobra.Command{
		Use:   "replay DIR...",
		Short: "Send inspection folders to a server as a station would, with the part types and calibrations they name",
		Long: "Send inspection folders to a server as a station would. Part type and calibration of each folder are published first; what is\n" +
			"known already stays as it is. A folder needs an inspection id, so that sending it twice counts once.\n" +
			"Exit status: that of the worst verdict (0 pass, 1 fail, 2 retest), 3 bad input, 4 trouble.",
		Args: bad(cobra.MinimumNArgs(1)),
		RunE: func(c *cobra.Command, args []string) error {
			client, err := a.dial()
			if err != nil {
				return err
			}
			defer client.Close()
			worst := verdict.Pass
			for _, dir := range args {
				unit, err := folder.Read(dir)
				if err != nil {
					return badInput{err}
				}
				if unit.Begin.ID == (inspection.ID{}) {
					return badInput{fmt.Errorf("%s: inspection.yaml: want `inspection:`, a UUID of version 7, so that sending the folder twice counts once; got none", dir)}
				}
				answer, err := sendUnit(c.Context(), client, unit)
				if err != nil {
					return fmt.Errorf("%s: %w", dir, answered(err))
				}
				note := ""
				if answer.Already {
					note = ", recorded earlier"
				}
				fmt.Fprintf(c.OutOrStdout(), "%-6s  %s  number %d, attempt %d%s  %s\n", answer.Judgement.Verdict, unit.Begin.Unit.Name(), answer.Sequence, answer.Attempt, note, dir)
				worst = worse(worst, answer.Judgement.Verdict)
			}
			return exitOf(worst)
		},
	}
	a.flags(c)
	return c
}

// sendUnit publishes what an inspection names, then sends it. A station that may not publish part types goes on: the server says whether
// it knows the one that is named.
func sendUnit(ctx context.Context, client *station.Client, unit *inspection.Case) (*station.Answer, error) {
	if _, err := client.PublishPartType(ctx, unit.PartType.Source); err != nil && status.Code(err) != codes.PermissionDenied {
		return nil, err
	}
	if unit.Calibration != nil {
		if _, err := client.PublishCalibration(ctx, unit.Calibration); err != nil {
			return nil, err
		}
	}
	return client.Inspect(ctx, unit)
}

// worse returns the verdict that weighs more in an exit status: fail, then retest, then pass.
func worse(a, b verdict.Verdict) verdict.Verdict {
	for _, v := range []verdict.Verdict{verdict.Fail, verdict.Retest} {
		if a == v || b == v {
			return v
		}
	}
	return verdict.Pass
}
