package accuracy

import "example.com/admit/cmd/prove/accuracy/trial"

// Options say how much is measured.
type Options struct {
	Seed   uint64
	Trials int  // a cell
	Full   bool // all rows, and the gates of the full form
	Short  bool // fewer cells
}

// gate returns the gates that belong to the number of trials.
func (o Options) gate() trial.Gate {
	if o.Full {
		return trial.Full
	}
	return trial.Quick
}

// places returns the units measured: all five of the scenario, or in the short form the fork and the 25 MHz fundamental.
func (o Options) places() []place {
	all := scenario()
	if o.Short {
		return []place{all[0], all[2]}
	}
	return all
}
