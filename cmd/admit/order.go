package main

import (
	"errors"

	"github.com/spf13/cobra"

	"example.com/admit/cmd/admit/report"
	"example.com/admit/service/wire"
)

// orderCommand says on which overtone a unit answers.
func orderCommand() *cobra.Command {
	var asJSON bool
	c := &cobra.Command{
		Use:   "order DIR",
		Short: "Say on which overtone the unit of an inspection folder answers, and how sure that is",
		Long: "Say on which overtone the unit of an inspection folder answers, and how sure that is. The frequency alone does not tell: what does is the\n" +
			"ratio of its capacitances, and the responses in its overtone windows. Exit status 3 bad input, 4 where the order cannot be told.",
		Args: bad(cobra.ExactArgs(1)),
		RunE: func(c *cobra.Command, args []string) error {
			r, err := judgeFolder(c, args[0])
			if err != nil {
				return err
			}
			o := r.Judgement.Order
			if o == nil {
				return errors.New("the order cannot be told: it shows in the capacitances of a thickness-shear unit whose main mode was found in a known network")
			}
			if asJSON {
				return printJSON(c, wire.OrderToProto(o))
			}
			return report.Order(c.OutOrStdout(), o)
		},
	}
	c.Flags().BoolVar(&asJSON, "json", false, "print in the wire contract's JSON form")
	return c
}
