package calib

import (
	"fmt"
	"math"
	"math/rand/v2"
	"runtime"
	"sync"
	"testing"
)

// A recipe is one technique of practice as a simulation: the seating of a
// session in few readings, the model by default, and what the instrument does.
// Figures are common practice, no source, and those of the technique in ‰ and hours.
type recipe struct {
	name  string
	model Model
	// anchors' true deltas and the standard uncertainty of their assigned values,
	// and what all of those share (a common ancestor).
	anchors         []float64
	anchorU, common float64
	// monitor and control are true deltas of materials; NaN for none.
	monitor float64
	// rounds of anchors (and monitor), preparations of the sample between them,
	// readings of each preparation.
	rounds, preparations, readings int
	sample                         float64
	// the instrument
	intercept, slope, drift, curve, size, memory float64
	blank, blankDelta                            float64 // size and raw delta of a constant blank
	noise, preparation, noiseSize                float64 // of a reading, of a preparation, times 1/size
	between                                      float64 // the session's own effect on the sample
	sizes                                        [2]float64
	declaredDF                                   float64 // of the declared u; 0 for known
}

// recipes are the techniques of practice.md 3, in its order, and every term and
// weight model among them.
func recipes() []recipe {
	none := math.NaN()
	plain := recipe{monitor: none, rounds: 3, preparations: 2, readings: 1, intercept: 0.4, slope: 0.99, sizes: [2]float64{3, 8}}
	with := func(change func(*recipe)) recipe {
		r := plain
		change(&r)
		return r
	}
	return []recipe{
		with(func(r *recipe) {
			r.name, r.model = "carbon of solids", Model{Drift: DriftLinear, Weights: WeightsReplicate}
			r.anchors, r.anchorU, r.sample = []float64{-32, -10, 37}, 0.04, -25
			r.drift, r.noise, r.between = 0.01, 0.06, 0.03
		}),
		with(func(r *recipe) {
			r.name, r.model = "nitrogen of solids, with size", Model{Drift: DriftLinear, Size: SizeLinear, Weights: WeightsReplicate}
			r.anchors, r.anchorU, r.sample, r.monitor, r.rounds = []float64{-4.5, 8, 47.6}, 0.08, 6, 3, 4
			r.drift, r.size, r.noise, r.between = 0.02, 0.03, 0.12, 0.05
		}),
		with(func(r *recipe) {
			r.name, r.model = "sulfur of solids, with carry-over", Model{Drift: DriftLinear, Memory: MemoryCarryover, Weights: WeightsEqual}
			r.anchors, r.anchorU, r.sample, r.rounds = []float64{-34, 0.5, 20.3}, 0.15, 12, 5
			r.drift, r.memory, r.noise = 0.02, 0.03, 0.15
		}),
		with(func(r *recipe) {
			r.name, r.model = "hydrogen by conversion, with carry-over", Model{Drift: DriftLinear, Memory: MemoryCarryover, Weights: WeightsReplicate}
			r.anchors, r.anchorU, r.sample, r.rounds, r.slope = []float64{-427.5, -180, -9}, 0.6, -120, 5, 0.93
			r.drift, r.memory, r.noise, r.between = 0.1, 0.02, 1.2, 0.5
		}),
		with(func(r *recipe) {
			r.name, r.model = "oxygen by conversion, bracketed", Model{Drift: DriftBracketed, Weights: WeightsReplicate}
			r.anchors, r.anchorU, r.sample, r.rounds = []float64{-55, 0, 25.8}, 0.08, 21, 5
			r.drift, r.noise = 0.03, 0.2
		}),
		with(func(r *recipe) {
			r.name, r.model = "exchangeable hydrogen, one group", Model{Weights: WeightsEqual}
			r.anchors, r.anchorU, r.sample, r.common = []float64{-157, -72.9, -35.3}, 1.2, -90, 0.8
			r.noise, r.rounds, r.preparations = 1.6, 4, 3
		}),
		with(func(r *recipe) {
			r.name, r.model = "oxygen of water by laser, injections of vials", Model{Drift: DriftLinear, Weights: WeightsEqual}
			r.anchors, r.anchorU, r.sample, r.readings, r.preparations, r.rounds = []float64{-55.5, -20, 0}, 0.02, -9, 2, 2, 4
			r.drift, r.noise, r.preparation = 0.005, 0.05, 0.06
		}),
		with(func(r *recipe) {
			r.name, r.model = "water by laser, replicate weights of preparations", Model{Drift: DriftLinear, Weights: WeightsReplicate}
			r.anchors, r.anchorU, r.sample, r.readings, r.preparations, r.rounds = []float64{-55.5, -20, 0}, 0.02, -9, 2, 2, 4
			r.drift, r.noise, r.preparation = 0.005, 0.05, 0.06
		}),
		with(func(r *recipe) {
			r.name, r.model = "water by equilibration", Model{Weights: WeightsReplicate}
			r.anchors, r.anchorU, r.sample = []float64{-55.5, 0}, 0.02, -8
			r.noise, r.rounds = 0.06, 5
		}),
		with(func(r *recipe) {
			r.name, r.model = "carbonate by acid", Model{Weights: WeightsEqual}
			r.anchors, r.anchorU, r.sample = []float64{-46.6, -5.01, 1.95}, 0.04, 0.5
			r.noise, r.rounds = 0.05, 4
		}),
		with(func(r *recipe) {
			r.name, r.model = "nitrate by microbes, with blank", Model{Drift: DriftLinear, Size: SizeBlank, Weights: WeightsEqual}
			r.anchors, r.anchorU, r.sample, r.sizes, r.rounds = []float64{-1.8, 4.7, 180}, 0.15, 60, [2]float64{10, 40}, 6
			r.drift, r.noise, r.blank, r.blankDelta = 0.02, 0.25, 0.5, -5
		}),
		with(func(r *recipe) {
			r.name, r.model = "compounds by chromatography, small peaks", Model{Drift: DriftLinear, Weights: WeightsSize}
			r.anchors, r.anchorU, r.sample, r.monitor, r.rounds = []float64{-41, -30, -20}, 0.12, -28, -33, 8
			r.drift, r.noise, r.noiseSize, r.sizes = 0.02, 0.15, 0.8, [2]float64{1, 10}
		}),
		with(func(r *recipe) {
			r.name, r.model = "enriched tracers, inverse size", Model{Size: SizeInverse, Weights: WeightsReplicate}
			r.anchors, r.anchorU, r.sample = []float64{0, 120, 390}, 1.5, 250
			r.size, r.noise, r.rounds = 1, 1.2, 4
		}),
		with(func(r *recipe) {
			r.name, r.model = "dual inlet, declared u of cycles", Model{}
			r.anchors, r.anchorU, r.sample, r.preparations = []float64{-40, 2}, 0.02, -7, 1
			r.noise, r.rounds = 0.025, 1
		}),
		with(func(r *recipe) {
			r.name, r.model, r.declaredDF = "dual inlet, declared u with degrees of freedom", Model{Drift: DriftLinear}, 9
			r.anchors, r.anchorU, r.sample, r.preparations = []float64{-40, 2}, 0.02, -7, 1
			r.noise, r.rounds, r.drift = 0.025, 3, 0.01
		}),
		with(func(r *recipe) {
			r.name, r.model = "curved drift and logarithm of size", Model{Drift: DriftQuadratic, Size: SizeLog, Weights: WeightsReplicate}
			r.anchors, r.anchorU, r.sample, r.monitor, r.rounds = []float64{-26, 37}, 0.05, -15, 5, 6
			r.drift, r.curve, r.size, r.noise = 0.02, 0.002, 0.2, 0.08
		}),
		with(func(r *recipe) {
			r.name, r.model = "one anchor, named", Model{Weights: WeightsEqual, AllowSingleAnchor: true}
			r.anchors, r.anchorU, r.sample = []float64{-6}, 0.04, -6.5
			// The ratio form: slope and intercept follow from the gas' delta alone.
			r.slope = 1 / (1 + -30.0/1000)
			r.intercept = -r.slope * -30
			r.noise, r.rounds = 0.05, 6
		}),
	}
}

