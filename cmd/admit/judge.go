package main

import (
	"errors"
	"fmt"

	"github.com/google/uuid"
	"github.com/spf13/cobra"

	"example.com/admit/cmd/admit/report"
	"example.com/admit/fixtures/folder"
	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
	"example.com/admit/service/wire"
)

// judgeCommand judges one inspection folder without a server.
func judgeCommand() *cobra.Command {
	var asJSON bool
	c := &cobra.Command{
		Use:   "judge DIR",
		Short: "Judge one inspection folder; exit status 0 pass, 1 fail, 2 retest, 3 bad input",
		Args:  bad(cobra.ExactArgs(1)),
		RunE: func(c *cobra.Command, args []string) error {
			r, err := judgeFolder(c, args[0])
			if err != nil {
				return err
			}
			if asJSON {
				err = printJSON(c, wire.JudgementToProto(&r.Judgement, r.Software))
			} else {
				err = report.Record(c.OutOrStdout(), r)
			}
			if err != nil {
				return err
			}
			return exitOf(r.Judgement.Verdict)
		},
	}
	c.Flags().BoolVar(&asJSON, "json", false, "print the judgement in the wire contract's JSON form")
	return c
}

// judgeFolder reads and judges a folder; nothing is stored.
func judgeFolder(c *cobra.Command, dir string) (*inspection.Record, error) {
	unit, err := folder.Read(dir)
	if err != nil {
		return nil, badInput{err}
	}
	if unit.Begin.ID == (inspection.ID{}) { // optional in a folder that is only judged
		id, err := uuid.NewV7()
		if err != nil {
			return nil, err
		}
		unit.Begin.ID = inspection.ID(id)
	}
	if err := unit.Begin.Check(); err != nil {
		return nil, badInput{fmt.Errorf("%s: %w", dir, err)}
	}
	j, err := inspection.NewJudge().Judge(c.Context(), unit)
	if err != nil {
		if inspection.KindOf(err) == inspection.Malformed {
			return nil, badInput{fmt.Errorf("%s: %w", dir, err)}
		}
		return nil, err
	}
	r := inspection.NewRecord(unit, j)
	r.Software = revision()
	return r, nil
}

// exitOf turns a verdict into an exit status.
func exitOf(v verdict.Verdict) error {
	switch v {
	case verdict.Pass:
		return nil
	case verdict.Fail:
		return exitStatus(exitFail)
	case verdict.Retest:
		return exitStatus(exitRetest)
	}
	return errors.New("no verdict")
}
