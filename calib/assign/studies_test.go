package assign

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"strconv"
	"testing"
)

func study(values [][]float64) HomogeneityStudy {
	s := HomogeneityStudy{Group: "homogeneity:L1/1"}
	for i, v := range values {
		u := Unit{Code: fmt.Sprintf("U%04d", i)}
		for _, x := range v {
			u.Measurements = append(u.Measurements, Measurement{Value: x})
		}
		s.Units = append(s.Units, u)
	}
	return s
}

func homogeneity(t testing.TB, s HomogeneityStudy) *Homogeneity {
	t.Helper()
	h, err := AnalyseHomogeneity(s)
	if err != nil {
		t.Fatal(err)
	}
	return h
}

func TestHomogeneityMatchesUnbalancedCase(t *testing.T) {
	var in struct{ Units [][]float64 }
	c := loadCase(t, "homogeneity-unbalanced", &in)
	h := homogeneity(t, study(in.Units))
	for name, got := range map[string]float64{
		"mean": h.Mean, "MSB": h.MeanSquareBetween, "MSW": h.MeanSquareWithin, "df_between": float64(h.BetweenDF), "df_within": float64(h.WithinDF),
		"n0": h.EffectiveReplicates, "F": *h.F, "p": *h.P, "s_bb_squared": h.BetweenVariance, "s_bb": h.BetweenUnits, "s_r": h.WithinStandardDeviation, "u_bb_star": h.Floor,
	} {
		c.check(t, "computed."+name, got, 1e-10) // the values carry 26.1 ± 1e-15 into squares of 1e-2
	}
	c.complete(t)
	near(t, "u_bb", h.StandardUncertainty, h.BetweenUnits, 0)
	want := 2 * (h.MeanSquareBetween*h.MeanSquareBetween/5 + h.MeanSquareWithin*h.MeanSquareWithin/10) / (2.65 * 2.65)
	near(t, "Var(s_bb²)", h.Group.Covariance[0][0], want, 1e-12)
}

func TestHomogeneityMatchesISO13528ArsenicInChocolate(t *testing.T) {
	var in struct{ Units, Stability [][]float64 }
	c := loadCase(t, "iso13528-E2-homogeneity", &in)
	h := homogeneity(t, study(in.Units))
	var sx float64
	for _, u := range in.Units {
		d := (u[0]+u[1])/2 - h.Mean
		sx += d * d
	}
	sigma := 0.15 * h.Mean // the round's own rule: 15 % of the mean
	s, err := h.SufficientFor(sigma)
	if err != nil {
		t.Fatal(err)
	}
	var later float64
	for _, u := range in.Stability {
		later += (u[0] + u[1]) / 4
	}
	for name, got := range map[string]float64{
		"mean": h.Mean, "s_x": math.Sqrt(sx / 9), "s_w": h.WithinStandardDeviation, "s_s": h.BetweenUnits, "sigma_pt": sigma, "criterion": s.Criterion,
		"stability_mean": later, "stability_difference": later - h.Mean,
		"computed.MSB": h.MeanSquareBetween, "computed.MSW": h.MeanSquareWithin, "computed.F": *h.F, "computed.p": *h.P,
		"computed.s_bb": h.BetweenUnits, "computed.s_bb_squared": h.BetweenVariance, "computed.u_bb_star": h.Floor, "computed.u_bb_reported_max": h.StandardUncertainty,
		"computed.F_crit_95": s.F2*h.EffectiveReplicates + 1,
	} {
		c.check(t, name, got, 1e-9)
	}
	c.complete(t)
	if !s.Sufficient || !h.FloorUsed || h.DegreesOfFreedom != 10 {
		t.Errorf("sufficient %v, floor %v, ν %g", s.Sufficient, h.FloorUsed, h.DegreesOfFreedom)
	}
}

func TestExpandedHomogeneityFactorsMatchISO13528TableB1(t *testing.T) {
	var in any
	c := loadCase(t, "iso13528-TableB1-factors", &in)
	for g := 7; g <= 20; g++ {
		f1, f2 := expandedFactors(g-1, g, 2)
		c.check(t, fmt.Sprintf("table.g%d.F1", g), f1, 1e-9)
		c.check(t, fmt.Sprintf("table.g%d.F2", g), f2, 1e-9)
	}
	c.complete(t)
}

