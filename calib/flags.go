package calib

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"
)

// flag adds the judgements that travel with the result. Codes are stable; each
// has one sentence and says what to do.
func (c *calibrated) flag(r *Result) {
	c.flagAnchors(r)
	c.flagFit(r)
	c.flagReadings(r)
	for k := range r.Subjects {
		c.flagSubject(r, &r.Subjects[k])
	}
}

func (r *Result) add(f Flag) {
	slices.Sort(f.Readings)
	r.Flags = append(r.Flags, f)
}

// flagAnchors: too few, too close, one that disagrees with the rest.
func (c *calibrated) flagAnchors(r *Result) {
	low, high := c.span()
	fitted := 0
	for _, l := range c.classes {
		if l.anchor >= 0 {
			fitted++
		}
	}
	policy := c.in.policy
	switch {
	case c.ratio:
		r.add(Flag{Code: "single_anchor", Severity: Serious, Message: "The scale rests on one anchor: its slope is assumed, not measured.", Advice: "Measure a second anchor at the other end of the samples' range."})
	case fitted == 2:
		r.add(Flag{Code: "two_anchors", Severity: Note, Message: "With two anchors nothing in the session can show that one of them is off.", Advice: "Judge by a control, or measure a third anchor."})
	}
	if fitted < policy.MinimumAnchors {
		r.add(Flag{Code: "few_anchors", Severity: Warning, Message: fmt.Sprintf("The fit has %d anchors; the method asks for %d.", fitted, policy.MinimumAnchors), Advice: "Measure more anchors, or state why fewer will do."})
	}
	if !c.ratio && high-low < policy.AdvisedSpan {
		r.add(Flag{Code: "anchors_close", Severity: Warning, Message: fmt.Sprintf("The anchors are only %.4g ‰ apart; the method advises %.4g ‰.", high-low, policy.AdvisedSpan), Advice: "Choose anchors that span the samples."})
	}
	if len(c.in.anchorControls) > 0 {
		r.add(Flag{Code: "anchor_is_control", Severity: Warning, Readings: slices.Clone(c.in.anchorControls), Message: "A material is anchor and control of one quantity: its control readings are no evidence.", Advice: "Judge the session by a material that is not an anchor."})
	}
	c.flagLeftOut(r, fitted)
}

// flagLeftOut flags the anchors whose left-out |z| is beyond the limit, the
// worst first: one that is off also pulls the line that its neighbours are
// judged by.
func (c *calibrated) flagLeftOut(r *Result, fitted int) {
	limit := c.in.policy.LeftOutLimit
	var off []*AnchorResult
	for k := range r.Anchors {
		if a := &r.Anchors[k]; a.LeftOut != nil && math.Abs(a.LeftOut.Z) > limit {
			off = append(off, a)
		}
	}
	if len(off) == 0 {
		return
	}
	z := func(a *AnchorResult) float64 { return math.Abs(a.LeftOut.Z) }
	slices.SortFunc(off, func(a, b *AnchorResult) int {
		return cmp.Or(cmp.Compare(z(b), z(a)), strings.Compare(a.Material, b.Material))
	})
	worst := off[0]
	f := Flag{Code: "anchor_disagrees", Severity: Serious, Subject: worst.Material,
		Message: fmt.Sprintf("Anchor %s disagrees with the line through the others (z = %.3g).", worst.Material, worst.LeftOut.Z),
		Advice:  "Look at its bottle, its readings and its assigned value; leave it out only with a cause."}
	switch {
	case len(off) == 2 && z(off[1]) > 0.7*z(worst):
		f.Subject = ""
		f.Message = fmt.Sprintf("Both %s (z = %.3g) and %s (z = %.3g) disagree with the line through the others.", worst.Material, worst.LeftOut.Z, off[1].Material, off[1].LeftOut.Z)
	case len(off) > 1:
		var others []string
		for _, a := range off[1:] {
			others = append(others, a.Material)
		}
		f.Message = fmt.Sprintf("Anchor %s disagrees most with the line through the others (z = %.3g); so do %s, perhaps for its sake.", worst.Material, worst.LeftOut.Z, strings.Join(others, ", "))
	}
	if fitted == 3 {
		f.Subject = ""
		f.Message += " With three anchors of which one is off, nothing tells which."
	}
	for _, i := range c.fitted {
		rd := &c.in.readings[i]
		if slices.ContainsFunc(off, func(a *AnchorResult) bool { return a.Material == rd.Subject }) {
			f.Readings = append(f.Readings, rd.index)
		}
	}
	r.add(f)
}

