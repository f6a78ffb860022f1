package accuracy

import (
	"math"
	"slices"

	"example.com/admit/cmd/prove/bound"
)

// A design is a way of sweeping: how many points over which span, how long each is waited for and averaged. Its uncertainty follows from the bound, for
// a receiver whose noise falls with the root of the averaging time.

// targets are the quantities whose uncertainty two designs are compared at.
var targets = [...]bound.Quantity{bound.ResonanceHz, bound.ResistanceOhm, bound.CapacitanceFarad}

// receiver is noise of one sample that averages for a time.
type receiver struct{ rms, averagingSeconds float64 }

// settled says how long settled designs of a unit must take. It keeps the bounds of the designs that it tries.
type settled struct {
	place   place
	designs []design
}

// design is a settled design for a noise of one: only the time is left to be chosen.
type design struct {
	points    int
	half      float64 // half the span in loaded bandwidths
	deviation [bound.Quantities]float64
}

// newSettled works out the bounds of every design that bestSeconds tries.
func newSettled(p place) (*settled, error) {
	s := &settled{place: p}
	for _, points := range []int{9, 11, 13, 17, 21, 31, 41, 61, 101, 201, 401} {
		for _, half := range []float64{0.25, 0.35, 0.5, 0.7, 1, 1.5, 2, 3, 5} {
			b, err := bound.Of(p.unit, bound.Sweep{FrequencyHz: p.grid(-half, half, points), Port: p.port, NoiseRMS: 1})
			if err != nil {
				return nil, err
			}
			s.designs = append(s.designs, design{points, half, b.Deviation})
		}
	}
	return s, nil
}

// habit is 401 points over +-5 loaded bandwidths.
func (s *settled) habit() design { return s.designs[len(s.designs)-1] }

// averagingSeconds returns how long a design must average at each point to reach the uncertainties of every target.
func (d *design) averagingSeconds(r receiver, wanted [bound.Quantities]float64) float64 {
	least := 0.0
	for _, q := range targets {
		ratio := d.deviation[q] * r.rms / wanted[q]
		least = math.Max(least, ratio*ratio*r.averagingSeconds)
	}
	return least
}

// settlingTimeConstants is what the habit waits.
const settlingTimeConstants = 7

// seconds returns the time of a design that waits seven loaded time constants at each point.
func (s *settled) seconds(d design, r receiver, wanted [bound.Quantities]float64) float64 {
	return float64(d.points) * (settlingTimeConstants*s.place.timeConstantSeconds() + d.averagingSeconds(r, wanted))
}

// bestSeconds returns the time of the fastest settled design, which may also settle for less or longer as long as what still rings biases
// no target by more than a third of its uncertainty.
func (s *settled) bestSeconds(r receiver, wanted [bound.Quantities]float64) (best float64, chosen design) {
	best = math.Inf(1)
	tau := s.place.timeConstantSeconds()
	for _, d := range s.designs {
		averaging := d.averagingSeconds(r, wanted)
		for wait := 3.0; wait <= 15; wait++ {
			seconds := float64(d.points) * (wait*tau + averaging)
			if seconds >= best {
				break
			}
			if s.rings(d, wait*tau, averaging, wanted) {
				continue
			}
			best, chosen = seconds, d
		}
	}
	return best, chosen
}

// rings says whether what the resonator has kept from earlier points biases a settled fit of the design too much.
func (s *settled) rings(d design, wait, averaging float64, wanted [bound.Quantities]float64) bool {
	sweep := bound.Sweep{FrequencyHz: s.place.grid(-d.half, d.half, d.points), Port: s.place.port, NoiseRMS: 1}
	still, err := bound.Of(s.place.unit, sweep)
	if err != nil {
		return true
	}
	sweep.Timing = &bound.Timing{Dwell: wait + averaging, Averaging: averaging}
	ringing, err := bound.Of(s.place.unit, sweep)
	if err != nil {
		return true
	}
	difference := slices.Clone(ringing.Clean())
	for i, v := range still.Clean() {
		difference[i] -= v
	}
	shift := still.Shift(difference)
	for _, q := range targets {
		if math.Abs(shift[q]) > wanted[q]/3 {
			return true
		}
	}
	return false
}
