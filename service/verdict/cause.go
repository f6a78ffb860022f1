package verdict

// Cause is the code of a retest cause.
type Cause string

// The retest causes.
const (
	NoUnit                   Cause = "no_unit"
	Shorted                  Cause = "shorted"
	NoResonance              Cause = "no_resonance"
	TwoUnits                 Cause = "two_units"
	SameUnitAgain            Cause = "same_unit_again"
	UnstableContact          Cause = "unstable_contact"
	HighResistanceAtLowDrive Cause = "high_resistance_at_low_drive"
	ResonanceOutsideSweep    Cause = "resonance_outside_sweep"
	SweptTooFast             Cause = "swept_too_fast"
	TooNoisy                 Cause = "too_noisy"
	UndecidedAtLimit         Cause = "undecided_at_limit"
	CalibrationMissing       Cause = "calibration_missing"
	CalibrationExpired       Cause = "calibration_expired"
	CalibrationMismatch      Cause = "calibration_mismatch"
	ReferenceUnlocked        Cause = "reference_unlocked"
	DriveOrderBroken         Cause = "drive_order_broken"
	DriveLevelMissed         Cause = "drive_level_missed"
	SurveyTooCoarse          Cause = "survey_too_coarse"
	ModelMisfit              Cause = "model_misfit"
	TemperatureOutOfRange    Cause = "temperature_out_of_range"
)

// remedy is what the operator is asked to do about a cause, and whether the station rather than the unit is to be mended.
type remedy struct {
	advice  string
	station bool
}

// remedies holds every cause; a cause without a row is a defect that a test finds.
var remedies = map[Cause]remedy{
	NoUnit:                   {"Insert a unit, close the contact head, and repeat.", false},
	Shorted:                  {"Take the unit out, look for a bridge between the contacts or pins, re-seat it, and repeat.", false},
	NoResonance:              {"Re-seat the unit and repeat; if it stays silent, set it aside for a look at the part type and the contacts.", false},
	TwoUnits:                 {"Make sure that only one unit lies in the contact head, and repeat.", false},
	SameUnitAgain:            {"Take the measured unit out, insert the next one, and repeat.", false},
	UnstableContact:          {"Clean the contacts, re-seat the unit, and repeat.", false},
	HighResistanceAtLowDrive: {"Re-seat the unit and repeat at the lowest level first; do not raise the drive.", false},
	ResonanceOutsideSweep:    {"Check that the part type matches the unit, then repeat with the sweep moved or widened.", false},
	SweptTooFast:             {"Repeat with a longer dwell at each frequency, or state the dwell and a phase-continuous source.", false},
	TooNoisy:                 {"Clean the contacts, re-seat the unit, and repeat; if it persists, check the cables and the source level.", false},
	UndecidedAtLimit:         {"Re-seat the unit and repeat: the value lies too close to its limit to decide.", false},
	CalibrationMissing:       {"Calibrate this contact head, then repeat.", true},
	CalibrationExpired:       {"Calibrate this contact head again, then repeat.", true},
	CalibrationMismatch:      {"Check contact head and cables against the calibration, calibrate again, then repeat.", true},
	ReferenceUnlocked:        {"Check the reference clock of the station; when it is locked again, repeat.", true},
	DriveOrderBroken:         {"Repeat with a fresh unit: the sweeps must go from the lowest level up.", true},
	DriveLevelMissed:         {"Check the source level of the station, then repeat.", true},
	SurveyTooCoarse:          {"Repeat with a finer or longer survey.", true},
	ModelMisfit:              {"Re-seat the unit and repeat; if it persists, set it aside and call the test engineer.", false},
	TemperatureOutOfRange:    {"Wait until the unit has the temperature of the station, then repeat.", true},
}

// Causes lists every retest cause, in the order of their definition.
func Causes() []Cause {
	return []Cause{NoUnit, Shorted, NoResonance, TwoUnits, SameUnitAgain, UnstableContact, HighResistanceAtLowDrive, ResonanceOutsideSweep,
		SweptTooFast, TooNoisy, UndecidedAtLimit, CalibrationMissing, CalibrationExpired, CalibrationMismatch, ReferenceUnlocked,
		DriveOrderBroken, DriveLevelMissed, SurveyTooCoarse, ModelMisfit, TemperatureOutOfRange}
}

// NewCause returns the retest cause with its advice. The text says what was found, with numbers.
func NewCause(cause Cause, text string) RetestCause {
	r := remedies[cause]
	return RetestCause{Cause: cause, Text: text, Advice: r.advice, Station: r.station}
}
