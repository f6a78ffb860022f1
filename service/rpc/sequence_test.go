package rpc

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/mem"
	"google.golang.org/grpc/status"
	"google.golang.org/protobuf/proto"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/wire"
)

// rawCodec sends and receives bytes as they are.
type rawCodec struct{}

func (rawCodec) Name() string { return "proto" }

func (rawCodec) Marshal(v any) (mem.BufferSlice, error) {
	b, ok := v.([]byte)
	if !ok {
		return nil, fmt.Errorf("want bytes, got %T", v)
	}
	return mem.BufferSlice{mem.SliceBuffer(b)}, nil
}

func (rawCodec) Unmarshal(data mem.BufferSlice, v any) error {
	into, ok := v.(*[]byte)
	if !ok {
		return fmt.Errorf("want bytes, got %T", v)
	}
	*into = data.Materialize()
	return nil
}

// Frames in any order, any of them mutated, cancelled anywhere (promise P12, small): no panic, no fault of ours, an answer of the
// contract, and the next good inspection works. The seed is printed.
func TestAnySequenceOfFrames(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	rounds := 1500
	if testing.Short() {
		rounds = 300
	}
	seed := rand.Uint64()
	t.Log("seed", seed)
	random := rand.New(rand.NewPCG(seed, 3))
	logged := f.log.since()
	codesSeen := map[codes.Code]int{}
	for range rounds {
		method, frames := pb.StationService_Inspect_FullMethodName, inspectFrames(t)
		switch random.IntN(3) {
		case 0:
			method, frames = pb.JudgementService_Judge_FullMethodName, judgeFrames(t)
		case 1:
			method, frames = pb.StationService_PublishCalibration_FullMethodName, calibrationFrames(t)
		}
		for range random.IntN(4) {
			switch i, k := random.IntN(len(frames)), random.IntN(len(frames)); random.IntN(5) {
			case 0:
				frames[i], frames[k] = frames[k], frames[i]
			case 1:
				frames = append(frames, frames[i])
			case 2:
				frames[i] = nil
			case 3:
				frames = frames[:i+1]
			default:
				b := append([]byte(nil), frames[i]...)
				for range 1 + random.IntN(4) {
					if len(b) > 0 {
						b[random.IntN(len(b))] = byte(random.Uint32())
					}
				}
				frames[i] = b[:len(b)-random.IntN(min(len(b), 3)+1)]
			}
		}
		err := sendFrames(conn, method, frames, random.IntN(10) == 0)
		code := status.Code(err)
		codesSeen[code]++
		switch code {
		case codes.OK, codes.InvalidArgument, codes.FailedPrecondition, codes.AlreadyExists, codes.PermissionDenied, codes.Canceled:
		case codes.Internal: // the transport's word for a frame that is no message, or none at all
			if r := refusalOf(t, err); r.reason != "" || strings.Contains(r.text, "internal fault") {
				t.Errorf("%s: %v", method, err)
			}
		default:
			t.Errorf("%s: %v", method, err)
		}
	}
	if text := logged(); strings.Contains(text, "call_panicked") || strings.Contains(text, "level=ERROR") {
		t.Error("a sequence of frames broke something")
	}
	if codesSeen[codes.InvalidArgument] == 0 || codesSeen[codes.OK] == 0 {
		t.Errorf("codes %v: want refusals and good ones, else nothing was tried", codesSeen)
	}
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
	eventually(t, "no stream is left", func() bool { return f.server.Streams() == 0 })
	if held := f.server.budget.held.Load(); held != 0 {
		t.Errorf("%d points are still held", held)
	}
}

func sendFrames(conn *grpc.ClientConn, method string, frames [][]byte, leave bool) error {
	ctx, cancel := context.WithTimeout(context.Background(), 10*time.Second)
	defer cancel()
	s, err := conn.NewStream(ctx, &grpc.StreamDesc{ClientStreams: true, ServerStreams: true}, method, grpc.ForceCodecV2(rawCodec{}))
	if err != nil {
		return err
	}
	for _, b := range frames {
		if s.SendMsg(b) != nil {
			break // the status is what RecvMsg returns
		}
	}
	if leave {
		cancel()
	} else if err := s.CloseSend(); err != nil {
		return err
	}
	for {
		var b []byte
		if err := s.RecvMsg(&b); errors.Is(err, io.EOF) {
			return nil
		} else if err != nil {
			return err
		}
	}
}

func marshalAll[M proto.Message](t *testing.T, messages []M) [][]byte {
	t.Helper()
	var all [][]byte
	for _, m := range messages {
		b, err := proto.Marshal(m)
		if err != nil {
			t.Fatal(err)
		}
		all = append(all, b)
	}
	return all
}

func inspectFrames(t *testing.T) [][]byte {
	u := newUnit("N1", "TM0000001")
	return marshalAll(t, u.messages())
}

func judgeFrames(t *testing.T) [][]byte {
	u := newUnit("N1", "TM0000001")
	m := []*pb.JudgeRequest{{Message: &pb.JudgeRequest_Context{Context: &pb.JudgeContext{Begin: wire.BeginToProto(&u.begin), LimitsFile: limitsFile(t, partType)}}}}
	for _, one := range u.messages()[1:3] {
		if h := one.GetHeader(); h != nil {
			m = append(m, &pb.JudgeRequest{Message: &pb.JudgeRequest_Header{Header: h}})
		} else {
			m = append(m, &pb.JudgeRequest{Message: &pb.JudgeRequest_Samples{Samples: one.GetSamples()}})
		}
	}
	return marshalAll(t, m)
}

func calibrationFrames(t *testing.T) [][]byte {
	c := newCalibration("N1-A-2026-11-30", "N1-A")
	m := []*pb.PublishCalibrationRequest{{Message: &pb.PublishCalibrationRequest_Calibration{Calibration: wire.CalibrationToProto(c, false)}}}
	for _, s := range wire.StandardSamplesToProto(c) {
		m = append(m, &pb.PublishCalibrationRequest{Message: &pb.PublishCalibrationRequest_Samples{Samples: s}})
	}
	return marshalAll(t, m)
}
