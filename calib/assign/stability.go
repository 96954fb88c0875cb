package assign

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

// A StabilityPoint is one measurement of a stability study.
type StabilityPoint struct {
	// Time of storage before the measurement, in the unit of the shelf life.
	Time  float64
	Value float64 // ‰
	// Session in which it was measured; "" for all of one session.
	Session string
}

// A StabilityStudy is the value followed over time of storage.
type StabilityStudy struct {
	// Group names the variance of the result, such as "stability:<lot>/<version>".
	Group  string
	Points []StabilityPoint
	// Isochronous says that all units were measured together at the end, those of
	// short storage having waited where nothing changes.
	Isochronous bool
	// ShelfLife to be stated, in the unit of the times.
	ShelfLife float64
	// Level of the tests; 0 is 0.05.
	Level float64
}

// Stability is the evaluated study.
type Stability struct {
	// Intercept is at time 0, for the mean session where there are several;
	// Slope is in ‰ per unit of time.
	Intercept, Slope                       float64
	InterceptUncertainty, SlopeUncertainty float64
	// ResidualStandardDeviation about the line, on DegreesOfFreedom.
	ResidualStandardDeviation float64
	DegreesOfFreedom          int
	// T is Slope/SlopeUncertainty, nil where nothing scatters about the line; P
	// its two-sided probability, CriticalT the limit at the level.
	T            *float64
	P, CriticalT float64
	Significant  bool
	// StandardUncertainty is u_lts = s(b1)·ShelfLife.
	StandardUncertainty float64
	ShelfLife           float64
	Group               uncertain.Group
	Sessions            int // removed as blocks where more than one
	// LackOfFit is nil where no time has two measurements of one session, or
	// two times are all there are.
	LackOfFit *LackOfFit
	Remarks   []Remark
}

// LackOfFit compares the scatter of the means about the line with that of the
// measurements about their means: F on DF and PureDF.
type LackOfFit struct {
	F, P       float64
	DF, PureDF int
}

// AnalyseStability fits a straight line to the study (ISO 33405:2024, formerly
// ISO Guide 35:2017, 8.5 and B.3; the clause numbers are those of Guide 35):
//
//	y = b0 + b1·t,   u_lts = s(b1)·t_shelf,   t = b1/s(b1) on ν = n − 2
//
// Measurements of several sessions have a level for each session, ν = n − 1 −
// sessions; a slope then comes from the times within sessions. A significant
// slope makes [Decide] refuse until shelf life, storage or value model are
// changed with a reason.
//
// Too few measurements, times that do not differ within any session, a shelf
// life that is not positive and numbers that are not finite are an *InputError.
func AnalyseStability(s StabilityStudy) (*Stability, error) {
	level := orDefault(s.Level, 0.05)
	if err := checkLevel("level", level); err != nil {
		return nil, err
	}
	points, sessions, err := s.read()
	if err != nil {
		return nil, err
	}
	n := len(points)
	y, t := make([]float64, n), make([]float64, n)
	block := make([]int, n)
	var meanT, meanY float64
	for i, p := range points {
		y[i], t[i] = p.Value-points[0].Value, p.Time-points[0].Time
		block[i] = slices.Index(sessions, p.Session)
		meanT += t[i]
		meanY += y[i]
	}
	meanT /= float64(n)
	meanY /= float64(n)
	for i := range y {
		y[i] -= meanY
		t[i] -= meanT
	}
	basis := &projection{}
	for _, c := range indicators(block, len(sessions)) {
		basis.add(c)
	}
	span := adjust.Dot(t, t)
	basis.residual(t)
	sxx := adjust.Dot(t, t)
	if sxx <= 1e-20*span || span == 0 {
		return nil, &InputError{Place: "points", Found: "one time of storage in each session", Expected: "sessions with two or more times"}
	}
	out := &Stability{Sessions: len(sessions), ShelfLife: s.ShelfLife, DegreesOfFreedom: n - 1 - len(sessions)}
	if out.DegreesOfFreedom < 1 {
		return nil, &InputError{Place: "points", Found: fmt.Sprint(n), Expected: fmt.Sprintf("more than %d", 1+len(sessions))}
	}
	out.Slope = adjust.Dot(t, y) / sxx
	out.Intercept = points[0].Value + meanY - float64(out.Slope*(points[0].Time+meanT))
	basis.residual(y)
	adjust.AddScaled(y, -out.Slope, t)
	rss := adjust.Dot(y, y)
	variance := rss / float64(out.DegreesOfFreedom)
	out.ResidualStandardDeviation = math.Sqrt(variance)
	out.SlopeUncertainty = math.Sqrt(variance / sxx)
	at := points[0].Time + meanT
	out.InterceptUncertainty = math.Sqrt(float64(variance * (1/float64(n) + float64(at*at)/sxx)))
	student := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: float64(out.DegreesOfFreedom)}
	out.CriticalT = student.Quantile(1 - level/2)
	switch {
	case out.SlopeUncertainty > 0:
		ratio := out.Slope / out.SlopeUncertainty
		out.T, out.P = &ratio, 2*student.Survival(math.Abs(ratio))
		out.Significant = math.Abs(ratio) > out.CriticalT
	default:
		out.P = 1
		if out.Significant = out.Slope != 0; out.Significant {
			out.P = 0
		}
	}
	out.StandardUncertainty = out.SlopeUncertainty * s.ShelfLife
	out.Group = uncertain.NewGroup(s.Group, float64(out.StandardUncertainty*out.StandardUncertainty), float64(out.DegreesOfFreedom))
	out.LackOfFit = lackOfFit(points, block, rss, out.DegreesOfFreedom)
	s.remark(out, points)
	return out, nil
}

