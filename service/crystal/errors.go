package crystal

import "errors"

// Conditions that a caller may branch on. Each describes the circuit or the arguments; none means that a search gave up.
var (
	// ErrInvalidUnit: the unit has no mode, or a value that no circuit can have. Always wrapped with the field at fault.
	ErrInvalidUnit = errors.New("crystal: invalid unit")

	// ErrNoZeroPhase: the unit never looks resistive near its main mode, under the condition that was asked for. A unit
	// alone has no zero-phase frequency when its figure of merit M is 2 or less.
	ErrNoZeroPhase = errors.New("crystal: no zero-phase frequency")

	// ErrNoExtremum: the admittance magnitude has no maximum or minimum of the main mode: it is buried in C0 or in a
	// stronger neighbour.
	ErrNoExtremum = errors.New("crystal: no extremum of the admittance magnitude")

	// ErrLoadCapacitance: a load capacitance that is not a positive finite number.
	ErrLoadCapacitance = errors.New("crystal: load capacitance is not positive and finite")

	// ErrLoadConnection: a load connection other than SeriesLoad and ParallelLoad.
	ErrLoadConnection = errors.New("crystal: unknown load connection")

	// ErrNotInductive: no capacitance can tune the unit to the frequency, because it is not inductive there.
	ErrNotInductive = errors.New("crystal: unit is not inductive at this frequency")
)
