package exchange

import "deltamoor/calib"

// A FitNeed is a test of whether the readings ask for a term.
type FitNeed struct {
	Term            string   `json:"term" enum:"drift,drift.quadratic,drift.slope,size,memory" example:"drift" doc:"drift.slope is a slope that changes with time."`
	InModel         bool     `json:"in_model" doc:"Whether the model of this fit has the term."`
	DeltaChiSquare  *float64 `json:"delta_chi_square" doc:"How much the term explains."`
	DeltaParameters int      `json:"delta_parameters"`
	F               *float64 `json:"f" doc:"Null where the readings' variance is known: then delta_chi_square is the test."`
	PValue          *float64 `json:"p_value"`
	AICcWith        *float64 `json:"aicc_with"`
	AICcWithout     *float64 `json:"aicc_without"`
	Sentence        string   `json:"sentence" doc:"The same in plain words."`
}

func fitNeeds(needs []calib.TermNeed) []FitNeed {
	out := []FitNeed{}
	for _, n := range needs {
		out = append(out, FitNeed{n.Term, n.Model, finite(n.DeltaChiSquare), n.DeltaParameters, finitePointer(n.F), finite(n.PValue),
			finitePointer(n.AICcWith), finitePointer(n.AICcWithout), n.Sentence()})
	}
	return out
}

// A FitCompanion is a robust fit of the same session: an opinion beside the
// official one, which it never replaces.
type FitCompanion struct {
	Method         string                  `json:"method" example:"Huber M-estimate, k = 1.5"`
	TuningConstant *float64                `json:"tuning_constant" example:"1.5"`
	Scale          *float64                `json:"scale" doc:"By which the readings' estimated standard uncertainties would be multiplied; null for declared ones."`
	Parameters     []FitCompanionParameter `json:"parameters" nullable:"false"`
	Line           *FitCompanionLine       `json:"line" doc:"true = slope·raw + intercept."`
	Readings       []FitCompanionReading   `json:"readings" nullable:"false" doc:"The fitted readings with their weights."`
	Samples        []FitCompanionSample    `json:"samples" nullable:"false" doc:"Samples and controls by the companion's line."`
	Suggested      []int                   `json:"suggested" nullable:"false" doc:"Readings suggested for a look; excluding one needs a person and a reason."`
	Note           string                  `json:"note"`
}

// A FitCompanionParameter is one coefficient beside the official one.
type FitCompanionParameter struct {
	Name       string   `json:"name" example:"slope"`
	Value      *float64 `json:"value"`
	Difference *float64 `json:"difference" doc:"Companion less official."`
	InUnits    *float64 `json:"difference_in_u" doc:"Difference in units of the official standard uncertainty; null where that is zero."`
}

// A FitCompanionLine is the line as usually quoted; it has no uncertainty of its own.
type FitCompanionLine struct {
	Slope     *float64 `json:"slope"`
	Intercept *float64 `json:"intercept" doc:"‰"`
}

// A FitCompanionReading is one fitted reading.
type FitCompanionReading struct {
	Index    int      `json:"index" doc:"Index in the request's readings, from 0; the reading's number for a stored calibration."`
	Residual *float64 `json:"residual" doc:"From the companion's line (‰)."`
	InUnits  *float64 `json:"residual_in_u" doc:"In units of the reading's own standard uncertainty; null for an exact one."`
	Weight   *float64 `json:"weight" doc:"1 for a full one." example:"1"`
}

// A FitCompanionSample is a sample or control by the companion's line: exactly
// one of Sample and Material is set.
type FitCompanionSample struct {
	Sample     string   `json:"sample,omitempty" example:"S1"`
	Material   string   `json:"material,omitempty" doc:"Of a control."`
	Value      *float64 `json:"value" doc:"‰"`
	Difference *float64 `json:"difference" doc:"Companion less official (‰)."`
	InUnits    *float64 `json:"difference_in_u" doc:"Difference in units of the official standard uncertainty; null where that is zero."`
}

// companionNote stands with every companion, wherever it goes.
const companionNote = "An opinion beside the official fit: it enters no result. Leaving a reading out needs a person and a reason."

// NewFitCompanion writes a companion out. number turns an index of the
// session's readings into what the answer calls a reading; nil keeps it.
func NewFitCompanion(c *calib.Companion, number func(int) int) *FitCompanion {
	if number == nil {
		number = func(i int) int { return i }
	}
	out := &FitCompanion{Method: c.Method, TuningConstant: finite(c.TuningConstant), Scale: finitePointer(c.Scale), Parameters: []FitCompanionParameter{},
		Readings: []FitCompanionReading{}, Samples: []FitCompanionSample{}, Suggested: []int{}, Note: companionNote}
	for _, p := range c.Parameters {
		out.Parameters = append(out.Parameters, FitCompanionParameter{p.Name, finite(p.Value), finite(p.Difference), finitePointer(p.InUnits)})
	}
	if l := c.Line; l != nil {
		out.Line = &FitCompanionLine{finite(l.Slope), finite(l.Intercept)}
	}
	for _, r := range c.Readings {
		out.Readings = append(out.Readings, FitCompanionReading{number(r.Index), finite(r.Residual), finitePointer(r.InUnits), finite(r.Weight)})
	}
	for _, i := range c.Suggested {
		out.Suggested = append(out.Suggested, number(i))
	}
	for _, s := range c.Subjects {
		sample := FitCompanionSample{Value: finite(s.Value), Difference: finite(s.Difference), InUnits: finitePointer(s.InUnits)}
		if s.Role == calib.Sample {
			sample.Sample = s.Subject
		} else {
			sample.Material = s.Subject
		}
		out.Samples = append(out.Samples, sample)
	}
	return out
}