// flagFit: chi-square, lack of fit, few degrees of freedom, a weak slope.
func (c *calibrated) flagFit(r *Result) {
	level := c.in.policy.TestLevel
	if r.PValue != nil && *r.PValue < level {
		r.add(Flag{Code: "chi_square", Severity: Warning, Message: fmt.Sprintf("Chi-square %.4g on %d degrees of freedom is improbable (p = %.2g): readings and anchors disagree by more than their uncertainties.", *r.ChiSquare, r.DegreesOfFreedom, *r.PValue), Advice: "Look for an anchor or reading that is off, a missing term, or uncertainties stated too small; they are not stretched here."})
	}
	if r.LackOfFit != nil && r.LackOfFit.PValue < level {
		r.add(Flag{Code: "lack_of_fit", Severity: Warning, Message: fmt.Sprintf("The anchors lie off the line by more than their readings scatter (F = %.3g, p = %.2g).", r.LackOfFit.F, r.LackOfFit.PValue), Advice: "Look at each anchor without the others, and at terms the model lacks."})
	}
	if c.in.model.estimated() {
		for _, v := range r.Variances {
			if v.DegreesOfFreedom < 4 {
				r.add(Flag{Code: "few_degrees_of_freedom", Severity: Warning, Message: fmt.Sprintf("The variance %s of the readings is estimated with %.2g degrees of freedom.", v.Name, v.DegreesOfFreedom), Advice: "Repeat anchors more often, or declare the readings' uncertainty from the method's history."})
				break
			}
		}
	}
	c.flagNeeds(r)
	slope := r.Parameters[c.reported.slope]
	if g := c.slopeRatio(slope.Value, slope.StandardUncertainty); g > 0.05 {
		r.add(Flag{Code: "weak_slope", Severity: Serious, Message: fmt.Sprintf("The slope is uncertain by %.2g of itself: values inverted from the line are unsafe.", slope.StandardUncertainty/math.Abs(slope.Value)), Advice: "Use anchors further apart, or more readings of them."})
	}
}

// flagNeeds: terms that the readings ask for and the model lacks.
func (c *calibrated) flagNeeds(r *Result) {
	names := map[string]string{"drift": "drifted with time", "size": "depend on the size of the peak", "memory": "depend on the reading before"}
	for _, n := range r.Needs {
		switch {
		case n.Model || n.PValue >= missingLevel:
		case n.Term == "drift.slope":
			r.add(Flag{Code: "slope_drift", Severity: Warning, Message: fmt.Sprintf("The slope changed with time (p = %.2g): low and high anchors drifted apart.", n.PValue), Advice: "Look for a cause; fit parts of the session on their own, or reject it."})
		default:
			r.add(Flag{Code: "term_missing", Severity: Note, Message: fmt.Sprintf("The raw deltas %s (p = %.2g), and the model has no term for it.", names[n.Term], n.PValue), Advice: "Fit with the " + n.Term + " term, and let the method say when it is used."})
		}
	}
}

// flagReadings: fitted readings off the line, readings left out for want of a
// predecessor.
func (c *calibrated) flagReadings(r *Result) {
	limit := c.in.policy.StudentizedLimit
	var off []int
	for k := range r.Readings {
		t := r.Readings[k].StandardizedResidual
		if c.in.model.estimated() {
			t = r.Readings[k].StudentizedResidual
		}
		if t != nil && math.Abs(*t) > limit {
			off = append(off, k)
		}
	}
	if len(off) > 0 {
		r.add(Flag{Code: "reading_disagrees", Severity: Warning, Readings: off, Message: fmt.Sprintf("%s further from the line than the others allow (residual beyond %.3g of its own standard uncertainty).", lies(len(off)), limit), Advice: "Look for a cause; exclude only with one."})
	}
	if len(c.in.withoutPrevious) > 0 {
		r.add(Flag{Code: "no_predecessor", Severity: Note, Readings: slices.Clone(c.in.withoutPrevious), Message: "Nothing is known of what came before: memory cannot be taken out, so it is left out of the fit and of the results.", Advice: "State the raw delta before it, or start sessions with conditioning readings."})
	}
	c.flagTimes(r)
	c.flagSizes(r)
	c.flagPreparations(r)
}

func lies(n int) string {
	if n == 1 {
		return "One reading lies"
	}
	return fmt.Sprintf("%d readings lie", n)
}

// flagTimes: samples and controls before the first or after the last reading
// that the drift rests on.
func (c *calibrated) flagTimes(r *Result) {
	low, high := math.Inf(1), math.Inf(-1)
	if c.time.kind == DriftBracketed {
		low, high = c.time.nodes[0], c.time.nodes[len(c.time.nodes)-1]
	} else {
		for _, i := range c.fitted {
			low, high = math.Min(low, c.in.readings[i].time), math.Max(high, c.in.readings[i].time)
		}
	}
	if math.IsNaN(low) || math.IsNaN(high) {
		return
	}
	readings := c.outside(low, high, func(rd *reading) float64 { return rd.time })
	if len(readings) > 0 {
		r.add(Flag{Code: "unbracketed", Severity: Warning, Readings: readings, Message: "Measured before the first or after the last anchor or monitor: drift there is not covered.", Advice: "Start and end every session with anchors or monitors."})
	}
}

