package assign

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// An Opinion is what a test for outliers says. It only advises: nothing in
// this package leaves a value out because of one.
type Opinion struct {
	Test      string  `json:"test"`
	Statistic float64 `json:"statistic"`
	// Critical is the limit at the level.
	Critical float64 `json:"critical"`
	Level    float64 `json:"level"`
	// P bounds the probability of a larger statistic in a normal sample: exact for
	// Dixon, an upper bound for Grubbs and Cochran (sum over the values).
	P float64 `json:"p"`
	// Suspect is the index of the value in question.
	Suspect int  `json:"suspect"`
	Beyond  bool `json:"beyond"`
}

// A Side says where an outlier is looked for.
type Side int

// The sides.
const (
	EitherSide Side = iota
	HighSide
	LowSide
)

// extreme finds the value in question and checks the sample.
func extreme(values []float64, side Side, mean float64) int {
	at := 0
	distance := func(i int) float64 {
		d := values[i] - mean
		switch side {
		case HighSide:
			return d
		case LowSide:
			return -d
		}
		return math.Abs(d)
	}
	for i := range values {
		if distance(i) > distance(at) {
			at = i
		}
	}
	return at
}

func checkValues(values []float64, least int) error {
	if len(values) < least {
		return &InputError{Place: "values", Found: fmt.Sprint(len(values)), Expected: fmt.Sprintf("%d or more", least)}
	}
	for i, v := range values {
		if !finite(v) {
			return &InputError{Place: fmt.Sprintf("values[%d]", i), Found: fmt.Sprint(v), Expected: "a finite number"}
		}
	}
	return nil
}

// meanAndDeviation with n − 1, about the first value so that a large level
// costs no digits.
func meanAndDeviation(values []float64) (mean, deviation float64) {
	for _, v := range values {
		mean += v - values[0]
	}
	mean /= float64(len(values))
	var ss, rest float64
	for _, v := range values {
		d := v - values[0] - mean
		ss += float64(d * d)
		rest += d
	}
	ss -= float64(rest*rest) / float64(len(values))
	if len(values) > 1 {
		deviation = math.Sqrt(math.Max(0, ss) / float64(len(values)-1))
	}
	return values[0] + mean, deviation
}

// Grubbs tests the value furthest from the mean:
//
//	G = |x − x̄|/s,   G_crit = (n−1)/√n · √(t²/(n − 2 + t²)),  t = t_{1−α/n}(n−2)
//
// with α/(2n) where either side is looked at (Grubbs 1969,
// doi:10.1080/00401706.1969.10490657; ISO 5725-2:1994, 7.3.4, whose table is
// that of either side). Fewer than three values are an *InputError; values that
// are all equal have G = 0.
func Grubbs(values []float64, side Side, level float64) (Opinion, error) {
	if err := checkValues(values, 3); err != nil {
		return Opinion{}, err
	}
	if err := checkLevel("level", level); err != nil {
		return Opinion{}, err
	}
	mean, s := meanAndDeviation(values)
	o := Opinion{Test: "Grubbs", Level: level, P: 1, Suspect: extreme(values, side, mean), Critical: grubbsCritical(len(values), side, level)}
	if s == 0 {
		return o, nil
	}
	o.Statistic = math.Abs(values[o.Suspect]-mean) / s
	n := float64(len(values))
	g2 := float64(o.Statistic * o.Statistic)
	below := float64((n-1)*(n-1)) - float64(n*g2)
	tails := n
	if side == EitherSide {
		tails = 2 * n
	}
	if below > 0 {
		t := math.Sqrt(float64(n*(n-2)) * g2 / below)
		o.P = math.Min(1, tails*distuv.StudentsT{Mu: 0, Sigma: 1, Nu: n - 2}.Survival(t))
	} else {
		o.P = 0
	}
	o.Beyond = o.Statistic > o.Critical
	return o, nil
}

func grubbsCritical(count int, side Side, level float64) float64 {
	n := float64(count)
	p := level / n
	if side == EitherSide {
		p /= 2
	}
	t := upperQuantile(distuv.StudentsT{Mu: 0, Sigma: 1, Nu: n - 2}.Survival, p)
	t2 := float64(t * t)
	return (n - 1) / math.Sqrt(n) * math.Sqrt(t2/(n-2+t2))
}

