package uncertainty

import "math"

// Source names where a part of an uncertainty comes from. The names below are those of a sweep; others may be used beside them.
type Source string

const (
	Noise                Source = "noise"
	CalibrationStandards Source = "calibration standards"
	Drift                Source = "drift"
	ReferenceClock       Source = "reference clock"
	SourceLevel          Source = "source level"
	Contact              Source = "contact"
	Neighbours           Source = "neighbours"
	Temperature          Source = "temperature"
	Model                Source = "model"
)

// Kind says what repeating a measurement does to a contribution.
type Kind uint8

const (
	// Statistical contributions are drawn anew in each attempt and average out.
	Statistical Kind = iota
	// Systematic contributions are the same in each attempt, as far as anyone knows, and stay.
	Systematic
)

// String returns the kind in words.
func (k Kind) String() string {
	if k == Systematic {
		return "systematic"
	}
	return "statistical"
}

// Contribution is what one source adds to the covariance of all quantities of a budget.
type Contribution struct {
	Source     Source
	Kind       Kind
	Freedom    float64   // degrees of freedom; +Inf where known exactly
	Covariance []float64 // n by n, row by row
}

// Budget is the uncertainty of n quantities that were measured together, by source. Sources are independent of each other, so
// that their covariances add: for one quantity that is the root of the sum of squares. Within a source quantities may be
// correlated to any degree, and that is kept. The zero value is a budget of no quantities; NewBudget makes one of n.
type Budget struct {
	n             int
	contributions []Contribution
}

// NewBudget returns an empty budget of n quantities.
func NewBudget(n int) *Budget { return &Budget{n: n} }

// Quantities returns n.
func (b *Budget) Quantities() int { return b.n }

// Contributions returns the parts in the order in which they were added. The slice belongs to the budget.
func (b *Budget) Contributions() []Contribution { return b.contributions }

// Add adds a contribution with a covariance, n by n, which is copied. A source that is there already with the same kind is added
// to, as an independent part of it; its degrees of freedom are then the smaller of the two, the careful side.
func (b *Budget) Add(source Source, kind Kind, freedom float64, covariance []float64) {
	if !(freedom > 0) {
		freedom = math.Inf(1)
	}
	into := b.part(source, kind, freedom)
	for i, c := range covariance[:b.n*b.n] {
		into[i] += c
	}
}

// AddEffect adds the contribution of one cause that moves all quantities at once: effect[i] is how far quantity i goes for one
// standard uncertainty of the cause, with its sign. The covariance is effect effectᵀ, full correlation.
func (b *Budget) AddEffect(source Source, kind Kind, freedom float64, effect []float64) {
	into := b.part(source, kind, freedom)
	for i, e := range effect[:b.n] {
		for j, f := range effect[:b.n] {
			if e != 0 && f != 0 {
				into[i*b.n+j] += e * f
			}
		}
	}
}

// AddIndependent adds a contribution to each quantity that has nothing to do with that to the others, given by its standard
// uncertainty.
func (b *Budget) AddIndependent(source Source, kind Kind, freedom float64, standardUncertainty []float64) {
	into := b.part(source, kind, freedom)
	for i, u := range standardUncertainty[:b.n] {
		into[i*b.n+i] += u * u
	}
}

// part returns the covariance of a source to be added to.
func (b *Budget) part(source Source, kind Kind, freedom float64) []float64 {
	if !(freedom > 0) {
		freedom = math.Inf(1)
	}
	for i := range b.contributions {
		if c := &b.contributions[i]; c.Source == source && c.Kind == kind {
			c.Freedom = math.Min(c.Freedom, freedom)
			return c.Covariance
		}
	}
	covariance := make([]float64, b.n*b.n)
	b.contributions = append(b.contributions, Contribution{source, kind, freedom, covariance})
	return covariance
}

// Covariance writes the sum over all contributions into dst, n by n.
func (b *Budget) Covariance(dst []float64) {
	clear(dst[:b.n*b.n])
	for _, c := range b.contributions {
		for i, v := range c.Covariance {
			dst[i] += v
		}
	}
}

// CovarianceOf writes the sum over the contributions of one kind into dst, n by n.
func (b *Budget) CovarianceOf(kind Kind, dst []float64) {
	clear(dst[:b.n*b.n])
	for _, c := range b.contributions {
		if c.Kind == kind {
			for i, v := range c.Covariance {
				dst[i] += v
			}
		}
	}
}

// StandardUncertainty returns the combined standard uncertainty of quantity i.
func (b *Budget) StandardUncertainty(i int) float64 {
	var variance float64
	for _, c := range b.contributions {
		variance += c.Covariance[i*b.n+i]
	}
	return math.Sqrt(variance)
}

// StandardUncertaintyOf returns what the contributions of one kind add up to for quantity i.
func (b *Budget) StandardUncertaintyOf(kind Kind, i int) float64 {
	var variance float64
	for _, c := range b.contributions {
		if c.Kind == kind {
			variance += c.Covariance[i*b.n+i]
		}
	}
	return math.Sqrt(variance)
}

// EffectiveFreedom returns the effective degrees of freedom of quantity i, by Welch and Satterthwaite.
func (b *Budget) EffectiveFreedom(i int) float64 {
	components := make([]Component, len(b.contributions))
	for j, c := range b.contributions {
		components[j] = Component{math.Sqrt(c.Covariance[i*b.n+i]), c.Freedom}
	}
	return EffectiveFreedom(components...)
}

// Through returns the budget of m quantities y = f(x) with the m by n jacobian ∂y/∂x: each contribution goes through by itself, so
// that the result still knows its sources.
func (b *Budget) Through(jacobian []float64, m int) *Budget {
	out := NewBudget(m)
	for _, c := range b.contributions {
		covariance := make([]float64, m*m)
		Propagate(covariance, jacobian, c.Covariance, m, b.n)
		out.contributions = append(out.contributions, Contribution{c.Source, c.Kind, c.Freedom, covariance})
	}
	return out
}

// Mean returns the budget of the mean Σ w_k x_k of the same quantities in several attempts, for weights that add up to 1 (nil for
// equal ones). A statistical source contributes Σ w² C, a systematic one Σ w C, exact where it is the same in every attempt and
// otherwise never too small: (Σ w e)(Σ w e)ᵀ ≤ Σ w e eᵀ for any effects e. It returns nil for no budgets, budgets of different
// quantities, or weights that are negative, of another number or not of the sum 1.
func Mean(budgets []*Budget, weights []float64) *Budget {
	if len(budgets) == 0 || weights != nil && len(weights) != len(budgets) {
		return nil
	}
	out := NewBudget(budgets[0].n)
	var sum float64
	for k, b := range budgets {
		w := 1 / float64(len(budgets))
		if weights != nil {
			w = weights[k]
		}
		if b.n != out.n || !(w >= 0) {
			return nil
		}
		sum += w
		for _, c := range b.contributions {
			into := out.part(c.Source, c.Kind, c.Freedom)
			share := w
			if c.Kind == Statistical {
				share = w * w
			}
			for i, v := range c.Covariance {
				if share != 0 && v != 0 {
					into[i] += share * v
				}
			}
		}
	}
	if math.Abs(sum-1) > 1e-9 {
		return nil
	}
	return out
}