// The certified sums of squares hold to what the values keep in binary64: with
// a constant of 1e12 before differences of 0.1, a value is rounded to 1.2e-4.
func TestAnovaMatchesNISTReferenceDatasets(t *testing.T) {
	for id, tol := range map[string]float64{
		"sirstv": 1e-11, "smls01": 1e-12, "smls02": 1e-12, "smls03": 1e-12, // differences of 0.1 in values near 1
		"smls04": 1e-8, "smls06": 1e-8, // 1e6: rounded to 1.2e-10 beside 0.1
		"smls07": 1e-3, "smls08": 1e-3, // 1e12: 1.2e-4 beside 0.1, and always to the same side
	} {
		var in struct{ Treatments json.RawMessage }
		c := loadCase(t, "nist-strd-anova-"+id, &in)
		h := homogeneity(t, study(treatments(t, in.Treatments)))
		for name, got := range map[string]float64{
			"between.df": float64(h.BetweenDF), "between.ss": h.SumBetween, "between.ms": h.MeanSquareBetween, "between.f": *h.F,
			"within.df": float64(h.WithinDF), "within.ss": h.SumWithin, "within.ms": h.MeanSquareWithin,
			"r_squared": h.RSquared, "residual_sd": h.WithinStandardDeviation,
		} {
			c.check(t, name, got, tol)
		}
		c.complete(t)
	}
}

