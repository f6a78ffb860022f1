package wire

import (
	"time"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
)

var networks = table[network.Kind, pb.FixtureNetwork]{"fixture_network", []pair[network.Kind, pb.FixtureNetwork]{
	{network.PiNetwork, pb.FixtureNetwork_FIXTURE_NETWORK_PI_NETWORK},
	{network.SeriesThrough, pb.FixtureNetwork_FIXTURE_NETWORK_SERIES_THROUGH},
	{network.Reflection, pb.FixtureNetwork_FIXTURE_NETWORK_REFLECTION},
	{network.HighImpedance, pb.FixtureNetwork_FIXTURE_NETWORK_HIGH_IMPEDANCE},
	{network.Unknown, pb.FixtureNetwork_FIXTURE_NETWORK_UNKNOWN},
}}

// NetworkToProto converts the name of a fixture network.
func NetworkToProto(k network.Kind) pb.FixtureNetwork { return networks.toWire(k) }

var standards = table[network.StandardKind, pb.StandardKind]{"kind", []pair[network.StandardKind, pb.StandardKind]{
	{network.Open, pb.StandardKind_STANDARD_KIND_OPEN},
	{network.Short, pb.StandardKind_STANDARD_KIND_SHORT},
	{network.Load, pb.StandardKind_STANDARD_KIND_LOAD},
	{network.Check, pb.StandardKind_STANDARD_KIND_CHECK},
}}

// CalibrationToProto converts a calibration. With samples the standards carry theirs (the stored form); without, they follow as
// StandardSamples.
func CalibrationToProto(c *network.Calibration, samples bool) *pb.Calibration {
	m := &pb.Calibration{
		CalibrationId:         c.ID,
		ContactHead:           c.ContactHead,
		FixtureNetwork:        networks.toWire(c.Network),
		ReferenceImpedanceOhm: c.ReferenceImpedanceOhm,
		NominalTerminationOhm: ptr(c.NominalTerminationOhm),
		TakenAt:               timestamp(c.TakenAt),
		ValidForS:             c.ValidFor.Seconds(),
		TemperatureC:          c.TemperatureC,
		SourceLevel:           &pb.SourceLevel{OffsetDb: c.SourceLevelOffsetDB, StandardUncertaintyDb: c.SourceLevelUncertaintyDB},
		Drift:                 &pb.Drift{GainDb: c.DriftGainDB, PhaseDeg: c.DriftPhaseDeg},
		Contact:               &pb.Contact{StandardUncertaintyOhm: c.ContactUncertaintyOhm},
		ReferenceClock:        &pb.ReferenceClock{OffsetPpm: c.ReferenceClockOffsetPPM, StandardUncertaintyPpm: c.ReferenceClockUncertaintyPPM},
	}
	if n := c.ReceiverNoise; n != nil {
		m.ReceiverNoise = &pb.ReceiverNoise{Rms: n.RMS, SourcePowerDbm: n.SourcePowerDBm}
		if n.Averaging > 0 {
			m.ReceiverNoise.AveragingS = ptr(n.Averaging.Seconds())
		}
	}
	for _, s := range c.Standards {
		std := &pb.Standard{
			Kind:          standards.toWire(s.Kind),
			ResistanceOhm: s.ResistanceOhm, StandardUncertaintyOhm: s.ResistanceUncertaintyOhm,
			InductanceH: s.InductanceHenry, StandardUncertaintyH: s.InductanceUncertaintyHenry,
			CapacitanceF: s.CapacitanceFarad, StandardUncertaintyF: s.CapacitanceUncertaintyFarad,
			Points: uint32(len(s.FrequencyHz)),
		}
		if samples {
			std.Samples = &pb.SweepSamples{FrequencyHz: s.FrequencyHz, Re: s.Re, Im: s.Im}
		}
		m.Standards = append(m.Standards, std)
	}
	return m
}

