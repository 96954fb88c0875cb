package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"
	"time"

	"deltamoor/calib"
	"deltamoor/store"
)

// CorrectionStates say where a correction was made; "not said" cannot be approved.
var CorrectionStates = []string{"earlier", "here", "not applicable", "not said"}

var (
	driftWords   = []string{"", string(calib.DriftNone), string(calib.DriftLinear), string(calib.DriftQuadratic), string(calib.DriftBracketed)}
	sizeWords    = []string{"", string(calib.SizeNone), string(calib.SizeLinear), string(calib.SizeInverse), string(calib.SizeLog), string(calib.SizeBlank)}
	memoryWords  = []string{"", string(calib.MemoryNone), string(calib.MemoryCarryover)}
	weightsWords = []string{"", string(calib.WeightsDeclared), string(calib.WeightsEqual), string(calib.WeightsReplicate), string(calib.WeightsSize)}
)

// StateMethod states a version of a measurement procedure: a draft, to be approved by a decision.
func (r *Registry) StateMethod(ctx context.Context, actor Actor, code string, m store.Method, e Edit) (Item[store.Method], error) {
	var out Item[store.Method]
	c := checkMethod(code, m)
	if err := Complain("this method cannot be stated", c); err != nil {
		return out, err
	}
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindMethod, Code: code}
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		var inputs []store.Input
		var c complaints
		for i, q := range m.Quantities {
			scale, err := lookup(ctx, &tx.View, actor.Laboratory, store.KindScale, q.Scale, 0, store.Moment{})
			if err != nil {
				if ignoreNotFound(err) != nil {
					return err
				}
				c.add(fmt.Sprintf("body.quantities[%d].scale", i), quote(q.Scale), "the name of a scale, such as d13C-VPDB-LSVEC")
				continue
			}
			body, err := store.Decode[store.Scale](scale)
			if err != nil {
				return err
			}
			if body.Value.Quantity != q.Quantity {
				c.add(fmt.Sprintf("body.quantities[%d].scale", i), quote(q.Scale), "a scale of %s", q.Quantity)
			}
			inputs = append(inputs, store.Input{Part: "scale", Ref: scale.Ref})
			for j, role := range q.Roles {
				if _, err := findMaterial(ctx, &tx.View, actor.Laboratory, role.Material); err != nil {
					if ignoreNotFound(err) != nil {
						return err
					}
					c.add(fmt.Sprintf("body.quantities[%d].roles[%d].material", i, j), quote(role.Material), "a registered material")
				}
			}
		}
		if err := Complain("this method cannot be stated", c); err != nil {
			return err
		}
		_, err := appendVersion(ctx, tx, actor, key, e, inputs, m)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Method](ctx, r, actor, store.KindMethod, code)
}

