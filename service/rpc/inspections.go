package rpc

import (
	"cmp"
	"context"
	"fmt"
	"slices"
	"strconv"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/wire"
)

// inspectionService shows what was recorded.
type inspectionService struct {
	pb.UnimplementedInspectionServiceServer
	s *Server
}

// GetInspection returns one inspection.
func (h inspectionService) GetInspection(ctx context.Context, m *pb.GetInspectionRequest) (*pb.GetInspectionResponse, error) {
	r, err := h.find(ctx, m.GetInspectionId())
	if err != nil {
		return nil, err
	}
	return &pb.GetInspectionResponse{Inspection: wire.RecordToProto(r)}, nil
}

func (h inspectionService) find(ctx context.Context, text string) (*inspection.Record, error) {
	id, err := inspection.ParseID(clip(text))
	if err != nil {
		return nil, within("inspection_id", err)
	}
	r, ok, err := h.s.o.Archive.Find(ctx, id)
	if err != nil {
		return nil, err
	}
	if !ok {
		return nil, inspection.Faultf(inspection.Unknown, "inspection_id", "there is no inspection %s", id)
	}
	return r, nil
}

// ListInspections returns a page of inspections, newest first.
func (h inspectionService) ListInspections(ctx context.Context, m *pb.ListInspectionsRequest) (*pb.ListInspectionsResponse, error) {
	f := inspection.Filter{Serial: inspection.Serial(m.GetSerial()), Lot: inspection.Lot(m.GetLot()), Station: inspection.StationID(m.GetStation())}
	if err := checkNames("serial", m.GetSerial(), "lot", m.GetLot(), "station", m.GetStation()); err != nil {
		return nil, err
	}
	var err error
	if f.From, f.Until, err = span(m.GetMeasuredFrom(), m.GetMeasuredUntil()); err != nil {
		return nil, err
	}
	size, err := pageSize(m.GetPageSize())
	if err != nil {
		return nil, err
	}
	filters := fmt.Sprintf("%q %q %q %v %v", f.Serial, f.Lot, f.Station, f.From.UnixNano(), f.Until.UnixNano())
	position, err := readToken("page_token", m.GetPageToken(), "inspections", filters)
	if err != nil {
		return nil, err
	}
	before, err := sequence("page_token", position)
	if err != nil {
		return nil, err
	}
	page, err := h.s.o.Archive.List(ctx, f, before, size)
	if err != nil {
		return nil, err
	}
	answer := &pb.ListInspectionsResponse{}
	more := len(page) == size
	for bytes := 0; len(page) > 0; page = page[1:] {
		one := wire.RecordToProto(page[0])
		if bytes += proto.Size(one); bytes > maxPageBytes && len(answer.Inspections) > 0 {
			more = true
			break
		}
		answer.Inspections = append(answer.Inspections, one)
	}
	if more {
		last := answer.Inspections[len(answer.Inspections)-1].GetSequence()
		// The first record of all has nothing behind it.
		if last > 1 {
			answer.NextPageToken = makeToken("inspections", filters, strconv.FormatUint(last, 10))
		}
	}
	return answer, nil
}

// checkNames holds optional names against their limit: field, name, field, name ...
func checkNames(pairs ...string) error {
	for i := 0; i < len(pairs); i += 2 {
		if err := checkName(pairs[i], pairs[i+1], false); err != nil {
			return err
		}
	}
	return nil
}

// span converts a span of time; an absent end is open, the zero time.
func span(from, until *timestamppb.Timestamp) (f, u time.Time, err error) {
	for _, t := range []struct {
		field string
		m     *timestamppb.Timestamp
		into  *time.Time
	}{{"measured_from", from, &f}, {"measured_until", until, &u}} {
		if t.m == nil {
			continue
		}
		if t.m.CheckValid() != nil {
			return f, u, malformed(t.field, "want a valid timestamp, got %d s and %d ns", t.m.GetSeconds(), t.m.GetNanos())
		}
		*t.into = t.m.AsTime()
	}
	return f, u, nil
}

func sequence(field, position string) (uint64, error) {
	if position == "" {
		return 0, nil
	}
	n, err := strconv.ParseUint(position, 10, 63)
	if err != nil {
		return 0, malformed(field, "want a token as it was given, got another position")
	}
	return n, nil
}