// CalibrationFromProto converts a calibration; standards without samples wait for them (AddStandardSamples). Absent messages take the
// defaults that the contract states.
func CalibrationFromProto(m *pb.Calibration) (*network.Calibration, error) {
	c := &network.Calibration{
		ID: m.GetCalibrationId(), ContactHead: m.GetContactHead(),
		ReferenceImpedanceOhm: m.GetReferenceImpedanceOhm(),
		TakenAt:               instant(m.GetTakenAt()),
		TemperatureC:          m.TemperatureC,

		SourceLevelUncertaintyDB: network.DefaultSourceLevelUncertaintyDB,
		DriftGainDB:              network.DefaultDriftGainDB, DriftPhaseDeg: network.DefaultDriftPhaseDeg,
		ContactUncertaintyOhm:        network.DefaultContactUncertaintyOhm,
		ReferenceClockOffsetPPM:      m.GetReferenceClock().GetOffsetPpm(),
		ReferenceClockUncertaintyPPM: m.GetReferenceClock().GetStandardUncertaintyPpm(),
	}
	if m.GetTakenAt() != nil && m.GetTakenAt().CheckValid() != nil {
		return nil, inspection.Faultf(inspection.Malformed, "taken_at", "want a valid timestamp, got %v", m.GetTakenAt())
	}
	var err error
	if c.Network, err = networks.toDomain(m.GetFixtureNetwork()); err != nil {
		return nil, err
	}
	c.NominalTerminationOhm = c.Network.NominalTerminationOhm()
	if m.NominalTerminationOhm != nil {
		c.NominalTerminationOhm = m.GetNominalTerminationOhm()
	}
	if c.ValidFor, err = duration("valid_for_s", m.GetValidForS()); err != nil {
		return nil, err
	}
	if n := m.GetReceiverNoise(); n != nil {
		var averaging time.Duration
		if averaging, err = duration("receiver_noise.averaging_s", n.GetAveragingS()); err != nil {
			return nil, err
		}
		c.ReceiverNoise = &network.ReceiverNoise{RMS: n.GetRms(), SourcePowerDBm: n.SourcePowerDbm, Averaging: averaging}
	}
	if l := m.GetSourceLevel(); l != nil {
		c.SourceLevelOffsetDB, c.SourceLevelUncertaintyDB = l.GetOffsetDb(), l.GetStandardUncertaintyDb()
	}
	if d := m.GetDrift(); d != nil {
		c.DriftGainDB, c.DriftPhaseDeg = d.GetGainDb(), d.GetPhaseDeg()
	}
	if k := m.GetContact(); k != nil {
		c.ContactUncertaintyOhm = k.GetStandardUncertaintyOhm()
	}
	for _, std := range m.GetStandards() {
		s := network.Standard{
			ResistanceOhm: std.GetResistanceOhm(), ResistanceUncertaintyOhm: std.GetStandardUncertaintyOhm(),
			InductanceHenry: std.GetInductanceH(), InductanceUncertaintyHenry: std.GetStandardUncertaintyH(),
			CapacitanceFarad: std.GetCapacitanceF(), CapacitanceUncertaintyFarad: std.GetStandardUncertaintyF(),
			FrequencyHz: std.GetSamples().GetFrequencyHz(), Re: std.GetSamples().GetRe(), Im: std.GetSamples().GetIm(),
		}
		if s.Kind, err = standards.toDomain(std.GetKind()); err != nil {
			return nil, in("standards", err)
		}
		c.Standards = append(c.Standards, s)
	}
	return c, nil
}

// AddStandardSamples joins a chunk to the standard that it belongs to. Imaginary parts are absent where the standards were read as
// magnitudes; the chunks of one standard are alike in that.
func AddStandardSamples(c *network.Calibration, m *pb.StandardSamples) error {
	if int64(m.GetStandardIndex()) >= int64(len(c.Standards)) {
		return inspection.Faultf(inspection.Malformed, "standard_index", "want below %d, got %d", len(c.Standards), m.GetStandardIndex())
	}
	s, w := &c.Standards[m.GetStandardIndex()], m.GetSamples()
	n := len(w.GetFrequencyHz())
	if n == 0 || len(w.GetRe()) != n || (len(w.GetIm()) != n && len(w.GetIm()) != 0) {
		return inspection.Faultf(inspection.Malformed, "samples", "want one sample for each frequency, complex or as magnitude, got %d frequencies, %d real and %d imaginary parts", n, len(w.GetRe()), len(w.GetIm()))
	}
	if len(s.Re) > 0 && (len(s.Im) > 0) != (len(w.GetIm()) > 0) {
		return inspection.Faultf(inspection.Malformed, "samples.im", "want them in every chunk of a standard or in none")
	}
	if len(s.FrequencyHz)+n > sweep.MaxPoints {
		return inspection.Faultf(inspection.Malformed, "samples", "want at most %d points in one standard, got at least %d", sweep.MaxPoints, len(s.FrequencyHz)+n)
	}
	s.FrequencyHz = append(s.FrequencyHz, w.GetFrequencyHz()...)
	s.Re = append(s.Re, w.GetRe()...)
	s.Im = append(s.Im, w.GetIm()...)
	return nil
}

// StandardSamplesToProto cuts the samples of a calibration's standards into chunks, in the order in which they are to be sent.
func StandardSamplesToProto(c *network.Calibration) []*pb.StandardSamples {
	var chunks []*pb.StandardSamples
	for i, s := range c.Standards {
		for from := 0; from < len(s.FrequencyHz); from += ChunkPoints {
			to := min(from+ChunkPoints, len(s.FrequencyHz))
			chunk := &pb.SweepSamples{FrequencyHz: s.FrequencyHz[from:to], Re: s.Re[from:to]}
			if len(s.Im) > 0 {
				chunk.Im = s.Im[from:to]
			}
			chunks = append(chunks, &pb.StandardSamples{StandardIndex: uint32(i), Samples: chunk})
		}
	}
	return chunks
}
