package demo

import (
	"math"
	"math/rand/v2"
	"time"

	"deltamoor/store"
)

// A channel is how one quantity reads on one instrument on one day. The raw
// delta of a peak of true delta τ and size s, t hours into the session, is
//
//	(1 + δ_true) = (1 + δ_raw)(1 + δ_gas)                 the working gas, in ‰ with 1/1000
//	f = stretch·δ_raw + drift·t + size·(s − reference)
//	r = (1 − memory)·f + memory·r₋₁ + ε,  ε ~ N(0, noise)  r₋₁ the raw delta read before
//
// and, of hydrogen, what H3+ ions make of r in the file.
type channel struct {
	quantity, scale string
	gas             float64 // δ of the working gas on the scale, ‰
	stretch         float64
	drift           float64 // ‰ per hour
	size            float64 // ‰ per unit of peak size
	reference       float64 // peak size without effect
	memory          float64 // share of the reading before
	noise           float64 // repeatability of one preparation, ‰
	between         float64 // session's own effect on each sample and control, ‰
	digits          int     // decimals that the instrument exports
	perAmount       float64 // peak size per µg of the element
	blank           blank
	source          *ionSource
}

// A blank is what every portion brings with it: its peak size and its raw delta (‰).
type blank struct{ size, raw float64 }

// mixed is the raw delta of a portion of its own size with the blank in it.
func (b blank) mixed(raw, own float64) float64 {
	return (raw*own + b.raw*b.size) / (own + b.size)
}

// An ionSource makes H3+: every measured ratio of m/z 3 to m/z 2 (ppm) is
// larger by factor × intensity (nA).
type ionSource struct {
	factor  float64 // ppm/nA
	ratio   float64 // of the working gas, without H3+
	plateau float64 // intensity of its flat pulses
	height  float64 // of a peak, nA per unit of size
}

// measured is the delta of ratios that hold H3+, for a peak of a Gaussian's height.
func (s ionSource) measured(raw, height float64) float64 {
	sample := s.ratio*(1+raw/1000) + s.factor*height/math.Sqrt2
	return (sample/s.gasRatio() - 1) * 1000
}

func (s ionSource) gasRatio() float64 { return s.ratio + s.factor*s.plateau }

// pulses are ten flat pulses of the working gas, as they read.
func (s ionSource) pulses(random *rand.Rand) []store.FactorPulse {
	var list []store.FactorPulse
	for i := range 10 {
		intensity := round(float64(i+1)*(1+0.01*random.NormFloat64()), 3)
		list = append(list, store.FactorPulse{Intensity: intensity, Ratio: round(s.ratio+s.factor*intensity+0.05*random.NormFloat64(), 3)})
	}
	return list
}

func (c channel) raw(true_, hours, size, previous, epsilon float64) float64 {
	r := c.stretch * (true_ - c.gas) / (1 + c.gas/1000)
	r += c.drift*hours + c.size*(size-c.reference)
	return (1-c.memory)*r + c.memory*previous + epsilon
}

// An instrument of a day: its channels, and how long one analysis takes.
type instrumentDay struct {
	channels []channel
	minutes  float64
}

// A seat is one position of a session: what stands there and what goes wrong with it.
type seat struct {
	subject string // code of a material or sample; "" where nothing of a value stands
	name    string // what the file calls it; "" is the subject
	role    string // the file's word for the role; "" leaves it to the method
	unit    string // label of the bottle it came from
	element map[string]float64
	amount  float64            // µg weighed; 0 draws one
	offset  map[string]float64 // ‰ by which the true delta of this portion is off, by quantity
	remark  string
	portion string // what the file calls the portion; "" is one of its own
}

// A row is what the instrument wrote for one seat.
type row struct {
	seat
	position int
	at       time.Time
	raw      map[string]float64
	size     map[string]float64
	height   map[string]float64    // of the peak, where H3+ counts
	gas      map[string][2]float64 // the gas pulse's intensity and ratio
}

