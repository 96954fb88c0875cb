package registry

import (
	"encoding/json"
	"fmt"
	"math"

	"deltamoor/calib"
	"deltamoor/calib/correct"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// A preparation is what is done to a session's readings before the fit, in the
// order H3 factor, blank, repeats (metrology 4): the engine's readings, each
// with the stored ones it stands for, and the inputs that they share.
type preparation struct {
	readings []preparedReading
	shared   []sharedInput
	groups   []uncertain.Group
	setAside []int
	means    []store.MeanReading
	flags    []calib.Flag
}

// A preparedReading is one reading as it enters the fit.
type preparedReading struct {
	calib.Reading
	stored  store.Reading // the first that it stands for
	numbers []int
	// changed tells that Raw is no stored reading's own.
	changed bool
	// per is ∂raw/∂input of every shared input.
	per []float64
}

// A sharedInput is one number that many readings were corrected with.
type sharedInput struct {
	name  string
	value uncertain.Number
	blank bool // part of a blank taken out
}

// declared is what the session says of a correction for the fit's quantity:
// the declaration for the quantity, else the one for all.
func (a *assembly) declared(name string) (store.Correction, bool) {
	var found store.Correction
	ok := false
	for _, k := range a.session.Value.Corrections {
		if k.Name == name && (k.Quantity == a.spec.Quantity || k.Quantity == "" && !ok) {
			found, ok = k, true
		}
	}
	return found, ok
}

// blankHere tells that a blank known independently is taken out before the fit.
func (a *assembly) blankHere() bool {
	k, ok := a.declared("blank")
	return ok && k.State == "here" && a.spec.Blank != nil && a.model.Size != calib.SizeBlank
}

// nameH3 is what a calibration calls the factor among its corrections.
const nameH3 = "H3 factor"

const cannotFit = "this session cannot be fitted"

// prepare makes the engine's readings.
func (a *assembly) prepare() (preparation, error) {
	var p preparation
	for _, rd := range a.readings {
		p.readings = append(p.readings, preparedReading{Reading: a.engineReading(rd), stored: rd, numbers: []int{rd.Number}})
	}
	for _, step := range []func(*preparation) error{a.prepareH3, a.prepareBlank, a.prepareRepeats} {
		if err := step(&p); err != nil {
			return p, err
		}
	}
	p.flags = append(p.flags, a.resolutionFlags()...)
	return p, nil
}

// engineReading is a stored reading in the engine's form.
func (a *assembly) engineReading(rd store.Reading) calib.Reading {
	in := calib.Reading{ID: fmt.Sprintf("%s/%d", rd.Session, rd.Number), Subject: rd.Material, Role: rd.Role, Raw: rd.Raw,
		StandardUncertainty: rd.U, Size: rd.Size, Excluded: a.excluded[rd.Number]}
	if rd.Sample != "" {
		in.Subject = rd.Sample
	}
	if rd.Preparation != "" {
		in.Preparation = in.Subject + "/" + rd.Preparation
	}
	switch {
	case rd.At != nil:
		hours := float64(*rd.At-*a.origin) / 3600e6
		in.Time = &hours
	case a.origin == nil && rd.Position != nil: // position stands in for time where the file has no clock
		position := float64(*rd.Position)
		in.Time = &position
	}
	return in
}

// extraOf are the rare fields of a reading that corrections and flags use.
type extraOf struct {
	Amount       *float64 `json:"amount"`
	Retention    *float64 `json:"retention"`
	Width        *float64 `json:"width"`
	WidthBy      string   `json:"width_by"`
	Intensity    *float64 `json:"intensity"`
	GasIntensity *float64 `json:"gas_intensity"`
	GasRatio     *float64 `json:"gas_ratio"`
}

func extras(rd store.Reading) (extraOf, error) {
	var e extraOf
	if rd.Extra == "" {
		return e, nil
	}
	if err := json.Unmarshal([]byte(rd.Extra), &e); err != nil {
		return e, fmt.Errorf("rare fields of reading %d of session %s: %w", rd.Number, rd.Session, err)
	}
	return e, nil
}

// move corrects a reading: its raw delta, its own uncertainty, and what it owes to earlier inputs.
func (rd *preparedReading) move(raw, perRaw float64) {
	rd.Raw, rd.changed = raw, true
	if u := rd.StandardUncertainty; u != nil {
		scaled := *u * math.Abs(perRaw)
		rd.StandardUncertainty = &scaled
	}
	for i := range rd.per {
		rd.per[i] *= perRaw
	}
}

// share adds an input, with its derivative for every reading.
func (p *preparation) share(in sharedInput, groups []uncertain.Group, per func(i int) float64) {
	p.shared, p.groups = append(p.shared, in), append(p.groups, groups...)
	for i := range p.readings {
		p.readings[i].per = append(p.readings[i].per, per(i))
	}
}

// prepareH3 takes the H3+ contribution out, where the session declares it as
// done here; where a program before the registry did that with a recorded
// factor, only the factor's uncertainty is carried.
func (a *assembly) prepareH3(p *preparation) error {
	if a.factor == nil && a.earlier == nil {
		return nil
	}
	rule := a.spec.H3
	if rule == nil {
		if a.factor != nil {
			return Refuse(Invalid, "session %s: the method says nothing of the intensities in its files, so no H3 factor can be applied to %s", store.FormatCode(a.session.Code), a.spec.Quantity)
		}
		p.flags = append(p.flags, a.notPropagated("the method says nothing of the intensities in its files"))
		return nil
	}
	applied := a.factor
	if applied == nil {
		applied = a.earlier
	}
	k, groups, err := factorNumber(*applied, *rule)
	if err != nil {
		return err
	}
	var before float64 // the factor that the file's deltas were formed with
	if a.earlier != nil {
		n, _, err := factorNumber(*a.earlier, *rule)
		if err != nil {
			return err
		}
		before = n.Value
	}
	per := make([]float64, len(p.readings))
	var c complaints
	for i := range p.readings {
		rd := &p.readings[i]
		if rd.Role == calib.Gas {
			continue
		}
		e, err := extras(rd.stored)
		if err != nil {
			return err
		}
		if e.Intensity == nil || e.GasIntensity == nil || e.GasRatio == nil {
			if a.factor == nil {
				p.flags = append(p.flags, a.notPropagated("its readings carry no intensities"))
				return nil
			}
			c.add(fmt.Sprintf("reading %d", rd.stored.Number), "no intensities", "the peak's m/z 2 intensity and the reference pulse's intensity and ratio, since the H3 factor is applied here")
			continue
		}
		peak := correct.Undo(rd.Raw, before, meanIntensity(rule.Shape, *e.Intensity), *e.GasRatio, *e.GasIntensity)
		out, err := peak.ApplyH3(k.Value)
		if err != nil {
			c.add(fmt.Sprintf("reading %d", rd.stored.Number), err.Error(), "intensities and a gas ratio that the factor leaves positive")
			continue
		}
		per[i] = out.PerFactor
		if a.factor != nil {
			// Of the file's delta, formed with the factor before: (R_g − K₀·I_g)/(R_g − K·I_g).
			gas := *e.GasRatio - float64(before**e.GasIntensity)
			rd.move(out.Delta, gas/(*e.GasRatio-float64(k.Value**e.GasIntensity)))
		}
	}
	if err := Complain(cannotFit, c); err != nil {
		return err
	}
	p.share(sharedInput{name: nameH3, value: k}, groups, func(i int) float64 { return per[i] })
	p.flags = append(p.flags, a.factorFlags(*applied)...)
	p.flags = append(p.flags, a.intensityFlags(*applied)...)
	if applied.Value.U == 0 {
		p.flags = append(p.flags, a.notPropagated("it was recorded without an uncertainty"))
	}
	return nil
}

func (a *assembly) notPropagated(why string) calib.Flag {
	f := a.factor
	if f == nil {
		f = a.earlier
	}
	return calib.Flag{Code: "h3_not_propagated", Severity: calib.Note, Subject: f.Code,
		Message: fmt.Sprintf("The uncertainty of the H3 factor %s.%d is in no result: %s.", f.Code, f.Ref.Version, why),
		Advice:  "Map the intensities of peaks and reference pulses in the method, and determine the factor from its pulses."}
}

// intensityFlags find peaks beyond the pulses that the factor was found from.
func (a *assembly) intensityFlags(f store.Version[store.Factor]) []calib.Flag {
	if f.Value.Lowest == nil || f.Value.Highest == nil {
		return nil
	}
	scale, err := perUnit(f.Value, a.spec.H3.RatioUnit, a.spec.H3.IntensityUnit)
	ratio := map[string]float64{"ppm": 1e-6, "one": 1}
	if err != nil || scale == 0 {
		return nil
	}
	unit := ratio[f.Value.RatioUnit] / ratio[a.spec.H3.RatioUnit] / scale // the readings' unit of intensity in one of the factor's
	var outside []int
	for _, rd := range a.readings {
		if rd.Role == calib.Gas || rd.Role == calib.Conditioning || rd.Role == calib.Blank || a.excluded[rd.Number] {
			continue
		}
		e, err := extras(rd)
		if err != nil || e.Intensity == nil {
			continue
		}
		if i := meanIntensity(a.spec.H3.Shape, *e.Intensity); i < *f.Value.Lowest*unit || i > *f.Value.Highest*unit {
			outside = append(outside, rd.Number)
		}
	}
	if len(outside) == 0 {
		return nil
	}
	return []calib.Flag{{Code: "h3_outside_range", Severity: calib.Warning, Subject: f.Code, Readings: outside,
		Message: fmt.Sprintf("%d peaks are lower or higher than the pulses that the H3 factor %s.%d was determined from.", len(outside), f.Code, f.Ref.Version),
		Advice:  "Measure pulses over the whole range of the peaks, or bring the amounts into it."}}
}

// prepareBlank takes out a blank that is known independently of the anchors:
// δ_s = (δ_m·s − δ_b·s_b)/(s − s_b), s measured and including the blank.
func (a *assembly) prepareBlank(p *preparation) error {
	if !a.blankHere() {
		return nil
	}
	size, raw, groups, viaShared, err := a.blankInputs(p)
	if err != nil {
		return err
	}
	blank := correct.Blank{Size: size.Value, RawDelta: raw.Value}
	perSize, perRaw := make([]float64, len(p.readings)), make([]float64, len(p.readings))
	var c complaints
	for i := range p.readings {
		rd := &p.readings[i]
		if rd.Role == calib.Gas || rd.Role == calib.Blank {
			continue
		}
		place := fmt.Sprintf("reading %d", rd.stored.Number)
		if rd.Size == nil {
			c.add(place, "no size", "the peak's size, since a blank is taken out")
			continue
		}
		out, err := blank.Remove(rd.Raw, *rd.Size)
		if err != nil {
			if rd.Role == calib.Conditioning || rd.Excluded {
				rd.Excluded = true
				continue // it counts for nothing
			}
			c.add(place, fmt.Sprintf("a peak of size %v", *rd.Size), "one larger than the blank's %v; exclude it with its cause", size.Value)
			continue
		}
		rd.move(out.Delta, out.PerRaw)
		for j := range rd.per {
			rd.per[j] += float64(out.PerBlankDelta * viaShared[j])
		}
		perSize[i], perRaw[i] = out.PerBlankSize, out.PerBlankDelta
	}
	if err := Complain(cannotFit, c); err != nil {
		return err
	}
	p.share(sharedInput{"size of the blank", size, true}, groups[0], func(i int) float64 { return perSize[i] })
	p.share(sharedInput{"raw delta of the blank", raw, true}, groups[1], func(i int) float64 { return perRaw[i] })
	return nil
}

// blankInputs are the blank's size and raw delta: as the method states them, or
// means of the session's blank readings, n of them, u = s/√n with ν = n − 1.
// viaShared is the derivative of the raw delta by inputs shared before.
func (a *assembly) blankInputs(p *preparation) (size, raw uncertain.Number, groups [2][]uncertain.Group, viaShared []float64, err error) {
	rule := *a.spec.Blank
	viaShared = make([]float64, len(p.shared))
	if rule.From != "readings" {
		id := fmt.Sprintf("correction:blank/%s/%s.%d/%s", a.method.Laboratory, a.method.Code, a.method.Ref.Version, a.spec.Quantity)
		if size, groups[0], err = correctionNumber(id+"/size", rule.Size, rule.USize, rule.DegreesOfFreedom); err != nil {
			return
		}
		raw, groups[1], err = correctionNumber(id+"/raw", rule.Raw, rule.URaw, rule.DegreesOfFreedom)
		return
	}
	var sizes, raws []float64
	for _, rd := range p.readings {
		if rd.Role != calib.Blank || rd.Excluded || rd.Size == nil {
			continue
		}
		sizes, raws = append(sizes, *rd.Size), append(raws, rd.Raw)
		for j := range viaShared {
			viaShared[j] += rd.per[j]
		}
	}
	n := len(sizes)
	if n < 2 {
		err = Complain(cannotFit, []Complaint{{Place: "blank", Found: fmt.Sprintf("%d blank readings with a size", n),
			Expected: "at least 2, whose scatter gives the blank's uncertainty; or state the blank in the method, with its evidence"}})
		return
	}
	for j := range viaShared {
		viaShared[j] /= float64(n)
	}
	nu := float64(n - 1)
	id := "correction:blank/" + a.session.Code + "/" + a.spec.Quantity
	meanSize, sdSize := meanAndSD(sizes)
	meanRaw, sdRaw := meanAndSD(raws)
	if size, groups[0], err = correctionNumber(id+"/size", meanSize, sdSize/math.Sqrt(float64(n)), &nu); err != nil {
		return
	}
	raw, groups[1], err = correctionNumber(id+"/raw", meanRaw, sdRaw/math.Sqrt(float64(n)), &nu)
	return
}

// meanAndSD are the mean and the standard deviation with n − 1, 0 for one; the
// products are rounded before they are summed, so that the bits are the same
// on machines that fuse.
func meanAndSD(x []float64) (mean, sd float64) {
	for _, v := range x {
		mean += v
	}
	mean /= float64(len(x))
	if len(x) < 2 {
		return mean, 0
	}
	sum := 0.0
	for _, v := range x {
		d := v - mean
		sum += float64(d * d)
	}
	return mean, math.Sqrt(sum / float64(len(x)-1))
}