// Cochran tests the largest of p variances of n measurements each:
//
//	C = max s²/Σs²,   C_crit = 1/(1 + (p − 1)/F_{1−α/p}(n − 1, (p − 1)(n − 1)))
//
// (Cochran 1941, doi:10.1111/j.1469-1809.1941.tb02271.x; ISO 5725-2:1994,
// 7.3.3). Fewer than two variances, measurements fewer than two, or negative
// standard deviations are an *InputError.
func Cochran(standardDeviations []float64, measurements int, level float64) (Opinion, error) {
	if err := checkValues(standardDeviations, 2); err != nil {
		return Opinion{}, err
	}
	if err := checkLevel("level", level); err != nil {
		return Opinion{}, err
	}
	if measurements < 2 {
		return Opinion{}, &InputError{Place: "measurements", Found: fmt.Sprint(measurements), Expected: "two or more"}
	}
	p, n := float64(len(standardDeviations)), float64(measurements)
	o := Opinion{Test: "Cochran", Level: level, P: 1}
	f := distuv.F{D1: n - 1, D2: float64((p - 1) * (n - 1))}
	o.Critical = 1 / (1 + (p-1)/upperQuantile(f.Survival, level/p))
	var sum float64
	for i, s := range standardDeviations {
		if s < 0 {
			return Opinion{}, &InputError{Place: fmt.Sprintf("standard deviations[%d]", i), Found: fmt.Sprint(s), Expected: "none below 0"}
		}
		sum += float64(s * s)
		if s > standardDeviations[o.Suspect] {
			o.Suspect = i
		}
	}
	if sum == 0 {
		return o, nil
	}
	largest := standardDeviations[o.Suspect]
	o.Statistic = float64(largest*largest) / sum
	o.P = 0
	if o.Statistic < 1 {
		o.P = math.Min(1, p*f.Survival(float64((p-1)*o.Statistic)/(1-o.Statistic)))
	}
	o.Beyond = o.Statistic > o.Critical
	return o, nil
}

// upperQuantile solves survival(x) = upper for x ≥ 0 by bisection. The
// library's quantiles lose digits for small probabilities.
func upperQuantile(survival func(float64) float64, upper float64) float64 {
	low, high := 0.0, 1.0
	for survival(high) > upper && high < 1e300 {
		low, high = high, 2*high
	}
	for range 200 {
		mid := low + float64(0.5*(high-low))
		if mid <= low || mid >= high {
			break
		}
		if survival(mid) > upper {
			low = mid
		} else {
			high = mid
		}
	}
	return high
}

// Precision is what an interlaboratory (or intersession) study of equal
// treatment says of the method (ISO 5725-2:1994, 7.4 and 7.3.1).
type Precision struct {
	Anova
	MeansStandardDeviation float64 // of the laboratories' means
	Repeatability          float64 // s_r = √MSW
	Reproducibility        float64 // √(s_r² + max(0, s_L²))
	// MandelH is (x̄ᵢ − x̄)/s_x̄, MandelK sᵢ/s_r, in the order of the units' codes.
	MandelH, MandelK []float64
	// Cochran is nil where the units have different numbers of measurements;
	// Grubbs is about the means, nil for fewer than three.
	Cochran, Grubbs *Opinion
}

// AnalysePrecision evaluates measurements grouped by unit, which may stand for
// laboratories, instruments or sessions.
func AnalysePrecision(s HomogeneityStudy) (*Precision, error) {
	h, err := AnalyseHomogeneity(s)
	if err != nil {
		return nil, err
	}
	level := orDefault(s.Level, 0.05)
	p := &Precision{Anova: h.Anova, Repeatability: h.WithinStandardDeviation}
	p.Reproducibility = math.Sqrt(h.MeanSquareWithin + math.Max(0, h.BetweenVariance))
	units := slices.Clone(s.Units)
	slices.SortStableFunc(units, func(a, b Unit) int { return compareText(a.Code, b.Code) })
	var means, deviations []float64
	count := len(units[0].Measurements)
	for _, u := range units {
		var v []float64
		for _, m := range u.Measurements {
			v = append(v, m.Value)
		}
		mean, sd := meanAndDeviation(v)
		means, deviations = append(means, mean), append(deviations, sd)
		if len(v) != count {
			count = 0
		}
	}
	mean, sx := meanAndDeviation(means)
	p.MeansStandardDeviation = sx
	for i := range means {
		hi, ki := 0.0, 0.0
		if sx > 0 {
			hi = (means[i] - mean) / sx
		}
		if p.Repeatability > 0 {
			ki = deviations[i] / p.Repeatability
		}
		p.MandelH, p.MandelK = append(p.MandelH, hi), append(p.MandelK, ki)
	}
	if count > 1 {
		o, err := Cochran(deviations, count, level)
		if err != nil {
			return nil, err
		}
		p.Cochran = &o
	}
	if len(means) > 2 {
		o, err := Grubbs(means, EitherSide, level)
		if err != nil {
			return nil, err
		}
		p.Grubbs = &o
	}
	return p, nil
}
