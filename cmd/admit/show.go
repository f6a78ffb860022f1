package main

import (
	"context"
	"errors"
	"fmt"
	"io"

	"github.com/spf13/cobra"
	"google.golang.org/grpc"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/cmd/admit/report"
	"example.com/admit/fixtures/folder"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/wire"
)

// showCommand shows stored inspections.
func showCommand() *cobra.Command {
	var a access
	var asJSON bool
	var dir string
	var list pb.ListInspectionsRequest
	c := &cobra.Command{
		Use:   "show [ID]",
		Short: "Show a stored inspection as text, JSON or folder, or list those of a unit, lot or station",
		Args:  bad(cobra.MaximumNArgs(1)),
		RunE: func(c *cobra.Command, args []string) error {
			filtered := list.Serial != "" || list.Lot != "" || list.Station != ""
			if (len(args) == 1) == filtered {
				return badInput{errors.New("want an inspection id, or one of --serial, --lot and --station")}
			}
			if dir != "" && len(args) == 0 {
				return badInput{errors.New("--folder needs an inspection id")}
			}
			client, err := a.dial()
			if err != nil {
				return err
			}
			defer client.Close()
			if len(args) == 0 {
				return showList(c, client.Connection(), &list, asJSON)
			}
			return showOne(c, client.Connection(), args[0], asJSON, dir)
		},
	}
	a.flags(c)
	c.Flags().BoolVar(&asJSON, "json", false, "print in the wire contract's JSON form")
	c.Flags().StringVar(&dir, "folder", "", "write the inspection out as an inspection folder with this name, which must not exist")
	c.Flags().StringVar(&list.Serial, "serial", "", "list the inspections of the unit with this serial, newest first")
	c.Flags().StringVar(&list.Lot, "lot", "", "list the inspections of this lot, newest first")
	c.Flags().StringVar(&list.Station, "station", "", "list the inspections of this station, newest first")
	c.Flags().Int32Var(&list.PageSize, "most", 20, "how many to list at the most, up to 1000")
	return c
}

// showOne shows one inspection.
func showOne(c *cobra.Command, connection *grpc.ClientConn, id string, asJSON bool, dir string) error {
	inspections := pb.NewInspectionServiceClient(connection)
	answer, err := inspections.GetInspection(c.Context(), &pb.GetInspectionRequest{InspectionId: id})
	if err != nil {
		return answered(err)
	}
	if asJSON {
		return printJSON(c, answer.GetInspection())
	}
	r, err := wire.RecordFromProto(answer.GetInspection())
	if err != nil {
		return err
	}
	if dir == "" {
		return report.Record(c.OutOrStdout(), r)
	}
	unit, err := fetch(c.Context(), connection, r)
	if err != nil {
		return answered(err)
	}
	if err := folder.Write(dir, unit); err != nil {
		return badInput{err}
	}
	fmt.Fprintf(c.OutOrStdout(), "%s written to %s\n", r.Begin.ID, dir)
	return nil
}

// fetch puts a stored inspection together again: what it was judged from.
func fetch(ctx context.Context, connection *grpc.ClientConn, r *inspection.Record) (*inspection.Case, error) {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	unit := &inspection.Case{Begin: r.Begin}
	stream, err := pb.NewInspectionServiceClient(connection).ReadSweeps(ctx, &pb.ReadSweepsRequest{InspectionId: r.Begin.ID.String()})
	if err != nil {
		return nil, err
	}
	if unit.Sweeps, err = assemble(stream); err != nil {
		return nil, err
	}
	limits, err := pb.NewPartTypeServiceClient(connection).GetPartType(ctx, &pb.GetPartTypeRequest{Name: r.PartType.Name, Version: uint32(r.PartType.Version)})
	if err != nil {
		return nil, err
	}
	if unit.PartType, err = parttype.Parse(r.PartType.Name, limits.GetPartType().GetLimitsFile()); err != nil {
		return nil, err
	}
	if r.Begin.Calibration != "" {
		unit.Calibration, err = fetchCalibration(ctx, pb.NewStationServiceClient(connection), string(r.Begin.Calibration))
	}
	return unit, err
}

// fetchCalibration reads a published calibration with the samples of its standards.
func fetchCalibration(ctx context.Context, stations pb.StationServiceClient, id string) (*network.Calibration, error) {
	stream, err := stations.ReadCalibration(ctx, &pb.ReadCalibrationRequest{CalibrationId: id})
	if err != nil {
		return nil, err
	}
	var cal *network.Calibration
	for {
		m, err := stream.Recv()
		switch {
		case errors.Is(err, io.EOF) && cal != nil:
			return cal, nil
		case err != nil:
			return nil, err
		case m.GetCalibration() != nil:
			if cal, err = wire.CalibrationFromProto(m.GetCalibration()); err != nil {
				return nil, err
			}
		case m.GetSamples() != nil && cal != nil:
			if err := wire.AddStandardSamples(cal, m.GetSamples()); err != nil {
				return nil, err
			}
		}
	}
}

// assemble joins the streamed pieces of an inspection's sweeps.
func assemble(stream pb.InspectionService_ReadSweepsClient) ([]sweep.Sweep, error) {
	var sweeps []sweep.Sweep
	var next wire.Assembly
	for {
		m, err := stream.Recv()
		switch {
		case errors.Is(err, io.EOF):
			return sweeps, nil
		case err != nil:
			return nil, err
		case m.GetHeader() != nil:
			h, err := wire.HeaderFromProto(m.GetHeader())
			if err != nil {
				return nil, err
			}
			next.Start(h)
		case m.GetSamples() != nil:
			w, done, err := next.Add(m.GetSamples())
			if err != nil {
				return nil, err
			}
			if done {
				sweeps = append(sweeps, w)
			}
		}
	}
}

// showList lists the newest inspections that meet the filters.
func showList(c *cobra.Command, connection *grpc.ClientConn, request *pb.ListInspectionsRequest, asJSON bool) error {
	answer, err := pb.NewInspectionServiceClient(connection).ListInspections(c.Context(), request)
	if err != nil {
		return answered(err)
	}
	if asJSON {
		return printJSON(c, answer)
	}
	for _, m := range answer.GetInspections() {
		r, err := wire.RecordFromProto(m)
		if err != nil {
			return err
		}
		fmt.Fprintf(c.OutOrStdout(), "%s  %s  %-6s  %-14s  station %s  attempt %d  %s version %d\n", r.Begin.ID,
			r.Begin.MeasuredAt.UTC().Format("2006-01-02T15:04:05Z"), r.Judgement.Verdict, r.Begin.Unit.Name(), r.Begin.Station, r.Attempt, r.PartType.Name, r.PartType.Version)
	}
	if len(answer.GetInspections()) == 0 {
		fmt.Fprintln(c.OutOrStdout(), "none stored")
	}
	return nil
}
