package main

import (
	"context"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"strings"
	"sync"
	"time"

	"github.com/google/uuid"
	"github.com/spf13/cobra"

	"example.com/admit/cmd/admit/config"
	"example.com/admit/fixtures/simulated"
	"example.com/admit/fixtures/station"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// demoCommand runs a server and simulated stations in a temporary store.
func demoCommand() *cobra.Command {
	var seed uint64
	var pace time.Duration
	var address string
	c := &cobra.Command{
		Use:   "demo",
		Short: "Run a server with eight simulated stations in a temporary store",
		Args:  bad(cobra.NoArgs),
		RunE: func(c *cobra.Command, _ []string) error {
			if pace < 10*time.Millisecond {
				return badInput{fmt.Errorf("--pace: want at least 10ms, got %v", pace)}
			}
			if !c.Flags().Changed("seed") {
				seed = uint64(time.Now().UnixNano())
			}
			return demo(c.Context(), c.OutOrStdout(), address, seed, pace)
		},
	}
	c.Flags().StringVar(&address, "http", "127.0.0.1:0", "address for people; port 0 takes a free one")
	c.Flags().Uint64Var(&seed, "seed", 0, "seed of the simulated units and noise; printed, so that a run can be repeated")
	c.Flags().DurationVar(&pace, "pace", time.Second, "time from one unit to the next at each station")
	return c
}

// floor is the plant of the demo: which station measures which part type.
var floor = []struct {
	name, line string
	kind       int // index into simulated.Scenario
}{
	{"N1", "North", 2}, {"N2", "North", 2}, {"N3", "North", 1}, {"N4", "North", 0},
	{"S1", "South", 3}, {"S2", "South", 3}, {"S3", "South", 4}, {"S4", "South", 1},
}

// opening are the faults of the first round, by station, so that verdicts of all three kinds are seen at once.
var opening = map[int]simulated.Fault{1: simulated.HighResistance, 4: simulated.NothingInserted}

// demo runs until the context ends.
func demo(ctx context.Context, out io.Writer, address string, seed uint64, pace time.Duration) error {
	folder, err := os.MkdirTemp("", "admit-demo-")
	if err != nil {
		return err
	}
	defer os.RemoveAll(folder)
	settings := config.Default()
	settings.Store = folder + "/store"
	settings.Listen, settings.HTTP = "127.0.0.1:0", address
	settings.Volume.MaximumMegabytes = 64
	settings.Log.Level = "warn"
	stations := demoStations(seed)
	for _, s := range stations {
		settings.Stations = append(settings.Stations, config.Station{Station: s.Name, Line: s.Line, FixtureNetwork: s.Kind.Network, ContactHeads: []string{s.ContactHead}})
	}
	if err := settings.Check(); err != nil {
		return badInput{err}
	}
	server, err := build(settings, logger(settings.Log))
	if err != nil {
		return err
	}
	ctx, cancel := context.WithCancel(ctx)
	served := make(chan struct{})
	var failure error
	go func() {
		defer close(served)
		failure = server.run(ctx)
		cancel()
	}()
	defer func() { // the store goes only after the server
		cancel()
		<-served
	}()
	client, err := station.Dial(server.stations.Addr().String(), nil)
	if err != nil {
		return err
	}
	defer client.Close()
	fmt.Fprintf(out, "Open http://%s/ in a browser. Simulated stations of the Tarnmoor works, seed %d; Ctrl-C ends it.\n", server.people.Addr(), seed)
	fmt.Fprintf(out, "JSON: http://%s/v1/inspections   metrics: http://%s/metrics   stations (gRPC): %s\n\n", server.people.Addr(), server.people.Addr(), server.stations.Addr())

	var group sync.WaitGroup
	var mu sync.Mutex
	say := func(line string) {
		mu.Lock()
		defer mu.Unlock()
		fmt.Fprintln(out, line)
	}
	for i, s := range stations {
		group.Go(func() {
			if err := work(ctx, client, s, i, pace, say); err != nil && ctx.Err() == nil {
				say(fmt.Sprintf("station %s stopped: %v", s.Name, err))
			}
		})
	}
	group.Wait()
	cancel()
	<-served
	return failure
}

// demoStations are the simulated stations, each with a random source of its own.
func demoStations(seed uint64) []*simulated.Station {
	kinds := simulated.Scenario()
	var out []*simulated.Station
	for i, f := range floor {
		out = append(out, simulated.NewStation(f.name, f.line, kinds[f.kind], rand.New(rand.NewPCG(seed, uint64(i)))))
	}
	return out
}

// work is the shift of the station with an index on the floor: publish what it needs, then unit after unit.
func work(ctx context.Context, client *station.Client, s *simulated.Station, index int, pace time.Duration, say func(string)) error {
	source, err := simulated.LimitsFile(s.Kind.PartType)
	if err != nil {
		return err
	}
	part, err := parttype.Parse(s.Kind.PartType, source)
	if err != nil {
		return err
	}
	if _, err := client.PublishPartType(ctx, source); err != nil {
		return err
	}
	taken := time.Now().UTC()
	cal := s.Calibrate(fmt.Sprintf("%s-%s", s.ContactHead, taken.Format("2006-01-02")), taken)
	if _, err := client.PublishCalibration(ctx, &cal); err != nil {
		return err
	}
	units := simulated.Population{Kind: s.Kind, Rand: s.Rand}
	lot := inspection.Lot(fmt.Sprintf("L%d", 2601+index))
	clock := time.NewTimer(time.Duration(index) * pace / time.Duration(len(floor)))
	defer clock.Stop()
	var in simulated.Insert
	again := false // the same unit, put in once more
	for n := 1 + index; ; {
		select {
		case <-ctx.Done():
			return nil
		case <-clock.C:
		}
		clock.Reset(pace)
		fault, first := opening[index]
		switch {
		case again && in.Kind != simulated.Whole:
			in = units.Make(simulated.Sound) // the operator puts the unit in as it should be
		case again:
		case first && n == 1+index:
			in = units.Make(fault)
		default:
			in = units.Draw()
		}
		unit, err := demoUnit(s, part, &cal, in, n, lot)
		if err != nil {
			return err
		}
		answer, err := client.Inspect(ctx, unit)
		if err != nil {
			return err
		}
		say(fmt.Sprintf("%s  %-6s  %s  %s", s.Name, answer.Judgement.Verdict, unit.Begin.Unit.Name(), strings.Join(answer.Judgement.Reasons(), " ")))
		if again = answer.Judgement.Verdict == verdict.Retest && !again; !again {
			n += len(floor)
		}
	}
}

// demoUnit measures one insert and makes an inspection of it.
func demoUnit(s *simulated.Station, part *parttype.PartType, cal *network.Calibration, in simulated.Insert, n int, lot inspection.Lot) (*inspection.Case, error) {
	id, err := uuid.NewV7()
	if err != nil {
		return nil, err
	}
	locked := true
	return &inspection.Case{
		Begin: inspection.Begin{
			ID: inspection.ID(id), Purpose: inspection.Production,
			Unit:    inspection.UnitID{Serial: inspection.Serial(fmt.Sprintf("TM%07d", n)), Lot: lot},
			Station: inspection.StationID(s.Name), ContactHead: inspection.ContactHead(s.ContactHead), Operator: "simulated",
			PartType: inspection.PartTypeRef{Name: part.Name, Version: part.Version}, Calibration: inspection.CalibrationID(cal.ID),
			MeasuredAt: time.Now().UTC(), Temperature: &inspection.Temperature{Celsius: 25, StandardUncertainty: 0.2}, ReferenceLock: &locked,
		},
		PartType: part, Calibration: cal,
		Sweeps: []sweep.Sweep{s.Measure(in, s.Window(401))},
	}, nil
}