// CountInspections counts, telling apart what was asked for.
func (h inspectionService) CountInspections(ctx context.Context, m *pb.CountInspectionsRequest) (*pb.CountInspectionsResponse, error) {
	if err := checkNames("station", m.GetStation(), "part_type", m.GetPartType(), "lot", m.GetLot()); err != nil {
		return nil, err
	}
	f := inspection.CountFilter{Station: inspection.StationID(m.GetStation()), PartType: m.GetPartType(), Lot: inspection.Lot(m.GetLot())}
	var err error
	if f.Purpose, err = wire.Purpose(m.GetPurpose()); err != nil {
		return nil, err
	}
	if f.From, f.Until, err = span(m.GetMeasuredFrom(), m.GetMeasuredUntil()); err != nil {
		return nil, err
	}
	by := map[pb.CountDimension]bool{}
	for i, d := range m.GetGroupBy() {
		if _, ok := pb.CountDimension_name[int32(d)]; !ok || d == pb.CountDimension_COUNT_DIMENSION_UNSPECIFIED {
			return nil, malformed(fmt.Sprintf("group_by[%d]", i), "want one of the named values, got %d", d)
		}
		by[d] = true
	}
	f.From, f.Until = quarters(f.From, f.Until)
	counts, err := h.s.o.Archive.Count(ctx, f)
	if err != nil {
		return nil, err
	}
	answer := &pb.CountInspectionsResponse{Counts: group(counts, by)}
	if !f.From.IsZero() {
		answer.CountedFrom = timestamppb.New(f.From)
	}
	if !f.Until.IsZero() {
		answer.CountedUntil = timestamppb.New(f.Until)
	}
	return answer, nil
}

// quarters rounds a span of time outwards to quarters of an hour, which is how counts are kept; an open end stays open.
func quarters(from, until time.Time) (f, u time.Time) {
	const quarter = 15 * time.Minute
	if !from.IsZero() {
		f = from.UTC().Truncate(quarter)
	}
	if !until.IsZero() {
		if u = until.UTC().Truncate(quarter); u.Before(until) {
			u = u.Add(quarter)
		}
	}
	return f, u
}

// group adds up counts over what was not asked for. Without any dimension there is one count, perhaps 0.
func group(counts []inspection.Count, by map[pb.CountDimension]bool) []*pb.InspectionCount {
	sums := map[inspection.Count]int64{}
	if len(by) == 0 {
		sums[inspection.Count{}] = 0
	}
	for _, c := range counts {
		key := inspection.Count{}
		if by[pb.CountDimension_COUNT_DIMENSION_STATION] {
			key.Station = c.Station
		}
		if by[pb.CountDimension_COUNT_DIMENSION_PART_TYPE] {
			key.PartType = c.PartType
		}
		if by[pb.CountDimension_COUNT_DIMENSION_LOT] {
			key.Lot = c.Lot
		}
		if by[pb.CountDimension_COUNT_DIMENSION_VERDICT] {
			key.Verdict = c.Verdict
		}
		sums[key] += c.Inspections
	}
	var all []*pb.InspectionCount
	for key, n := range sums {
		all = append(all, &pb.InspectionCount{
			Station: string(key.Station), PartType: key.PartType, Lot: string(key.Lot), Verdict: wire.Verdict(key.Verdict), Inspections: n,
		})
	}
	slices.SortFunc(all, func(a, b *pb.InspectionCount) int {
		return cmp.Or(cmp.Compare(a.Station, b.Station), cmp.Compare(a.PartType, b.PartType), cmp.Compare(a.Lot, b.Lot), cmp.Compare(a.Verdict, b.Verdict))
	})
	return all
}

// WatchInspections sends inspections as they are recorded. It reads pages from the archive and holds no queue: a slow watcher costs its
// page and its goroutine, and one that takes nothing is cut off with the token from which it goes on.
func (h inspectionService) WatchInspections(m *pb.WatchInspectionsRequest, stream grpc.ServerStreamingServer[pb.WatchInspectionsResponse]) error {
	if err := checkName("station", m.GetStation(), false); err != nil {
		return err
	}
	w := watch{s: h.s, ctx: stream.Context(), stream: stream, station: inspection.StationID(m.GetStation())}
	position, err := readToken("resume_token", m.GetResumeToken(), "watch", m.GetStation())
	if err != nil {
		return err
	}
	last := h.s.o.Archive.Last()
	w.at = last
	if position != "" {
		if w.at, err = sequence("resume_token", position); err != nil {
			return err
		}
		// Such a token is of another store, or of this one before it lost records: waiting for it would look like silence.
		if w.at > last {
			return malformed("resume_token", "want a token of this store, got one behind its newest record, %d", last)
		}
	}
	if err := w.run(); err != nil {
		return resumable{err, w.token()}
	}
	return nil
}