// run simulates a session. Truth is of subjects and scales; anchors are the
// materials that pin the line of a quantity, which have no session effect of
// their own: the line is defined by them.
func run(random *rand.Rand, day instrumentDay, started time.Time, seats []seat, truth truth, anchors map[string]map[string]bool) []row {
	effects := map[string]float64{}
	previous := map[string]float64{}
	rows := make([]row, 0, len(seats))
	for i, s := range seats {
		hours := float64(i) * day.minutes / 60
		r := row{seat: s, position: i + 1, at: started.Add(time.Duration(hours * float64(time.Hour))).Truncate(time.Second), raw: map[string]float64{}, size: map[string]float64{},
			height: map[string]float64{}, gas: map[string][2]float64{}}
		if r.amount == 0 {
			r.amount = amountOf(random, s.element, anchored(anchors, s.subject))
		}
		for _, c := range day.channels {
			epsilon := c.noise * random.NormFloat64()
			own := r.amount * s.element[c.quantity] * c.perAmount * (1 + 0.01*random.NormFloat64())
			if own <= 0 {
				continue // no peak
			}
			size := round(own+c.blank.size, 2)
			true_, known := truth.of(s.subject, c.scale)
			if !known {
				true_ = c.gas + 3 // whatever is in an empty capsule or a conditioning portion
			}
			if known && !anchors[c.quantity][s.subject] {
				key := c.quantity + "/" + s.subject
				if _, ok := effects[key]; !ok {
					effects[key] = c.between * random.NormFloat64()
				}
				true_ += effects[key]
			}
			raw := c.blank.mixed(c.raw(true_+s.offset[c.quantity], hours, size, previous[c.quantity], epsilon), size-c.blank.size)
			r.raw[c.quantity], r.size[c.quantity] = round(raw, c.digits), size
			previous[c.quantity] = r.raw[c.quantity]
			if s := c.source; s != nil {
				height := round(size*s.height, 3)
				r.raw[c.quantity] = round(s.measured(raw, height), c.digits+1)
				r.height[c.quantity], r.gas[c.quantity] = height, [2]float64{s.plateau, round(s.gasRatio(), 3)}
				previous[c.quantity] = raw // carry-over is of gas, not of ions
			}
		}
		rows = append(rows, r)
	}
	return rows
}

// anchored tells whether a material pins the line of any quantity.
func anchored(anchors map[string]map[string]bool, subject string) bool {
	for _, of := range anchors {
		if of[subject] {
			return true
		}
	}
	return false
}

// amountOf draws a weighing (µg) that gives a good peak of the scarcer element.
// Anchors are weighed over a wider range, so that their sizes cover the samples'.
func amountOf(random *rand.Rand, element map[string]float64, wide bool) float64 {
	range_ := 0.12
	if wide {
		range_ = 0.35
	}
	spread := 1 + range_*(2*random.Float64()-1)
	switch {
	case element["d15N"] > 0:
		return math.Round(60 * spread / element["d15N"])
	case element["d13C"] > 0:
		return math.Round(350 * spread / element["d13C"])
	case element["d18O"] > 0 && element["d2H"] == 0: // every injection is one volume
		return 20
	case element["d2H"] > 0: // the tubes hold one volume, nearly
		return math.Round(25 * (1 + (spread-1)/8) / element["d2H"])
	}
	return 0
}

func round(x float64, digits int) float64 {
	p := math.Pow10(digits)
	return math.Round(x*p) / p
}

// truth is what every subject really is, by subject and scale.
type truth map[string]float64

func truthKey(subject, scale string) string { return subject + "/" + scale }

func (t truth) of(subject, scale string) (float64, bool) {
	if subject == "" {
		return 0, false
	}
	x, ok := t[truthKey(subject, scale)]
	return x, ok
}

func (t truth) set(subject, scale string, x float64) { t[truthKey(subject, scale)] = x }
