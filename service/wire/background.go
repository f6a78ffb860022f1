package wire

import (
	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
)

// BackgroundToProto converts what was known of earlier inspections; nothing known is absent.
func BackgroundToProto(b *inspection.Background) *pb.Background {
	if b.AttemptsUsed == 0 && b.HighAtLowDrive == 0 && len(b.Readings) == 0 && b.Lot == nil && b.Previous == nil {
		return nil
	}
	m := &pb.Background{AttemptsUsed: uint32(b.AttemptsUsed), HighAtLowDrive: uint32(b.HighAtLowDrive)}
	for _, p := range b.Readings {
		m.Readings = append(m.Readings, &pb.EarlierReading{
			Quantity: string(p.Quantity), Where: whereToProto(p.Where), Mean: estimate(p.Mean),
			CommonUncertainty: p.CommonUncertainty, Readings: uint32(p.Readings),
		})
	}
	if l := b.Lot; l != nil {
		m.Lot = &pb.LotMedian{
			Units: uint32(l.Units), MotionalResistanceOhm: l.ResistanceOhm, MotionalCapacitanceF: l.CapacitanceFarad, ShuntCapacitanceF: l.ShuntCapacitanceFarad,
		}
	}
	if p := b.Previous; p != nil {
		m.Previous = &pb.PreviousUnit{
			Unit: UnitToProto(p.Unit), MotionalResonanceHz: estimate(p.ResonanceHz), MotionalResistanceOhm: estimate(p.ResistanceOhm),
			MotionalCapacitanceF: estimate(p.CapacitanceFarad), ShuntCapacitanceF: estimate(p.ShuntCapacitanceFarad),
		}
	}
	return m
}

// BackgroundFromProto converts it back. A number that is none, or infinite, is refused, as everywhere in a judgement.
func BackgroundFromProto(m *pb.Background) (b inspection.Background, err error) {
	if m == nil {
		return b, nil
	}
	if err := finite(m.ProtoReflect()); err != nil {
		return b, err
	}
	b.AttemptsUsed, b.HighAtLowDrive = int(m.GetAttemptsUsed()), int(m.GetHighAtLowDrive())
	for _, p := range m.GetReadings() {
		b.Readings = append(b.Readings, verdict.Past{
			Quantity: parttype.Quantity(p.GetQuantity()), Where: whereFromProto(p.GetWhere()), Mean: value(p.GetMean()),
			CommonUncertainty: p.GetCommonUncertainty(), Readings: int(p.GetReadings()),
		})
	}
	if l := m.GetLot(); l != nil {
		b.Lot = &inspection.LotMedian{
			Units: int(l.GetUnits()), ResistanceOhm: l.GetMotionalResistanceOhm(), CapacitanceFarad: l.GetMotionalCapacitanceF(), ShuntCapacitanceFarad: l.GetShuntCapacitanceF(),
		}
	}
	if p := m.GetPrevious(); p != nil {
		unit, err := unitFromProto(p.GetUnit())
		if err != nil {
			return b, in("previous", err)
		}
		b.Previous = &inspection.PreviousUnit{
			Unit: unit, ResonanceHz: value(p.GetMotionalResonanceHz()), ResistanceOhm: value(p.GetMotionalResistanceOhm()),
			CapacitanceFarad: value(p.GetMotionalCapacitanceF()), ShuntCapacitanceFarad: value(p.GetShuntCapacitanceF()),
		}
	}
	return b, nil
}