// watch is one watcher under way; at is the sequence that he is told up to.
type watch struct {
	s       *Server
	ctx     context.Context
	stream  grpc.ServerStreamingServer[pb.WatchInspectionsResponse]
	station inspection.StationID
	at      uint64
}

func (w *watch) token() string {
	return makeToken("watch", string(w.station), strconv.FormatUint(w.at, 10))
}

func (w *watch) run() error {
	for {
		page, err := w.s.o.Archive.After(w.ctx, w.at, watchPage)
		if err != nil {
			return err
		}
		for _, r := range page {
			if w.station == "" || r.Begin.Station == w.station {
				if err := w.tell(r); err != nil {
					return err
				}
			}
			w.at = r.Sequence
		}
		select {
		case <-w.s.told.Done():
			return errStopping
		default:
		}
		if len(page) > 0 {
			continue
		}
		if err := w.wait(); err != nil {
			return err
		}
	}
}

// tell sends one record; the token that goes with it is the one behind it.
func (w *watch) tell(r *inspection.Record) error {
	token := makeToken("watch", string(w.station), strconv.FormatUint(r.Sequence, 10))
	return w.send(&pb.WatchInspectionsResponse{Inspection: wire.RecordToProto(r), ResumeToken: token})
}

func (w *watch) send(m *pb.WatchInspectionsResponse) error {
	return w.s.send(w.ctx, func() error { return w.stream.Send(m) })
}

// wait returns when there may be more to tell, after a sign of life where there was silence for long.
func (w *watch) wait() error {
	ctx, cancel := context.WithTimeout(w.ctx, w.s.o.SignsOfLife)
	defer cancel()
	defer context.AfterFunc(w.s.told, cancel)()
	err := w.s.o.Archive.Await(ctx, w.at)
	switch {
	case err == nil:
		return nil
	case w.ctx.Err() != nil:
		return w.ctx.Err()
	case w.s.told.Err() != nil:
		return errStopping
	case ctx.Err() == nil:
		return err
	}
	if err := w.s.still(w.ctx, pb.InspectionService_WatchInspections_FullMethodName); err != nil {
		return err
	}
	return w.send(&pb.WatchInspectionsResponse{ResumeToken: w.token()})
}

// ReadSweeps sends the raw sweeps of one inspection, header by header and chunk by chunk.
func (h inspectionService) ReadSweeps(m *pb.ReadSweepsRequest, stream grpc.ServerStreamingServer[pb.ReadSweepsResponse]) error {
	s, ctx := h.s, stream.Context()
	r, err := h.find(ctx, m.GetInspectionId())
	if err != nil {
		return err
	}
	if n := len(m.GetSweepIndex()); n > inspection.MaxSweeps {
		return malformed("sweep_index", "want at most %d, got %d", inspection.MaxSweeps, n)
	}
	for i, index := range m.GetSweepIndex() {
		if int64(index) >= int64(len(r.Sweeps)) {
			return malformed(fmt.Sprintf("sweep_index[%d]", i), "want below %d, the number of sweeps, got %d", len(r.Sweeps), index)
		}
	}
	points := 0
	for i := range r.Sweeps {
		points += r.Sweeps[i].Points
	}
	if err := s.budget.take(points); err != nil {
		return err
	}
	defer s.budget.give(points)
	sweeps, err := s.o.Archive.Sweeps(ctx, r.Begin.ID)
	if err != nil {
		return err
	}
	send := func(m *pb.ReadSweepsResponse) error { return s.send(ctx, func() error { return stream.Send(m) }) }
	for i := range sweeps {
		if len(m.GetSweepIndex()) > 0 && !slices.Contains(m.GetSweepIndex(), uint32(i)) {
			continue
		}
		head := wire.HeaderToProto(i, inspection.HeaderOf(&sweeps[i]))
		if err := send(&pb.ReadSweepsResponse{Piece: &pb.ReadSweepsResponse_Header{Header: head}}); err != nil {
			return err
		}
		for _, chunk := range wire.SamplesToProto(&sweeps[i]) {
			if err := send(&pb.ReadSweepsResponse{Piece: &pb.ReadSweepsResponse_Samples{Samples: chunk}}); err != nil {
				return err
			}
		}
	}
	return nil
}