func checkMethod(code string, m store.Method) complaints {
	var c complaints
	c.code("body.code", code)
	c.text("body.title", m.Title, 200)
	if len(m.Quantities) == 0 {
		c.add("body.quantities", "nothing", "at least one quantity with its scale and model")
	}
	seen := map[string]int{}
	for i, q := range m.Quantities {
		place := fmt.Sprintf("body.quantities[%d]", i)
		if !quantityPattern.MatchString(q.Quantity) {
			c.add(place+".quantity", quote(q.Quantity), "a quantity such as d13C")
		}
		if before, ok := seen[q.Quantity+"/"+measurandOf(q)]; ok {
			c.add(place+".quantity", quote(q.Quantity), "each quantity and measurand once; body.quantities[%d] has it already, and one fit never holds two scales", before)
		}
		seen[q.Quantity+"/"+measurandOf(q)] = i
		c.oneOf(place+".model.drift", string(q.Model.Drift), driftWords...)
		c.oneOf(place+".model.size", string(q.Model.Size), sizeWords...)
		c.oneOf(place+".model.memory", string(q.Model.Memory), memoryWords...)
		c.oneOf(place+".model.weights", string(q.Model.Weights), weightsWords...)
		if p := q.Limits.Probability; p != 0 && !(p > 0.5 && p < 1) {
			c.add(place+".limits.probability", fmt.Sprint(p), "a probability between 0.5 and 1")
		}
		for name, x := range map[string]float64{"k": q.Limits.CoverageFactor, "left_out_z": q.Limits.LeftOut, "studentized": q.Limits.Studentized,
			"minimum_span": q.Limits.MinimumSpan, "advised_span": q.Limits.AdvisedSpan, "control_deviation": q.Limits.ControlDeviation, "replicate_sd": q.Limits.ReplicateSD,
			"minimum_resolution": q.Limits.MinimumResolution, "history_limit": q.Limits.HistoryLimit} {
			if !(x >= 0 && x < 1e6) {
				c.add(place+".limits."+name, fmt.Sprint(x), "a limit of 0 or more")
			}
		}
		checkJudgementLimits(&c, place+".limits", q.Limits)
		if b := q.BetweenSession; b != nil && !(b.StandardUncertainty >= 0 && b.StandardUncertainty < 1e6) {
			c.add(place+".between_session.u", fmt.Sprint(b.StandardUncertainty), "a standard uncertainty of 0 or more")
		}
		if h := q.SampleHomogeneity; h != nil {
			if !(h.StandardUncertainty >= 0 && h.StandardUncertainty < 1e6) {
				c.add(place+".sample_homogeneity.u", fmt.Sprint(h.StandardUncertainty), "a standard uncertainty of 0 or more")
			}
			if h.Common {
				c.add(place+".sample_homogeneity.common", "true", "nothing: it is each sample's own")
			}
		}
		for j, role := range q.Roles {
			c.oneOf(fmt.Sprintf("%s.roles[%d].role", place, j), string(role.Role), roleWords...)
		}
	}
	checkCorrections(&c, m.Corrections)
	checkBeforeFit(&c, m)
	if m.Approval.Role != "" {
		c.oneOf("body.approval.role", m.Approval.Role, Signatory, Manager)
	}
	if m.Final.SessionsRequired < 0 || m.Final.SessionsRequired > 50 {
		c.add("body.final.sessions_required", fmt.Sprint(m.Final.SessionsRequired), "0 to 50 sessions")
	}
	if m.Mapping != nil {
		checkMapping(&c, m)
	}
	slices.SortStableFunc(c, func(a, b Complaint) int { return strings.Compare(a.Place, b.Place) })
	return c
}

func measurandOf(q store.MethodQuantity) string {
	if q.Measurand == "" {
		return Total
	}
	return q.Measurand
}

func checkCorrections(c *complaints, list []store.Correction) {
	for i, k := range list {
		c.text(fmt.Sprintf("body.corrections[%d].name", i), k.Name, 40)
		c.oneOf(fmt.Sprintf("body.corrections[%d].state", i), k.State, CorrectionStates...)
	}
}

// checkBeforeFit holds what a method does to readings before the fit against
// its model and its files.
func checkBeforeFit(c *complaints, m store.Method) {
	for i, q := range m.Quantities {
		place := fmt.Sprintf("body.quantities[%d]", i)
		if h := q.H3; h != nil {
			c.oneOf(place+".h3.ratio_unit", h.RatioUnit, RatioUnits...)
			c.oneOf(place+".h3.intensity_unit", h.IntensityUnit, IntensityUnits...)
			c.oneOf(place+".h3.shape", h.Shape, PeakShapes...)
			if q.Quantity != "d2H" {
				c.add(place+".h3", "a rule for "+q.Quantity, "none: H3+ forms of hydrogen alone")
			}
			for name, x := range map[string]float64{"maximum_age_hours": h.MaximumAgeHours, "maximum_change": h.MaximumChange, "step_z": h.StepZ} {
				if !(x >= 0 && x < 1e6) {
					c.add(place+".h3."+name, fmt.Sprint(x), "a limit of 0 or more")
				}
			}
		}
		if b := q.Blank; b != nil {
			c.oneOf(place+".blank.from", b.From, "readings", "stated")
			if q.Model.Size == calib.SizeBlank {
				c.add(place+".blank", "a blank taken out before the fit, beside the size term blank", "one of the two: together they would take it out twice")
			}
			for name, x := range map[string]float64{"size": b.Size, "u_size": b.USize, "u_raw": b.URaw} {
				if !(x >= 0 && x < 1e9) {
					c.add(place+".blank."+name, fmt.Sprint(x), "a number of 0 or more")
				}
			}
			if b.From == "stated" {
				c.text(place+".blank.evidence", b.Evidence, 2000)
			}
			if nu := b.DegreesOfFreedom; nu != nil && !(*nu >= 1) {
				c.add(place+".blank.nu", fmt.Sprint(*nu), "degrees of freedom of 1 or more")
			}
		}
		if k := q.Repeats; k != nil {
			c.oneOf(place+".repeats.within", k.Within, "analysis", "preparation", "position")
			if k.IgnoreFirst < 0 || k.IgnoreFirst > 1000 {
				c.add(place+".repeats.ignore_first", fmt.Sprint(k.IgnoreFirst), "0 to 1000 readings")
			}
			if k.Average && q.Model.Memory == calib.MemoryCarryover {
				c.add(place+".repeats.average", "true, beside a term for carry-over", "one of the two: carry-over acts from one reading to the next")
			}
		}
		for _, k := range m.Corrections {
			if k.Name == "h3" && k.State == "here" && q.Quantity == "d2H" && (k.Quantity == "" || k.Quantity == "d2H") && q.H3 == nil {
				c.add(place+".h3", "nothing", "what the intensities in the files are, since the H3 correction is declared as made here")
			}
			if k.Name == "blank" && k.State == "here" && (k.Quantity == "" || k.Quantity == q.Quantity) && q.Blank == nil && q.Model.Size != calib.SizeBlank {
				c.add(place+".blank", "nothing", "how the blank is known, or the size term blank, since the blank correction is declared as made here")
			}
		}
	}
}

