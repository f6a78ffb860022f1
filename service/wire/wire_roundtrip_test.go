package wire

import (
	"math"
	"testing"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/protobuf/proto"
	"pgregory.net/rapid"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
)

// bits compares floats by their bits: -0 is not 0 on the wire.
var bits = cmp.Comparer(func(a, b float64) bool { return math.Float64bits(a) == math.Float64bits(b) })

// same fails unless got is want, nil and empty apart, every float by its bits.
func same(t *rapid.T, what string, want, got any) {
	t.Helper()
	if d := cmp.Diff(want, got, bits); d != "" {
		t.Fatalf("%s came back changed (-want +got):\n%s", what, d)
	}
}

// over sends a message through its wire form.
func over[M proto.Message](t *rapid.T, m M) M {
	t.Helper()
	b, err := proto.Marshal(m)
	if err != nil {
		t.Fatal(err)
	}
	back := m.ProtoReflect().New().Interface().(M)
	if err := proto.Unmarshal(b, back); err != nil {
		t.Fatal(err)
	}
	return back
}

func TestJudgementRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want, software := drawJudgement(t), name(t, "software")
		got, by, err := JudgementFromProto(over(t, JudgementToProto(&want, software)))
		if err != nil || by != software {
			t.Fatal(by, err)
		}
		same(t, "a judgement", want, got)
	})
}

func TestBeginRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want := drawBegin(t)
		got, err := BeginFromProto(over(t, BeginToProto(&want)))
		if err != nil {
			t.Fatal(err)
		}
		same(t, "a begin", want, got)
		if inspection.ContentHash(&want, nil) != inspection.ContentHash(&got, nil) {
			t.Fatal("its content has another hash")
		}
	})
}

func TestHeaderRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want := drawHeader(t, rapid.IntRange(1, sweep.MaxPoints).Draw(t, "points"))
		index := rapid.IntRange(0, 63).Draw(t, "index")
		m := over(t, HeaderToProto(index, want))
		got, err := HeaderFromProto(m)
		if err != nil || int(m.GetIndex()) != index {
			t.Fatal(m.GetIndex(), err)
		}
		same(t, "a header", want, got)
	})
}

func TestRecordRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want := drawRecord(t)
		got, err := RecordFromProto(over(t, RecordToProto(want)))
		if err != nil {
			t.Fatal(err)
		}
		same(t, "a record", want, got)
	})
}

// A sweep cut by SamplesToProto, or anyhow, comes back bit for bit, and completes exactly with its last point.
func TestSweepRoundTripInAnyChunks(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want := drawSweep(t)
		head, err := HeaderFromProto(over(t, HeaderToProto(0, inspection.HeaderOf(&want))))
		if err != nil {
			t.Fatal(err)
		}
		var chunks []*pb.SweepSamples
		if rapid.Bool().Draw(t, "as the service cuts") {
			chunks = SamplesToProto(&want)
			for i, c := range chunks {
				if n := proto.Size(c); n > 256<<10-64 {
					t.Fatalf("chunk %d has %d bytes", i, n)
				}
			}
		} else {
			for from := 0; from < want.Points(); {
				to := from + rapid.IntRange(1, want.Points()-from).Draw(t, "cut")
				c := &pb.SweepSamples{Re: want.Re[from:to]}
				if want.Im != nil {
					c.Im = want.Im[from:to]
				}
				if want.Grid == nil {
					c.FrequencyHz = want.FrequencyHz[from:to]
				}
				chunks = append(chunks, c)
				from = to
			}
		}
		var a Assembly
		a.Start(head)
		for i, c := range chunks {
			got, done, err := a.Add(over(t, c))
			if err != nil {
				t.Fatal(err)
			}
			if done != (i == len(chunks)-1) || done == a.Open() {
				t.Fatalf("chunk %d of %d: done %v, open %v", i, len(chunks), done, a.Open())
			}
			if done {
				same(t, "a sweep", want, got)
			}
		}
		if _, _, err := a.Add(chunks[0]); inspection.KindOf(err) != inspection.Malformed {
			t.Fatalf("a chunk without header: %v, want malformed", err)
		}
	})
}

// A calibration whole (the stored form), and in pieces (as it travels).
func TestCalibrationRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want := drawCalibration(t)
		whole, err := CalibrationFromProto(over(t, CalibrationToProto(want, true)))
		if err != nil {
			t.Fatal(err)
		}
		same(t, "a calibration", want, whole)
		pieces, err := CalibrationFromProto(over(t, CalibrationToProto(want, false)))
		if err != nil {
			t.Fatal(err)
		}
		for _, s := range StandardSamplesToProto(want) {
			if err := AddStandardSamples(pieces, over(t, s)); err != nil {
				t.Fatal(err)
			}
		}
		same(t, "a calibration in pieces", want, pieces)
		if inspection.CalibrationHash(want) != inspection.CalibrationHash(pieces) {
			t.Fatal("its content has another hash")
		}
	})
}

func TestLongStandardIsCut(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want := drawCalibration(t)
		if len(want.Standards) == 0 {
			return
		}
		s := &want.Standards[0]
		n := rapid.SampledFrom([]int{ChunkPoints - 1, ChunkPoints, ChunkPoints + 1, 2*ChunkPoints + 3}).Draw(t, "points")
		s.FrequencyHz, s.Re = repeat(s.FrequencyHz, n), repeat(s.Re, n)
		if s.Im != nil {
			s.Im = repeat(s.Im, n)
		}
		got, err := CalibrationFromProto(CalibrationToProto(want, false))
		if err != nil {
			t.Fatal(err)
		}
		for _, piece := range StandardSamplesToProto(want) {
			if len(piece.GetSamples().GetRe()) > ChunkPoints {
				t.Fatalf("a piece of %d points", len(piece.GetSamples().GetRe()))
			}
			if err := AddStandardSamples(got, piece); err != nil {
				t.Fatal(err)
			}
		}
		same(t, "a long standard", want, got)
	})
}