// flagSizes: samples and controls outside the sizes of the fitted readings.
func (c *calibrated) flagSizes(r *Result) {
	low, high := math.Inf(1), math.Inf(-1)
	for _, i := range c.fitted {
		low, high = math.Min(low, c.in.readings[i].size), math.Max(high, c.in.readings[i].size)
	}
	if math.IsNaN(low) || math.IsNaN(high) {
		return
	}
	readings := c.outside(low, high, func(rd *reading) float64 { return rd.size })
	if len(readings) == 0 {
		return
	}
	f := Flag{Code: "size_range", Severity: Note, Readings: readings, Message: "The peak is smaller or larger than every fitted reading: the effect of size there is not tested.", Advice: "Repeat with an amount inside the range, or extend the range of the anchors or monitors."}
	if c.size.kind != SizeNone || c.in.model.weights() == WeightsSize {
		f.Severity = Warning
	}
	r.add(f)
}

// outside lists the samples' and controls' readings whose value lies outside.
func (c *calibrated) outside(low, high float64, value func(*reading) float64) []int {
	var out []int
	for i := range c.in.readings {
		rd := &c.in.readings[i]
		if v := value(rd); rd.usable && rd.class < 0 && (v < low || v > high) {
			out = append(out, rd.index)
		}
	}
	return out
}

// flagPreparations: estimated weights where only samples have several readings
// of one preparation, so that the preparations' variance is not known.
func (c *calibrated) flagPreparations(r *Result) {
	if !c.in.model.estimated() || c.nz.preparations {
		return
	}
	var readings []int
	for i := range c.in.readings {
		if rd := &c.in.readings[i]; rd.usable && rd.class < 0 && rd.shared {
			readings = append(readings, rd.index)
		}
	}
	if len(readings) > 0 {
		r.add(Flag{Code: "preparation_variance_unknown", Severity: Warning, Readings: readings, Message: "Several readings come from one preparation, but no anchor or monitor shows how preparations scatter: their uncertainty is that of independent readings.", Advice: "Read anchors as often from one preparation as samples, or give one mean reading for each preparation."})
	}
}

// span is the lowest and highest assigned value of the fitted anchors.
func (c *calibrated) span() (low, high float64) {
	low, high = math.Inf(1), math.Inf(-1)
	for _, l := range c.classes {
		if l.anchor >= 0 {
			v := c.in.anchors[c.anchors[l.anchor]].value
			low, high = math.Min(low, v), math.Max(high, v)
		}
	}
	return low, high
}

// flagSubject: extrapolation, replicates that scatter more than the fit
// allows, and the session's flags on its readings.
func (c *calibrated) flagSubject(r *Result, s *SubjectResult) {
	low, high := c.span()
	if d := math.Max(low-s.Value, s.Value-high); d > 0 && !c.ratio {
		f := Flag{Code: "extrapolation", Severity: Warning, Readings: slices.Clone(s.Readings), Subject: s.Subject, Message: fmt.Sprintf("%s lies %.3g ‰ beyond the anchors' span.", s.Subject, d), Advice: "Use an anchor beyond it."}
		if d <= s.Expanded.U {
			f.Severity = Note
		}
		r.add(f)
	}
	// A ratio below 1 is never beyond the 99 % quantile.
	if q, nu := c.replicateScatter(s); nu > 0 && q > nu {
		p := chiSquareP(q, nu)
		if c.variances != nil {
			p = fisherP(q/nu, nu, math.Max(1, c.variances.degreesOfFreedom(0)))
		}
		if p < 0.01 {
			r.add(Flag{Code: "replicate_scatter", Severity: Warning, Readings: slices.Clone(s.Readings), Subject: s.Subject, Message: fmt.Sprintf("The readings of %s scatter more than the session's do (ratio of variances %.3g, p = %.2g).", s.Subject, q/nu, p), Advice: "Look at its readings and its homogeneity; the uncertainty is not taken from this scatter."})
		}
	}
	for _, f := range r.Flags {
		if (f.Subject == s.Subject || f.Subject == "") && slices.ContainsFunc(f.Readings, func(i int) bool { return slices.Contains(s.Readings, i) }) && !slices.Contains(s.Flags, f.Code) {
			s.Flags = append(s.Flags, f.Code)
		}
	}
}

// replicateScatter is the chi-square of a subject's readings about their value,
// and its degrees of freedom; 0 for a single reading.
func (c *calibrated) replicateScatter(s *SubjectResult) (chi2, nu float64) {
	if math.IsNaN(s.scatter) || len(s.Readings) < 2 {
		return 0, 0
	}
	return s.scatter, float64(len(s.Readings) - 1)
}