// session draws one session of the recipe; the sample's true value is r.sample.
func (r recipe) session(random *rand.Rand) Session {
	var s Session
	shared := r.common * random.NormFloat64()
	for i, v := range r.anchors {
		a := assigned(fmt.Sprint("A", i), v+r.anchorU*random.NormFloat64()+shared, r.anchorU)
		if r.common > 0 {
			a.Value.Terms = append(a.Value.Terms, commonTerm(r.common))
		}
		s.Anchors = append(s.Anchors, a)
	}
	perRound := len(r.anchors) + int(indicator(!math.IsNaN(r.monitor)))
	total := (r.rounds*perRound + r.preparations) * r.readings
	if r.model.Memory == MemoryCarryover {
		total++
	}
	middle, reference := float64(total-1)/2*0.2, (r.sizes[0]+r.sizes[1])/2
	effect := r.between * random.NormFloat64()
	declared := r.noise
	if r.declaredDF > 0 {
		var chi float64
		for range int(r.declaredDF) {
			z := random.NormFloat64()
			chi += z * z
		}
		declared *= math.Sqrt(chi / r.declaredDF)
	}
	previous, prepared := 0.0, 0
	put := func(subject string, role Role, true_ float64) {
		prepared++
		part := r.preparation * random.NormFloat64()
		for range r.readings {
			time := 0.2 * float64(len(s.Readings))
			size := r.sizes[0] + (r.sizes[1]-r.sizes[0])*random.Float64()
			f := r.intercept + r.slope*true_ + r.drift*(time-middle) + r.curve*(time-middle)*(time-middle)
			switch r.model.Size {
			case SizeLinear:
				f += r.size * (size - reference)
			case SizeInverse:
				f += r.size * (1/size - 1/reference)
			case SizeLog:
				f += r.size * math.Log(size/reference)
			case SizeBlank:
				f = (1-r.blank/size)*f + r.blank/size*r.blankDelta
			}
			raw := f
			if r.model.Memory == MemoryCarryover {
				raw = (1-r.memory)*f + r.memory*previous
			}
			raw += part + math.Hypot(r.noise, r.noiseSize/size)*random.NormFloat64()
			previous = raw
			rd := s.read(subject, role, raw, declared).at(time).sized(size)
			if r.readings > 1 {
				rd.of(fmt.Sprint("P", prepared))
			}
		}
	}
	if r.model.Memory == MemoryCarryover {
		put("rinse", Conditioning, r.anchors[0])
	}
	for round := range r.rounds {
		for i, v := range r.anchors {
			put(fmt.Sprint("A", i), Anchor, v)
		}
		if !math.IsNaN(r.monitor) {
			put("M", Monitor, r.monitor)
		}
		for k := round * r.preparations / r.rounds; k < (round+1)*r.preparations/r.rounds; k++ {
			put("S", Sample, r.sample+effect)
		}
	}
	return s
}

