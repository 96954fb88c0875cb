package registry

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"deltamoor/calib/assign"
	"deltamoor/store"
)

// partStudy is the part that a stated study plays in the value of its campaign.
const partStudy = "study"

// The studies of a lot.
const (
	OfHomogeneity = "homogeneity"
	OfStability   = "stability"
)

// MaxStudy bounds the measurements of one study.
const MaxStudy = 5000

// A StudyRequest brings the measurements of a study that were not made in
// sessions of the registry.
type StudyRequest struct {
	Scale, Measurand string
	Of               string // homogeneity stability
	Isochronous      bool
	Measurements     []store.StudyMeasurement
	// Place tells where a field of a measurement stands in the sender's own words.
	Place func(i int, field string) string
	// The file it came as, if any.
	Name, MediaType string
	Bytes           []byte
}

// StudyCode is the code of the record of a campaign's study.
func StudyCode(assignment, scale, measurand, of string) string {
	return assignment + "/" + scale + "/" + nameOr(measurand, Total) + "/" + of
}

// StateStudy states the measurements of homogeneity or stability of an approved
// campaign, whole: a further version replaces what was stated before, with a
// reason. They then are the study; portions in the campaign's own sessions are not.
func (r *Registry) StateStudy(ctx context.Context, actor Actor, assignment string, q StudyRequest, e Edit) (Item[store.Study], error) {
	var out Item[store.Study]
	var c complaints
	c.oneOf("body.of", q.Of, OfHomogeneity, OfStability)
	if n := len(q.Measurements); n < 3 || n > MaxStudy {
		c.add("body.measurements", fmt.Sprint(n), "3 to %d measurements", MaxStudy)
	}
	for i, m := range q.Measurements {
		checkMeasurement(&c, q, i, m)
	}
	if err := Complain("this study cannot be stated; nothing was stored", c); err != nil {
		return out, err
	}
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindStudy}
	err := r.write(ctx, actor, MayImport, func(ctx context.Context, tx *store.Tx) error {
		plan, state, err := tx.InForce(ctx, store.Key{Laboratory: actor.Laboratory, Kind: store.KindAssignment, Code: assignment}, store.Moment{})
		if errors.Is(err, store.ErrNotFound) {
			if _, err := newest[store.Assignment](ctx, &tx.View, store.Key{Laboratory: actor.Laboratory, Kind: store.KindAssignment, Code: assignment}); err != nil {
				return err
			}
			return Refuse(Conflict, "the plan of campaign %s is not approved: a plan is fixed before the data", store.FormatCode(assignment))
		}
		if err != nil {
			return err
		}
		if state == store.Withdrawn {
			return Refuse(Conflict, "the plan %s is withdrawn", versionName(plan.Ref))
		}
		body, err := store.Decode[store.Assignment](plan)
		if err != nil {
			return err
		}
		planned, err := quantityOf(body.Value, q.Scale, q.Measurand)
		if err != nil {
			return err
		}
		study := store.Study{Assignment: assignment, Scale: planned.Scale, Measurand: planned.Measurand, Of: q.Of, Isochronous: q.Isochronous, Measurements: q.Measurements}
		if not := map[string]string{OfHomogeneity: planned.Homogeneity.NotNeeded, OfStability: planned.Stability.NotNeeded}[q.Of]; not != "" {
			return Refuse(Conflict, "the plan says that no study of %s is needed: %s", q.Of, not)
		}
		if len(q.Bytes) > 0 {
			hash, _, err := tx.PutUpload(ctx, q.Name, q.MediaType, q.Bytes)
			if err != nil {
				return err
			}
			study.Upload = &hash
		}
		key.Code = StudyCode(assignment, study.Scale, study.Measurand, study.Of)
		_, err = appendVersion(ctx, tx, actor, key, e, []store.Input{{Part: partCampaign, Ref: plan.Ref}}, study)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Study](ctx, r, actor, store.KindStudy, key.Code)
}

func checkMeasurement(c *complaints, q StudyRequest, i int, m store.StudyMeasurement) {
	place := func(field string) string { return q.Place(i, field) }
	finite := func(field string, x, least float64) {
		if math.IsNaN(x) || math.IsInf(x, 0) || x < least {
			c.add(place(field), fmt.Sprint(x), "a number%s", map[bool]string{true: " of 0 or more"}[least == 0])
		}
	}
	if strings.TrimSpace(m.Unit) == "" && q.Of == OfHomogeneity {
		c.add(place("unit"), "nothing", "the unit that the portion came from")
	}
	finite("value", m.Value, math.Inf(-1))
	finite("portion_mg", m.Portion, 0)
	finite("days", m.Days, 0)
	finite("order", m.Order, 0)
}

// Studies lists the studies that were stated for a campaign, newest versions.
func (r *Registry) Studies(ctx context.Context, actor Actor, assignment string) ([]Item[store.Study], error) {
	var out []Item[store.Study]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		plan, err := newest[store.Assignment](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindAssignment, Code: assignment})
		if err != nil {
			return err
		}
		for _, q := range plan.Value.Quantities {
			for _, of := range []string{OfHomogeneity, OfStability} {
				it, err := newest[store.Study](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindStudy, Code: StudyCode(assignment, q.Scale, q.Measurand, of)})
				if ignoreNotFound(err) != nil {
					return err
				}
				if err == nil {
					out = append(out, it)
				}
			}
		}
		return nil
	})
	return out, err
}