func treatments(t *testing.T, raw json.RawMessage) [][]float64 {
	t.Helper()
	number := func(s string) float64 {
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	var listed map[string][]string
	var out [][]float64
	if json.Unmarshal(raw, &listed) == nil {
		for k := 1; k <= len(listed); k++ {
			var v []float64
			for _, s := range listed[strconv.Itoa(k)] {
				v = append(v, number(s))
			}
			out = append(out, v)
		}
		return out
	}
	var pairs []struct {
		First string
		Then  []string `json:"then_repeat"`
		Times int
	}
	if err := json.Unmarshal(raw, &pairs); err != nil {
		t.Fatal(err)
	}
	for _, p := range pairs {
		v := []float64{number(p.First)}
		for range p.Times {
			for _, s := range p.Then {
				v = append(v, number(s))
			}
		}
		out = append(out, v)
	}
	return out
}

func TestAnovaOfSummariesMatchesGUMH5(t *testing.T) {
	var in struct {
		J, K int
		Mean []float64 `json:"day_mean_V"`
		SD   []float64 `json:"day_sd_uV"`
	}
	c := loadCase(t, "gum-H5-anova-zener", &in)
	var groups []Summary
	for i, m := range in.Mean {
		groups = append(groups, Summary{Mean: m, StandardDeviation: in.SD[i] * 1e-6, Count: in.K})
	}
	a, err := AnovaOfSummaries(groups)
	if err != nil {
		t.Fatal(err)
	}
	const micro = 1e6
	days := math.Sqrt(a.MeanSquareBetween / 5)
	pooled := a.WithinStandardDeviation
	// Values of 10 V in binary64 leave about ten digits of their differences.
	for name, got := range map[string]float64{
		"mean": a.Mean, "s_day_means_uV": days * micro, "pooled_sd_uV": pooled * micro, "F": *a.F,
		"s_a_uV": math.Sqrt(a.MeanSquareBetween) * micro, "s_b_pooled_uV": pooled * micro, "s_B_uV": a.BetweenStandardDeviation * micro,
		"u_mean_between_uV": days / math.Sqrt(10) * micro,
		"computed.mean":     a.Mean, "computed.s_day_means": days, "computed.pooled_sd": pooled, "computed.F": *a.F, "computed.p": *a.P,
		"computed.s_B": a.BetweenStandardDeviation, "computed.u_mean_between": days / math.Sqrt(10),
		// All n = 50 as one sample, not an analysis of variance of ours:
		"computed.u_mean_pooled": math.Sqrt((a.SumBetween+a.SumWithin)/49) / math.Sqrt(50),
	} {
		c.check(t, name, got, 1e-9)
	}
	c.complete(t, "F95_9_40", "F975_9_40", "computed.F_crit") // quantiles only
}

func TestHomogeneityMatchesASTME691Glucose(t *testing.T) {
	var in struct{ Levels map[string][][]float64 }
	c := loadCase(t, "astm-e691-glucose", &in)
	for _, level := range []string{"A", "D", "E"} {
		p, err := AnalysePrecision(study(in.Levels[level]))
		if err != nil {
			t.Fatal(err)
		}
		for name, got := range map[string]float64{
			level + ".mean": p.Mean, level + ".s_xbar": p.MeansStandardDeviation, level + ".s_r": p.Repeatability, level + ".s_R": p.Reproducibility,
			"computed." + level + ".mean": p.Mean, "computed." + level + ".s_xbar": p.MeansStandardDeviation, "computed." + level + ".s_r": p.Repeatability,
			"computed." + level + ".s_R": p.Reproducibility, "computed." + level + ".s_L_squared": p.BetweenVariance, "computed." + level + ".cochran_C": p.Cochran.Statistic,
		} {
			c.check(t, name, got, 1e-9)
		}
		for i := range p.MandelH {
			c.check(t, fmt.Sprintf("computed.%s.h.%d", level, i), p.MandelH[i], 1e-9)
			c.check(t, fmt.Sprintf("computed.%s.k.%d", level, i), p.MandelK[i], 1e-9)
		}
	}
	c.complete(t)
}

func TestSessionsAreRemovedFromHomogeneityAsBlocks(t *testing.T) {
	values := [][]float64{{1.0, 1.1}, {1.2, 1.4}, {0.9, 1.05}, {1.1, 1.3}, {1.0, 1.15}}
	plain, blocked := study(values), study(values)
	for i := range blocked.Units {
		for j := range blocked.Units[i].Measurements {
			m := &blocked.Units[i].Measurements[j]
			m.Session = fmt.Sprintf("S%d", j)
			m.Value += 5 * float64(j) // a session far off
			_ = plain
		}
	}
	h := homogeneity(t, blocked)
	// Each unit once in each session: the two-way table without replication.
	var grand float64
	unit, session := make([]float64, 5), make([]float64, 2)
	for i, u := range values {
		for j, v := range u {
			grand += v / 10
			unit[i] += v / 2
			session[j] += v / 5
		}
	}
	var msb, mse float64
	for i, u := range values {
		msb += 2 * (unit[i] - grand) * (unit[i] - grand) / 4
		for j, v := range u {
			r := v - unit[i] - session[j] + grand
			mse += r * r / 4
		}
	}
	near(t, "MSB", h.MeanSquareBetween, msb, 1e-11)
	near(t, "MSW", h.MeanSquareWithin, mse, 1e-10)
	near(t, "n0", h.EffectiveReplicates, 2, 1e-12)
	if h.WithinDF != 4 || h.Sessions != 2 {
		t.Errorf("ν_W %d, sessions %d", h.WithinDF, h.Sessions)
	}
	apart := study(values)
	for i := range apart.Units {
		for j := range apart.Units[i].Measurements {
			apart.Units[i].Measurements[j].Session = apart.Units[i].Code
		}
	}
	var refused *InputError
	if _, err := AnalyseHomogeneity(apart); !errors.As(err, &refused) {
		t.Errorf("units in sessions of their own: got %v", err)
	}
}

// Simulation: E(s_bb²) = σ_bb² for an unbalanced design with sessions as
// blocks, and Var(s_bb²) near the group's.
func TestBetweenUnitVarianceIsUnbiasedInAnUnbalancedBlockedDesign(t *testing.T) {
	random := rand.New(rand.NewPCG(11, 7))
	const bb, r, trials = 0.3, 0.2, 4000
	var sum, squares float64
	for range trials {
		s := HomogeneityStudy{Group: "h"}
		offset := []float64{random.NormFloat64(), random.NormFloat64(), random.NormFloat64()}
		for i := range 8 {
			e := bb * random.NormFloat64()
			u := Unit{Code: fmt.Sprint(i)}
			for j := range 2 + i%3 {
				k := (i + j) % 3
				u.Measurements = append(u.Measurements, Measurement{Value: offset[k] + e + r*random.NormFloat64(), Session: fmt.Sprint(k)})
			}
			s.Units = append(s.Units, u)
		}
		h := homogeneity(t, s)
		sum += h.BetweenVariance
		squares += h.BetweenVariance * h.BetweenVariance
	}
	mean := sum / trials
	standard := math.Sqrt((squares/trials - mean*mean) / trials)
	if math.Abs(mean-bb*bb) > 4*standard {
		t.Errorf("mean s_bb² %.5f ± %.5f, true %.5f", mean, standard, bb*bb)
	}
}

func TestFillingTrendIsFoundAndNoiseIsNot(t *testing.T) {
	random := rand.New(rand.NewPCG(3, 9))
	found := func(slope float64) int {
		k := 0
		for range 500 {
			s := HomogeneityStudy{Group: "h"}
			for i := range 12 {
				order := float64(i)
				e := slope*order + 0.02*random.NormFloat64()
				s.Units = append(s.Units, Unit{Code: fmt.Sprintf("%02d", i), FillingOrder: &order, Measurements: []Measurement{{Value: e + 0.03*random.NormFloat64()}, {Value: e + 0.03*random.NormFloat64()}}})
			}
			if homogeneity(t, s).FillingTrend.Significant {
				k++
			}
		}
		return k
	}
	if k := found(0); k < 11 || k > 41 { // 25 ± 3.3·√(500·0.05·0.95)
		t.Errorf("%d of 500 lots without a trend called one, expected 25", k)
	}
	if k := found(0.02); k < 495 {
		t.Errorf("%d of 500 lots with a trend found", k)
	}
}

func TestStabilityMatchesNoTrendCase(t *testing.T) {
	var in struct {
		T     []float64 `json:"t_months"`
		Y     []float64
		Shelf float64 `json:"t_shelf_months"`
	}
	c := loadCase(t, "stability-no-trend", &in)
	s := StabilityStudy{Group: "stability:L1/1", Isochronous: true, ShelfLife: in.Shelf}
	for i, v := range in.Y {
		s.Points = append(s.Points, StabilityPoint{Time: in.T[i], Value: v})
	}
	r, err := AnalyseStability(s)
	if err != nil {
		t.Fatal(err)
	}
	significant := 0.0
	if r.Significant {
		significant = 1
	}
	for name, got := range map[string]float64{
		"b0": r.Intercept, "b1": r.Slope, "s": r.ResidualStandardDeviation, "s_b1": r.SlopeUncertainty, "s_b0": r.InterceptUncertainty,
		"t_stat": *r.T, "t_crit_95": r.CriticalT, "p": r.P, "u_lts": r.StandardUncertainty,
	} {
		c.check(t, "computed."+name, got, 1e-9)
	}
	c.complete(t, "computed.significant")
	if significant != 0 {
		t.Error("a trend is found where there is none")
	}
	near(t, "ν of the group", 2*r.Group.Variances[0]*r.Group.Variances[0]/r.Group.Covariance[0][0], 12, 1e-12)
}

func TestStabilityWithSessionsUsesTheSlopeWithinThem(t *testing.T) {
	s := StabilityStudy{Group: "s", ShelfLife: 24}
	// Slope 0.01 within each session; the later session reads 3 higher.
	for k, session := range []string{"a", "b"} {
		for _, x := range []float64{0, 6, 12} {
			noise := 0.001 * math.Sin(7*x+float64(k))
			s.Points = append(s.Points, StabilityPoint{Time: x + 6*float64(k), Value: -27 + 0.01*x + 3*float64(k) + noise, Session: session})
		}
	}
	r, err := AnalyseStability(s)
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(r.Slope-0.01) > 3*r.SlopeUncertainty || r.DegreesOfFreedom != 3 || !r.Significant {
		t.Errorf("slope %g ± %g on %d, significant %v", r.Slope, r.SlopeUncertainty, r.DegreesOfFreedom, r.Significant)
	}
	for i := range s.Points {
		s.Points[i].Session = fmt.Sprint(i)
	}
	if _, err := AnalyseStability(s); err == nil {
		t.Error("one time in each session is accepted")
	}
}

func TestStudiesRefuseWhatTheyCannotUse(t *testing.T) {
	one := study([][]float64{{1, 2}})
	single := study([][]float64{{1}, {2}, {3}})
	nan := study([][]float64{{1, 2}, {math.NaN(), 1}})
	twice := study([][]float64{{1, 2}, {2, 1}})
	twice.Units[1].Code = twice.Units[0].Code
	empty := study([][]float64{{1, 2}, {}})
	unnamed := study([][]float64{{1, 2}, {2, 1}})
	unnamed.Group = ""
	for name, s := range map[string]HomogeneityStudy{"one unit": one, "no replicates": single, "NaN": nan, "unit twice": twice, "unit without measurement": empty, "no group": unnamed} {
		var refused *InputError
		if _, err := AnalyseHomogeneity(s); !errors.As(err, &refused) {
			t.Errorf("%s: got %v", name, err)
		}
	}
	points := []StabilityPoint{{Time: 0, Value: 1}, {Time: 1, Value: 1}, {Time: 2, Value: 1.1}}
	for name, s := range map[string]StabilityStudy{
		"two points":    {Group: "s", ShelfLife: 1, Points: points[:2]},
		"one time":      {Group: "s", ShelfLife: 1, Points: []StabilityPoint{{Time: 1}, {Time: 1}, {Time: 1}}},
		"no shelf life": {Group: "s", Points: points},
		"NaN":           {Group: "s", ShelfLife: 1, Points: append([]StabilityPoint{{Time: math.NaN()}}, points...)},
		"no group":      {ShelfLife: 1, Points: points},
	} {
		var refused *InputError
		if _, err := AnalyseStability(s); !errors.As(err, &refused) {
			t.Errorf("%s: got %v", name, err)
		}
	}
	if _, err := AnovaOfSummaries([]Summary{{Count: 1}}); err == nil {
		t.Error("one summary is accepted")
	}
}

// What the sums of squares lack of the certified ones is the rounding of the
// values: computed exactly from the binary64 values, they are ours.
func TestAnovaIsExactForTheValuesItIsGiven(t *testing.T) {
	for _, id := range []string{"smls03", "smls06", "smls08", "sirstv"} {
		var in struct{ Treatments json.RawMessage }
		loadCase(t, "nist-strd-anova-"+id, &in)
		groups := treatments(t, in.Treatments)
		h := homogeneity(t, study(groups))
		rat := func(v float64) *big.Rat { return new(big.Rat).SetFloat64(v) }
		total, n := new(big.Rat), 0
		sums := make([]*big.Rat, len(groups))
		for i, g := range groups {
			sums[i] = new(big.Rat)
			for _, v := range g {
				sums[i].Add(sums[i], rat(v))
				n++
			}
			total.Add(total, sums[i])
		}
		mean := new(big.Rat).Quo(total, big.NewRat(int64(n), 1))
		between, within := new(big.Rat), new(big.Rat)
		for i, g := range groups {
			m := new(big.Rat).Quo(sums[i], big.NewRat(int64(len(g)), 1))
			d := new(big.Rat).Sub(m, mean)
			d.Mul(d, d)
			between.Add(between, d.Mul(d, big.NewRat(int64(len(g)), 1)))
			for _, v := range g {
				d := new(big.Rat).Sub(rat(v), m)
				within.Add(within, d.Mul(d, d))
			}
		}
		b, _ := between.Float64()
		w, _ := within.Float64()
		near(t, id+" between", h.SumBetween, b, 1e-11)
		near(t, id+" within", h.SumWithin, w, 1e-11)
	}
}

func TestStudiesWithoutScatterHaveNoRatios(t *testing.T) {
	h := homogeneity(t, study([][]float64{{1, 1}, {1, 1}, {1, 1}}))
	if h.F != nil || h.P != nil || h.StandardUncertainty != 0 {
		t.Errorf("equal measurements: F %v, u_bb %g", h.F, h.StandardUncertainty)
	}
	line := StabilityStudy{Group: "s", ShelfLife: 4, Points: []StabilityPoint{{Time: 0, Value: 1}, {Time: 1, Value: 1}, {Time: 2, Value: 1}}}
	r, err := AnalyseStability(line)
	if err != nil || r.T != nil || r.Significant || r.P != 1 {
		t.Errorf("a constant: %+v, %v", r, err)
	}
	for i := range line.Points {
		line.Points[i].Value = 2 * line.Points[i].Time
	}
	if r, err = AnalyseStability(line); err != nil || !r.Significant || r.Slope != 2 {
		t.Errorf("an exact line: %+v, %v", r, err)
	}
}