func checkMapping(c *complaints, m store.Method) {
	mapping := *m.Mapping
	c.oneOf("body.import.format", mapping.Format, "", "csv", "tsv", "xlsx")
	c.oneOf("body.import.encoding", mapping.Encoding, "", "utf-8", "utf-16le", "utf-16be", "windows-1252", "iso-8859-1")
	c.oneOf("body.import.decimal", mapping.Decimal, "", ".", ",")
	c.oneOf("body.import.columns.amount_unit", mapping.Columns.AmountUnit, "", "mg", "ug", "g")
	if len([]rune(mapping.Delimiter)) > 1 {
		c.add("body.import.delimiter", quote(mapping.Delimiter), "one character")
	}
	if mapping.Delimiter != "" && mapping.Delimiter == mapping.Decimal {
		c.add("body.import.delimiter", quote(mapping.Delimiter), "another character than the decimal sign")
	}
	if mapping.Zone != "" {
		if _, err := time.LoadLocation(mapping.Zone); err != nil {
			c.add("body.import.zone", quote(mapping.Zone), "an IANA time zone such as Europe/Lisbon")
		}
	}
	c.text("body.import.columns.name", mapping.Columns.Name, 200)
	if len(mapping.Quantities) == 0 {
		c.add("body.import.quantities", "nothing", "at least one quantity with its column of raw deltas")
	}
	for i, q := range mapping.Quantities {
		if !slices.ContainsFunc(m.Quantities, func(mq store.MethodQuantity) bool { return mq.Quantity == q.Quantity }) {
			c.add(fmt.Sprintf("body.import.quantities[%d].quantity", i), quote(q.Quantity), "a quantity of this method")
		}
		c.text(fmt.Sprintf("body.import.quantities[%d].raw", i), q.Raw, 200)
	}
	if mapping.Columns.Width != "" {
		c.oneOf("body.import.width_by", mapping.WidthBy, "base", "half-height")
	}
	for word, role := range mapping.RoleWords {
		c.oneOf("body.import.role_words."+word, string(role), roleWords...)
	}
}

// method reads a method version in force: approved, and newest of those.
func methodInForce(ctx context.Context, v *store.View, laboratory, code string, m store.Moment) (store.Version[store.Method], error) {
	key := store.Key{Laboratory: laboratory, Kind: store.KindMethod, Code: code}
	raw, state, err := v.InForce(ctx, key, m)
	if err != nil {
		if ignoreNotFound(err) == nil {
			if _, newest := v.Newest(ctx, key); newest == nil {
				return store.Version[store.Method]{}, Refuse(Conflict, "method %s has no approved version yet", code)
			}
		}
		return store.Version[store.Method]{}, missing(err, key)
	}
	if state == store.Withdrawn {
		return store.Version[store.Method]{}, Refuse(Conflict, "method %s is withdrawn", code)
	}
	return store.Decode[store.Method](raw)
}
