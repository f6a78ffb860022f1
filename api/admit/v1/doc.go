// Package admitv1 is the wire contract of Admit, version 1, and the code generated from it.
//
// The .proto files are the source; each explains its messages field by field, with units, limits and what is sent when:
//
//	common, sweep, calibration   what is said of a unit, of a sweep, of a contact head
//	judgement                    a verdict and everything that led to it
//	inspection                   one inspection, as it begins and as it is kept
//	station, inspection_service, part_type, judgement_service, store   the services
//
// Numbers carry their SI unit in their name (motional_resistance_ohm), spans of time are seconds (dwell_s), instants are
// timestamps. A double that may be missing has presence; zero always means zero. Quantities, causes and outcomes are
// texts from one table of the service, so that a new one does not break old readers; enums are closed sets and keep their
// prefixed names in JSON (VERDICT_PASS).
//
// The mapping of the reading calls to JSON over HTTP stands in api/gateway.yaml. Programs inside the service do not use
// these types: service/wire converts at the boundary.
//
// The contract grows by addition: a new field takes the next higher number of its message, and nothing is removed, renamed
// or renumbered. The check against the commit before (.ci/run) holds that.
package admitv1
