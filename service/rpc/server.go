package rpc

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"sync"
	"sync/atomic"
	"time"

	"github.com/grpc-ecosystem/go-grpc-middleware/v2/interceptors/recovery"
	"google.golang.org/grpc"
	"google.golang.org/grpc/credentials"
	"google.golang.org/grpc/credentials/insecure"
	"google.golang.org/grpc/health"
	healthpb "google.golang.org/grpc/health/grpc_health_v1"
	"google.golang.org/grpc/keepalive"
	"google.golang.org/grpc/reflection"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/floor"
	"example.com/admit/service/inspection"
)

// Options are what a Server needs. Durations and numbers that are 0 take the stated value.
type Options struct {
	Desk      *inspection.Desk // with an Observer; the server's board hears besides
	Archive   inspection.Archive
	Publisher inspection.Publisher
	Stations  []inspection.Station // none: every name is accepted
	Access    Access
	TLS       *Certificates // nil: only plain listeners on loopback
	Log       *slog.Logger

	Grace       time.Duration // how long a stop waits for what is under way; 5 s
	Patience    time.Duration // how long a reader may take no message; 10 s
	SignsOfLife time.Duration // silence after which a watcher gets an empty message; 2 s
	StoreCheck  time.Duration // how often the store is asked whether it can record; 2 s
	MaxStreams  int           // streams at once; 4096
	MaxPoints   int           // sample points in memory at once; 16 million
}

// Server serves every service of the contract, with health and reflection. It is safe for concurrent use.
type Server struct {
	o     Options
	desk  *inspection.Desk
	log   *slog.Logger
	board *floor.Board
	book  atomic.Pointer[book]

	grpc   *grpc.Server
	health *health.Server
	inward *inwardListener  // requests by HTTP arrive here
	client *grpc.ClientConn // and leave from here

	budget    budget
	streams   atomic.Int64
	pumps     sync.WaitGroup // goroutines of receive and send
	served    atomic.Bool
	told      context.Context // done: watchers end
	tell      context.CancelFunc
	hurry     chan struct{} // closed: everything ends
	stopOnce  sync.Once
	hurryOnce sync.Once

	foreign    context.Context // ends the streams of services that are not ours
	endForeign context.CancelFunc
}

// New returns a server that is ready to serve. It looks up the newest record of each station. Whoever makes one must Serve or Close it.
func New(o Options) (*Server, error) {
	o.setDefaults()
	if o.Desk == nil || o.Desk.Observer == nil || o.Desk.Clock == nil || o.Archive == nil || o.Publisher == nil || o.Log == nil {
		return nil, errors.New("rpc: a desk with observer and clock, an archive, a publisher and a log are needed")
	}
	if err := o.Access.Check(); err != nil {
		return nil, err
	}
	board, err := floor.New(o.Stations, o.Desk.Clock)
	if err != nil {
		return nil, err
	}
	if err := board.Seed(context.Background(), o.Archive); err != nil {
		return nil, fmt.Errorf("the newest record of each station: %w", err)
	}
	desk := o.Desk.HeardBy(audience{board, o.Desk.Observer})
	s := &Server{
		o: o, desk: desk, log: o.Log, board: board, health: health.NewServer(), inward: newInwardListener(),
		budget: budget{most: int64(o.MaxPoints)},
		hurry:  make(chan struct{}),
	}
	s.book.Store(newBook(o.Access))
	s.told, s.tell = context.WithCancel(context.Background())
	s.foreign, s.endForeign = context.WithCancel(context.Background())
	s.grpc = grpc.NewServer(s.serverOptions()...)
	pb.RegisterStationServiceServer(s.grpc, stationService{s: s})
	pb.RegisterInspectionServiceServer(s.grpc, inspectionService{s: s})
	pb.RegisterPartTypeServiceServer(s.grpc, partTypeService{s: s})
	pb.RegisterJudgementServiceServer(s.grpc, judgementService{s: s})
	pb.RegisterStoreServiceServer(s.grpc, storeService{s: s})
	healthpb.RegisterHealthServer(s.grpc, s.health)
	reflection.Register(s.grpc)
	s.setHealth(healthpb.HealthCheckResponse_NOT_SERVING)
	s.client, err = grpc.NewClient("passthrough:///in-process",
		grpc.WithTransportCredentials(insecure.NewCredentials()), grpc.WithNoProxy(),
		grpc.WithContextDialer(func(ctx context.Context, _ string) (net.Conn, error) { return s.inward.Dial(ctx) }))
	if err != nil {
		return nil, err
	}
	return s, nil
}

