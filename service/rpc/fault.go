package rpc

import (
	"context"
	"errors"
	"log/slog"
	"slices"
	"strconv"
	"strings"
	"time"

	"google.golang.org/genproto/googleapis/rpc/errdetails"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"
	"google.golang.org/protobuf/protoadapt"
	"google.golang.org/protobuf/types/known/durationpb"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype/document"
)

// ErrorDomain is the domain of every ErrorInfo; its reason is the kind in capitals.
const ErrorDomain = "admit"

// said is how a kind is said by gRPC. A delay above 0 tells the caller when to send the same again.
type said struct {
	code   codes.Code
	reason string
	delay  time.Duration
}

// sayings is the one place that turns kinds into gRPC codes. HTTP takes its codes from these.
var sayings = map[inspection.Kind]said{
	inspection.Broken:      {codes.Internal, "INTERNAL_FAULT", 0},
	inspection.Malformed:   {codes.InvalidArgument, "MALFORMED", 0},
	inspection.Unknown:     {codes.FailedPrecondition, "UNKNOWN", 0},
	inspection.Conflict:    {codes.AlreadyExists, "CONFLICT", 0},
	inspection.Forbidden:   {codes.PermissionDenied, "FORBIDDEN", 0},
	inspection.Busy:        {codes.ResourceExhausted, "BUSY", time.Second},
	inspection.Unavailable: {codes.Unavailable, "UNAVAILABLE", 2 * time.Second},
}

// Bounds of what an error says: details travel in a header, and some clients refuse headers above 8 KiB.
const (
	maxErrorText    = 1024 // bytes of the message
	maxDescription  = 240  // bytes of one violation
	maxDetailsBytes = 4096 // bytes of all violations
)

// resumable is a fault that ends a watch, with the token from which the watcher goes on.
type resumable struct {
	error
	token string
}

func (r resumable) Unwrap() error { return r.error }

// answer turns what a handler returned into what the caller is told.
func (s *Server) answer(ctx context.Context, method string, err error) error {
	if err == nil {
		return nil
	}
	var f *inspection.Fault
	if !errors.As(err, &f) {
		if _, ok := status.FromError(err); ok {
			return err
		}
		if errors.Is(err, context.Canceled) || errors.Is(err, context.DeadlineExceeded) {
			return status.FromContextError(err).Err()
		}
		f = &inspection.Fault{Kind: inspection.Broken, Err: err}
	}
	word, ok := sayings[f.Kind]
	if !ok {
		word = sayings[inspection.Broken]
	}
	text := f.Error()
	if word.code == codes.Internal {
		// What broke is for the log, not for the caller.
		s.log.LogAttrs(ctx, slog.LevelError, "call_failed", slog.String("method", method), slog.Any("error", err))
		text = "internal fault; the log of the service says more"
	}
	if f.Kind == inspection.Unknown && slices.Contains(reads, method) {
		word.code = codes.NotFound
	}
	st := status.New(word.code, shorten(text, maxErrorText))
	if with, bad := st.WithDetails(details(err, f, word)...); bad == nil {
		st = with
	}
	return st.Err()
}

func details(err error, f *inspection.Fault, word said) []protoadapt.MessageV1 {
	info := &errdetails.ErrorInfo{Reason: word.reason, Domain: ErrorDomain, Metadata: map[string]string{}}
	if f.Field != "" {
		info.Metadata["field"] = shorten(f.Field, inspection.MaxText)
	}
	var r resumable
	if errors.As(err, &r) {
		info.Metadata["resume_token"] = r.token
	}
	all := []protoadapt.MessageV1{info}
	if f.Kind == inspection.Malformed {
		all = append(all, &errdetails.BadRequest{FieldViolations: violations(f)})
	}
	if word.delay > 0 {
		all = append(all, &errdetails.RetryInfo{RetryDelay: durationpb.New(word.delay)})
	}
	return all
}

// violations lists what is wrong with the request: every fault of a limits file, else the one field.
func violations(f *inspection.Fault) []*errdetails.BadRequest_FieldViolation {
	var list document.Faults
	if !errors.As(f.Err, &list) {
		return []*errdetails.BadRequest_FieldViolation{{Field: shorten(f.Field, maxDescription), Description: shorten(f.Err.Error(), maxDescription)}}
	}
	var all []*errdetails.BadRequest_FieldViolation
	left := maxDetailsBytes
	for i, d := range list {
		v := &errdetails.BadRequest_FieldViolation{Field: shorten(d.Field, maxDescription), Description: shorten(d.Text, maxDescription)}
		if d.Line > 0 {
			v.Description = "line " + strconv.Itoa(d.Line) + ": " + v.Description
		}
		if left -= len(v.Field) + len(v.Description) + 8; left < 0 {
			rest := strconv.Itoa(len(list) - i)
			return append(all, &errdetails.BadRequest_FieldViolation{Field: f.Field, Description: rest + " more faults do not fit into this answer"})
		}
		all = append(all, v)
	}
	return all
}

// shorten cuts a text to at most n bytes, on the border of a character.
func shorten(text string, n int) string {
	if len(text) <= n {
		return text
	}
	return strings.ToValidUTF8(text[:n-3], "") + "..."
}

// security logs one line about a caller who was refused, or who tried to change the past.
func (s *Server) security(ctx context.Context, event, caller, method string, why error) {
	s.log.LogAttrs(ctx, slog.LevelWarn, "security",
		slog.String("event", event), slog.String("caller", clip(caller)), slog.String("method", clip(method)), slog.String("why", shorten(why.Error(), maxErrorText)))
}

// malformed is a fault of one field of a request.
func malformed(field, format string, args ...any) error {
	return inspection.Faultf(inspection.Malformed, field, format, args...)
}