// read checks the points and sorts them by session, time and value.
func (s StabilityStudy) read() ([]StabilityPoint, []string, error) {
	if s.Group == "" {
		return nil, nil, &InputError{Place: "group", Found: "nothing", Expected: "a name for the variance"}
	}
	if !(s.ShelfLife > 0) || !finite(s.ShelfLife) {
		return nil, nil, &InputError{Place: "shelf life", Found: fmt.Sprint(s.ShelfLife), Expected: "a positive time"}
	}
	if len(s.Points) < 3 {
		return nil, nil, &InputError{Place: "points", Found: fmt.Sprint(len(s.Points)), Expected: "three or more"}
	}
	points := slices.Clone(s.Points)
	slices.SortStableFunc(points, func(a, b StabilityPoint) int {
		switch {
		case a.Session != b.Session:
			return compareText(a.Session, b.Session)
		case a.Time < b.Time:
			return -1
		case a.Time > b.Time:
			return 1
		case a.Value < b.Value:
			return -1
		case a.Value > b.Value:
			return 1
		}
		return 0
	})
	var sessions []string
	for i, p := range points {
		if !finite(p.Time) || !finite(p.Value) {
			return nil, nil, &InputError{Place: fmt.Sprintf("points[%d]", i), Found: fmt.Sprintf("time %v, value %v", p.Time, p.Value), Expected: "finite numbers"}
		}
		if len(sessions) == 0 || sessions[len(sessions)-1] != p.Session {
			sessions = append(sessions, p.Session)
		}
	}
	return points, sessions, nil
}

// lackOfFit sets the line against a free mean for each session and time.
func lackOfFit(points []StabilityPoint, block []int, rss float64, df int) *LackOfFit {
	var pure float64
	cells := 0
	for i := 0; i < len(points); {
		j := i
		var mean float64
		for j < len(points) && block[j] == block[i] && points[j].Time == points[i].Time {
			mean += points[j].Value - points[i].Value
			j++
		}
		mean /= float64(j - i)
		for k := i; k < j; k++ {
			d := points[k].Value - points[i].Value - mean
			pure += float64(d * d)
		}
		cells++
		i = j
	}
	l := &LackOfFit{PureDF: len(points) - cells}
	l.DF = df - l.PureDF
	if l.DF < 1 || l.PureDF < 1 || pure == 0 {
		return nil
	}
	l.F = math.Max(0, rss-pure) / float64(l.DF) / (pure / float64(l.PureDF))
	l.P = distuv.F{D1: float64(l.DF), D2: float64(l.PureDF)}.Survival(l.F)
	return l
}

func (s StabilityStudy) remark(out *Stability, points []StabilityPoint) {
	add := func(code, severity, sentence string, args ...any) {
		out.Remarks = append(out.Remarks, Remark{Code: code, Severity: severity, Sentence: fmt.Sprintf(sentence, args...)})
	}
	if out.Significant {
		add("unstable", Warning, "The value changes with time (slope %.3g per unit of time, p = %.2g).", out.Slope, out.P)
	}
	if !s.Isochronous && out.Sessions == 1 {
		add("not_isochronous", Warning, "The measurements were not made together: what changed between them looks like instability or hides it.")
	}
	low, high := points[0].Time, points[0].Time
	for _, p := range points {
		low, high = math.Min(low, p.Time), math.Max(high, p.Time)
	}
	if s.ShelfLife > 2*(high-low) {
		add("long_extrapolation", Warning, "The shelf life is %.2g times the time studied.", s.ShelfLife/(high-low))
	}
	if l := out.LackOfFit; l != nil && l.P < orDefault(s.Level, 0.05) {
		add("no_straight_line", Warning, "The means do not follow a straight line (p = %.2g).", l.P)
	}
}
