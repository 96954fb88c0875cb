package exchange

import (
	"math"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/calib"
)

// PropagationOptions say how distributions are propagated.
type PropagationOptions struct {
	Seed      *uint64 `json:"seed,omitempty" maximum:"9007199254740991" doc:"Seed of the random numbers: the same seed is the same answer. Left out: the one that belongs to the version, of a calculation 0." example:"20260302"`
	MaxTrials int     `json:"max_trials,omitempty" minimum:"0" maximum:"20000000" doc:"Bound of the trials; left out: 2000000." example:"500000"`
	Digits    int     `json:"digits,omitempty" minimum:"0" maximum:"2" doc:"Digits of u that the trials are to settle for (JCGM 101:2008, 7.9.2): 1 or 2; left out: 2." example:"2"`
}

// Request is the same for the registry.
func (o PropagationOptions) Request() registry.PropagationRequest {
	return registry.PropagationRequest{Seed: o.Seed, MaxTrials: o.MaxTrials, Digits: o.Digits}
}

// A PropagationRequest is the body of the stateless propagation: a stateless
// fit, and how its distributions are propagated.
type PropagationRequest struct {
	FitRequest
	PropagationOptions
}

// DecodePropagation reads the body of a stateless propagation, as [DecodeFit] does.
func DecodePropagation(data []byte) (PropagationRequest, error) {
	var r PropagationRequest
	if err := bounded(fitMessage, data); err != nil {
		return r, err
	}
	if err := decodeStrict(fitMessage, "body", data, &r); err != nil {
		return PropagationRequest{}, err
	}
	if err := r.check(); err != nil {
		return PropagationRequest{}, err
	}
	return r, nil
}

// A PropagationAnswer is what the distributions of a chain give, beside the
// first order (JCGM 101:2008).
type PropagationAnswer struct {
	Seed        uint64                `json:"seed" doc:"Asked for with this seed, the answer is the same." example:"20260302"`
	Probability float64               `json:"p" doc:"Coverage probability of the intervals." example:"0.95"`
	Digits      int                   `json:"digits" doc:"Digits of u that the trials are to settle for." example:"2"`
	Trials      int                   `json:"trials" example:"410000"`
	Settled     bool                  `json:"settled" doc:"Mean, u and both end points of every quantity are known to a fifth of its tolerance (7.9.4)."`
	Fits        int                   `json:"fits" doc:"Fits of the chain, each solved again in every trial." example:"7"`
	Sources     int                   `json:"sources" doc:"Sources of the chain, each drawn once in every trial." example:"230"`
	Generations int                   `json:"generations" doc:"Values assigned here, one resting on another, that the chain goes through." example:"2"`
	Quantities  []PropagationQuantity `json:"quantities" nullable:"false"`
}

// A PropagationQuantity is one quantity's distribution and first order (‰).
type PropagationQuantity struct {
	Name                string                  `json:"name" doc:"Sample or material, or the code of the reported delta."`
	Role                string                  `json:"role" enum:"sample,control,reported,final,value,difference"`
	Value               *float64                `json:"value" doc:"First order: the value." example:"-24.31"`
	StandardUncertainty *float64                `json:"u" doc:"First order: the standard uncertainty." example:"0.06"`
	ExpandedUncertainty *float64                `json:"U" doc:"First order: U = k·u." example:"0.14"`
	CoverageFactor      *float64                `json:"k" example:"2.26"`
	EffectiveDF         *float64                `json:"nu_eff" doc:"Null where infinite." example:"9"`
	Distribution        PropagationDistribution `json:"distribution"`
	Check               PropagationCheck        `json:"check"`
	Settled             bool                    `json:"settled"`
}

// A PropagationDistribution describes the trials.
type PropagationDistribution struct {
	Mean                *float64       `json:"mean" doc:"Null where variances with 1 degree of freedom leave it undefined." example:"-24.31"`
	StandardUncertainty *float64       `json:"u" doc:"Null where variances with 2 or fewer degrees of freedom leave it undefined; larger than the first order's by √(ν/(ν−2)) for one of ν." example:"0.07"`
	Symmetric           CoverageBounds `json:"symmetric" doc:"Probabilistically symmetric interval."`
	Shortest            CoverageBounds `json:"shortest" doc:"Shortest interval."`
	Resolution          *float64       `json:"resolution" doc:"Bounds are within this of those of the sorted trials." example:"0.0002"`
}

// CoverageBounds are the end points of a coverage interval (‰).
type CoverageBounds struct {
	Low  *float64 `json:"low" example:"-24.45"`
	High *float64 `json:"high" example:"-24.17"`
}

// A PropagationCheck is the comparison of JCGM 101:2008, clause 8.
type PropagationCheck struct {
	Tolerance      *float64 `json:"tolerance" doc:"Half a unit of the last of the digits of u." example:"0.005"`
	LowDifference  *float64 `json:"low_difference" doc:"Distance of value − U from the symmetric interval." example:"0.001"`
	HighDifference *float64 `json:"high_difference" example:"0.002"`
	Valid          bool     `json:"valid" doc:"Both are within the tolerance: the first order holds."`
}

// NewPropagationAnswer writes a propagation in the words of the contract.
func NewPropagationAnswer(p registry.Propagation) PropagationAnswer {
	a := PropagationAnswer{Seed: p.Seed, Probability: p.Probability, Digits: p.Digits, Trials: p.Trials, Settled: p.Settled,
		Fits: p.Fits, Sources: p.Sources, Generations: p.Generations, Quantities: []PropagationQuantity{}}
	for _, x := range p.Quantities {
		k := x.Check
		q := PropagationQuantity{Name: x.Name, Role: x.Role, Value: finite(k.Value), StandardUncertainty: finite(k.StandardUncertainty),
			ExpandedUncertainty: finite(k.FirstOrder.U), CoverageFactor: finite(k.FirstOrder.CoverageFactor), Settled: x.Settled,
			Distribution: PropagationDistribution{Mean: finitePointer(x.Mean), StandardUncertainty: finitePointer(x.StandardUncertainty),
				Symmetric: CoverageBounds{finite(x.Low), finite(x.High)}, Shortest: CoverageBounds{finite(x.ShortestLow), finite(x.ShortestHigh)}, Resolution: finite(x.Resolution)},
			Check: PropagationCheck{finite(k.Tolerance), finite(k.LowDifference), finite(k.HighDifference), k.Valid}}
		if nu := k.FirstOrder.DegreesOfFreedom; !math.IsInf(nu, 1) {
			q.EffectiveDF = finite(nu)
		}
		a.Quantities = append(a.Quantities, q)
	}
	return a
}

// Calculation is the engine's input of a stateless propagation.
func (r PropagationRequest) Calculation() (calib.Session, calib.Model, calib.Policy, registry.PropagationRequest, error) {
	s, m, policy, err := r.Session()
	q := r.Request()
	q.Probability = policy.Probability
	return s, m, policy, q, err
}

// Verdict says in a few plain words what a quantity's check found.
func (q PropagationQuantity) Verdict() string {
	var words []string
	if q.Check.Valid {
		words = append(words, "first order holds")
	} else {
		words = append(words, "first order does not hold")
	}
	if !q.Settled {
		words = append(words, "trials not settled")
	}
	return strings.Join(words, ", ")
}
