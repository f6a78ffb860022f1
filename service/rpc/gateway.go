package rpc

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"net/http"
	"net/url"
	"time"

	"github.com/grpc-ecosystem/grpc-gateway/v2/runtime"
	"github.com/grpc-ecosystem/grpc-gateway/v2/utilities"
	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/metadata"
	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/proto"

	pb "example.com/admit/api/admit/v1"
)

// Handler returns the JSON form of the reading calls below /v1/, GET only. Every request becomes a call of the gRPC server, in the name
// of the caller of the request, and passes what every call passes. Fields with default values are written, absent messages are not.
func (s *Server) Handler() (http.Handler, error) {
	nothing := func(string) (string, bool) { return "", false }
	mux := runtime.NewServeMux(
		runtime.WithDisablePathLengthFallback(),
		runtime.WithDisableHTTPMethodOverride(),
		runtime.SetQueryParameterParser(strictQuery{}),
		runtime.WithMarshalerOption(runtime.MIMEWildcard, &runtime.JSONPb{MarshalOptions: protojson.MarshalOptions{EmitDefaultValues: true}}),
		// No header of a request becomes metadata of the call, and no metadata a header.
		runtime.WithIncomingHeaderMatcher(nothing),
		runtime.WithOutgoingHeaderMatcher(nothing),
		runtime.WithOutgoingTrailerMatcher(nothing),
	)
	to := inwardCalls{s.client}
	ctx := context.Background()
	err := errors.Join(
		pb.RegisterStationServiceHandlerClient(ctx, mux, pb.NewStationServiceClient(to)),
		pb.RegisterInspectionServiceHandlerClient(ctx, mux, pb.NewInspectionServiceClient(to)),
		pb.RegisterPartTypeServiceHandlerClient(ctx, mux, pb.NewPartTypeServiceClient(to)),
		pb.RegisterStoreServiceHandlerClient(ctx, mux, pb.NewStoreServiceClient(to)),
	)
	if err != nil {
		return nil, err
	}
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		w.Header().Set("Cache-Control", "no-store")
		w.Header().Set("X-Content-Type-Options", "nosniff")
		if r.Method != http.MethodGet {
			w.Header().Set("Allow", http.MethodGet)
			refuse(w, http.StatusMethodNotAllowed, codes.Unimplemented, "only GET is served here; whoever changes something does it by gRPC")
			return
		}
		if s.told.Err() != nil {
			w.Header().Set("Retry-After", "2")
			refuse(w, http.StatusServiceUnavailable, codes.Unavailable, errStopping.Error())
			return
		}
		c, err := s.HTTPCaller(r)
		if err != nil {
			s.security(r.Context(), "request_refused", "", r.URL.Path, err)
			refuse(w, http.StatusForbidden, codes.PermissionDenied, err.Error())
			return
		}
		r = r.WithContext(context.WithValue(r.Context(), callerContext{}, c))
		mux.ServeHTTP(&patientWriter{w, http.NewResponseController(w), s.o.Patience}, r)
	}), nil
}

// strictQuery refuses parameters that a call does not have: a mistyped filter must not answer with everything.
type strictQuery struct{ known runtime.DefaultQueryParser }

// Parse fills the request from the query.
func (q strictQuery) Parse(m proto.Message, values url.Values, filter *utilities.DoubleArray) error {
	fields := m.ProtoReflect().Descriptor().Fields()
	for key := range values {
		if fields.ByTextName(key) == nil && fields.ByJSONName(key) == nil {
			return fmt.Errorf("%s: the call has no such parameter", clip(key))
		}
	}
	return q.known.Parse(m, values, filter)
}

// refuse answers a request that does not become a call, in the form of those that do.
func refuse(w http.ResponseWriter, status int, code codes.Code, text string) {
	body, err := json.Marshal(map[string]any{"code": code, "message": text, "details": []any{}})
	if err != nil {
		body = []byte("{}")
	}
	w.Header().Set("Content-Type", "application/json")
	w.WriteHeader(status)
	_, _ = w.Write(body) // the caller may be gone, and nothing can be told to him then
}

// inwardCalls makes calls through the process. Whatever metadata a call would carry is replaced by the caller's name, which the server
// believes on this connection.
type inwardCalls struct{ to grpc.ClientConnInterface }

func (i inwardCalls) Invoke(ctx context.Context, method string, args, reply any, opts ...grpc.CallOption) error {
	return i.to.Invoke(named(ctx), method, args, reply, opts...)
}

func (i inwardCalls) NewStream(ctx context.Context, desc *grpc.StreamDesc, method string, opts ...grpc.CallOption) (grpc.ClientStream, error) {
	return i.to.NewStream(named(ctx), desc, method, opts...)
}

func named(ctx context.Context) context.Context {
	return metadata.NewOutgoingContext(ctx, metadata.Pairs(callerKey, callerFrom(ctx).Name))
}

// patientWriter gives every write the time that a slow reader gets, in place of a deadline for the whole answer, which would cut off a
// watcher who is well.
type patientWriter struct {
	http.ResponseWriter
	control  *http.ResponseController
	patience time.Duration
}

func (p *patientWriter) Write(b []byte) (int, error) {
	// A writer without deadlines (a test's recorder) writes without one.
	_ = p.control.SetWriteDeadline(time.Now().Add(p.patience))
	return p.ResponseWriter.Write(b)
}

// Unwrap lets a ResponseController find what is below.
func (p *patientWriter) Unwrap() http.ResponseWriter { return p.ResponseWriter }
