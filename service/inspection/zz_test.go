package inspection_test
import ("testing";"example.com/admit/fixtures/simulated")
func TestZZ(t *testing.T){
	f := newFloor(t, 2, 11, driveSection)
	in := f.nominal(nil)
	in.Drive = &simulated.DriveLaw{ResistancePerWatt: 0.6 / 100e-6}
	f.inspect(f.with(f.series(in)...))
	in.Drive = &simulated.DriveLaw{ResistancePerWatt: 0.2 / 100e-6, FrequencyPPMPerWatt: 1 / 100e-6}
	f.inspect(f.with(f.series(in)...))
}