func (o *Options) setDefaults() {
	o.Grace = cmp.Or(o.Grace, 5*time.Second)
	o.Patience = cmp.Or(o.Patience, 10*time.Second)
	o.SignsOfLife = cmp.Or(o.SignsOfLife, 2*time.Second)
	o.StoreCheck = cmp.Or(o.StoreCheck, 2*time.Second)
	o.MaxStreams = cmp.Or(o.MaxStreams, 4096)
	o.MaxPoints = cmp.Or(o.MaxPoints, 16_000_000)
}

func (s *Server) serverOptions() []grpc.ServerOption {
	var secure credentials.TransportCredentials
	if s.o.TLS != nil {
		secure = credentials.NewTLS(s.o.TLS.Config())
	}
	rescue := recovery.WithRecoveryHandlerContext(s.recovered)
	return []grpc.ServerOption{
		grpc.Creds(doors{secure, s.log}),
		grpc.MaxRecvMsgSize(hardMessage),
		grpc.MaxConcurrentStreams(MaxConnectionStreams),
		grpc.MaxHeaderListSize(MaxHeaderList),
		grpc.ConnectionTimeout(10 * time.Second),
		// Fixed windows: what a sender may push ahead of the handler is bounded, whatever the link.
		grpc.InitialWindowSize(hardMessage),
		grpc.InitialConnWindowSize(4 * hardMessage),
		grpc.KeepaliveParams(keepalive.ServerParameters{Time: KeepaliveTime, Timeout: KeepaliveTimeout}),
		grpc.KeepaliveEnforcementPolicy(keepalive.EnforcementPolicy{MinTime: KeepaliveMinTime, PermitWithoutStream: true}),
		grpc.WaitForHandlers(true),
		grpc.ChainUnaryInterceptor(s.unary, recovery.UnaryServerInterceptor(rescue)),
		grpc.ChainStreamInterceptor(s.stream, recovery.StreamServerInterceptor(rescue)),
	}
}

// Board returns what the stations were last seen doing.
func (s *Server) Board() *floor.Board { return s.board }

// Streams returns how many streams are open.
func (s *Server) Streams() int { return int(s.streams.Load()) }

// SetAccess replaces who may do what; calls from now on are held against it. A faulty one is refused and the old one stays.
func (s *Server) SetAccess(a Access) error {
	if err := a.Check(); err != nil {
		return err
	}
	s.book.Store(newBook(a))
	return nil
}

// setHealth sets the health of every service, and that of the whole under the empty name.
func (s *Server) setHealth(to healthpb.HealthCheckResponse_ServingStatus) {
	s.health.SetServingStatus("", to)
	for name := range s.grpc.GetServiceInfo() {
		s.health.SetServingStatus(name, to)
	}
}

// audience is two observers.
type audience struct{ first, second inspection.Observer }

func (a audience) Judged(r *inspection.Record, fit time.Duration) {
	a.first.Judged(r, fit)
	a.second.Judged(r, fit)
}

func (a audience) Recorded(r *inspection.Record, lastSampleToRecorded time.Duration) {
	a.first.Recorded(r, lastSampleToRecorded)
	a.second.Recorded(r, lastSampleToRecorded)
}

func (a audience) Rejected(station inspection.StationID, kind inspection.Kind) {
	a.first.Rejected(station, kind)
	a.second.Rejected(station, kind)
}