// loadStudies finds the studies that were stated for the value.
func (g *gathered) loadStudies(ctx context.Context, v *store.View, laboratory string) error {
	for _, of := range []string{OfHomogeneity, OfStability} {
		s, err := newest[store.Study](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindStudy, Code: StudyCode(g.data.plan.Code, g.data.quantity.Scale, g.data.quantity.Measurand, of)})
		if ignoreNotFound(err) != nil {
			return err
		}
		if err == nil {
			g.data.studies[of] = s.Version
			g.studyRefs = append(g.studyRefs, store.Input{Part: partStudy, Ref: s.Ref})
		}
	}
	return nil
}

// homogeneity is the study of the units: the one that was stated, else that of
// the units which the readings name. Readings without a unit tell nothing about
// units and are left out of it.
func (d campaignData) homogeneity(ws []witness) (*assign.Homogeneity, error) {
	study := assign.HomogeneityStudy{Group: "homogeneity:" + d.plan.Value.Material + "/" + d.plan.Code, Level: d.quantity.Level}
	at := map[string]int{}
	add := func(unit string, order float64, m assign.Measurement) {
		i, ok := at[unit]
		if !ok {
			i = len(study.Units)
			at[unit] = i
			u := assign.Unit{Code: unit}
			if order > 0 {
				u.FillingOrder = &order
			}
			study.Units = append(study.Units, u)
		}
		study.Units[i].Measurements = append(study.Units[i].Measurements, m)
	}
	if s, ok := d.studies[OfHomogeneity]; ok {
		for _, m := range s.Value.Measurements {
			add(m.Unit, m.Order, assign.Measurement{Value: m.Value, Session: m.Session, Portion: m.Portion})
		}
		return assign.AnalyseHomogeneity(study)
	}
	for _, w := range ws {
		for _, p := range w.portions {
			if p.unit != "" {
				add(p.unit, float64(d.units[p.unit].FillingOrder), assign.Measurement{Value: p.value, Session: w.session(), Portion: p.mass})
			}
		}
	}
	return assign.AnalyseHomogeneity(study)
}

// isochronous tells whether units stored for different times were measured together.
func (d campaignData) isochronous() bool {
	if s, ok := d.studies[OfStability]; ok {
		return s.Value.Isochronous
	}
	return d.quantity.Stability.Isochronous
}

// stability is the study over time, with the days it spans: the one that was
// stated; else the portions of the units that the plan stored for known times,
// sessions as blocks; else the sessions' results over time, in days from the
// first, each one point, so that what differs between sessions is in the scatter
// about the line. Nil where it has too few points yet and the plan has a prior
// uncertainty for the while.
func (d campaignData) stability(ws []witness) (*assign.Stability, float64, error) {
	q := d.quantity.Stability
	study := assign.StabilityStudy{Group: "stability:" + d.plan.Value.Material + "/" + d.plan.Code, ShelfLife: q.ShelfLifeDays, Level: d.quantity.Level, Isochronous: d.isochronous()}
	stated, isStated := d.studies[OfStability]
	switch {
	case isStated:
		for _, m := range stated.Value.Measurements {
			study.Points = append(study.Points, assign.StabilityPoint{Time: m.Days, Value: m.Value, Session: m.Session})
		}
	case len(q.Stored) > 0:
		for _, w := range ws {
			for _, p := range w.portions {
				if i := slices.IndexFunc(q.Stored, func(s store.StoredUnit) bool { return s.Unit == p.unit }); i >= 0 {
					study.Points = append(study.Points, assign.StabilityPoint{Time: q.Stored[i].Days, Value: p.value, Session: w.session()})
				}
			}
		}
	default:
		first := store.Instant(math.MaxInt64)
		for _, w := range ws {
			if at := w.calibration.Value.StartedAt; at != nil {
				first = min(first, *at)
			}
		}
		for _, w := range ws {
			if at := w.calibration.Value.StartedAt; at != nil {
				study.Points = append(study.Points, assign.StabilityPoint{Time: daysBetween(first, *at), Value: w.number.Value})
			}
		}
	}
	span := 0.0
	if len(study.Points) > 0 {
		byTime := func(a, b assign.StabilityPoint) int { return cmp.Compare(a.Time, b.Time) }
		span = slices.MaxFunc(study.Points, byTime).Time - slices.MinFunc(study.Points, byTime).Time
	}
	s, err := assign.AnalyseStability(study)
	var input *assign.InputError
	if q.Prior != nil && errors.As(err, &input) && input.Place == "points" {
		return nil, span, nil
	}
	return s, span, err
}

// prior is the uncertainty of stability that the plan takes over until the
// study spans the last of the planned days; nil once it does.
func (d campaignData) prior(span float64) (*assign.PriorStability, *store.PriorStability) {
	q := d.quantity.Stability
	if q.Prior == nil {
		return nil, nil
	}
	planned := 0.0
	for _, day := range q.Days {
		planned = max(planned, day)
	}
	for _, s := range q.Stored {
		planned = max(planned, s.Days)
	}
	if span > 0 && span >= planned {
		return nil, nil
	}
	p := &assign.PriorStability{StandardUncertainty: q.Prior.StandardUncertainty, ShelfLife: q.ShelfLifeDays, Group: "stability:" + d.plan.Value.Material + "/" + d.plan.Code + "/prior"}
	if nu := q.Prior.DegreesOfFreedom; nu != nil {
		p.DegreesOfFreedom = *nu
	}
	return p, &store.PriorStability{StandardUncertainty: q.Prior.StandardUncertainty, DegreesOfFreedom: q.Prior.DegreesOfFreedom, Evidence: q.Prior.Evidence, SpanDays: span, PlannedDays: planned}
}