// For every recipe, 10,000 sessions of known truth: the 95 % interval of the
// sample's value covers it in 94 to 96 % of them, and its mean error is below a
// tenth of its standard uncertainty. Fits with fewer than four effective degrees
// of freedom are flagged instead, and not counted. With -short a tenth of the
// sessions, and the same bounds widened by 3.3 standard deviations of what
// chance does to so few. The seeds are fixed.
func TestIntervalsCoverTheTruthInEveryRecipe(t *testing.T) {
	sessions, slack := 10_000, 0.0
	if testing.Short() {
		sessions = 1_000
		slack = 3.3 * math.Sqrt(0.95*0.05/1_000)
	}
	for i, r := range recipes() {
		t.Run(r.name, func(t *testing.T) {
			t.Parallel()
			c := coverageOf(t, r, uint64(i), sessions)
			share, bias := float64(c.covered)/float64(c.counted), c.error/c.u
			t.Logf("covered %.4f of %d, bias %+.3f u, scatter of value/u %.3f, median ν about %.1f", share, c.counted, bias, math.Sqrt(c.square/float64(c.counted)), c.nu/float64(c.counted))
			if c.counted < sessions*9/10 {
				t.Errorf("only %d of %d sessions have four degrees of freedom", c.counted, sessions)
			}
			if share < 0.94-slack || share > 0.96+slack {
				t.Errorf("95 %% intervals cover %.4f", share)
			}
			if math.Abs(bias) > 0.1+slack {
				t.Errorf("bias %+.3f u", bias)
			}
		})
	}
}

// A coverage counts sessions; error and u are sums.
type coverage struct {
	counted, covered     int
	error, u, square, nu float64
}

func coverageOf(t *testing.T, r recipe, seed uint64, sessions int) coverage {
	var total coverage
	var mu sync.Mutex
	var wait sync.WaitGroup
	workers := runtime.GOMAXPROCS(0)
	for w := range workers {
		wait.Add(1)
		go func() {
			defer wait.Done()
			var own coverage
			for k := w; k < sessions; k += workers {
				random := rand.New(rand.NewPCG(seed, uint64(k)))
				policy := Policy{BetweenSession: BetweenSession{StandardUncertainty: r.between, Session: "S", Scale: "D"}}
				model := r.model
				if r.declaredDF > 0 {
					model.DeclaredDF = &r.declaredDF
				}
				result, err := quickFit(r.session(random), model, policy)
				if err != nil {
					t.Errorf("session %d: %v", k, err)
					return
				}
				s := result.Subjects[0]
				if s.Expanded.DegreesOfFreedom < 4 {
					continue
				}
				own.counted++
				d := s.Value - r.sample
				own.error, own.u, own.square = own.error+d, own.u+s.StandardUncertainty, own.square+d*d/(s.StandardUncertainty*s.StandardUncertainty)
				own.nu += math.Min(s.Expanded.DegreesOfFreedom, 1000)
				if math.Abs(d) <= s.Expanded.U {
					own.covered++
				}
			}
			mu.Lock()
			defer mu.Unlock()
			total.counted, total.covered = total.counted+own.counted, total.covered+own.covered
			total.error, total.u, total.square, total.nu = total.error+own.error, total.u+own.u, total.square+own.square, total.nu+own.nu
		}()
	}
	wait.Wait()
	return total
}
