package inspection

import (
	"runtime"
	"testing"
	"time"

	"example.com/admit/service/network"
)

// TestSolvedCalibrationsAreForgotten: a calibration that is used again is solved once; one that came alone leaves nothing behind.
func TestSolvedCalibrationsAreForgotten(t *testing.T) {
	j := NewJudge()
	kept := &network.Calibration{ID: "kept", ContactHead: "N1-A", Network: network.PiNetwork, ReferenceImpedanceOhm: 50, NominalTerminationOhm: 25}
	first, err := j.solve(kept)
	if err != nil {
		t.Fatal(err)
	}
	for range 100 {
		alone := *kept
		if _, err := j.solve(&alone); err != nil {
			t.Fatal(err)
		}
	}
	count := func() int {
		j.mu.Lock()
		defer j.mu.Unlock()
		return len(j.solved)
	}
	for deadline := time.Now().Add(10 * time.Second); count() > 1 && time.Now().Before(deadline); time.Sleep(time.Millisecond) {
		runtime.GC()
	}
	if n := count(); n != 1 {
		t.Errorf("%d solved calibrations are kept, want the one in use", n)
	}
	if again, _ := j.solve(kept); again != first {
		t.Error("the calibration in use was solved again")
	}
	runtime.KeepAlive(kept)
}
