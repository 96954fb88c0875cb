package demo

import (
	"context"
	"fmt"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// The campaign gives the successor of the maize protein its values: four jars
// drawn from the lot, the predecessor beside them, three sessions.
const (
	successor   = "OV-SORGHUM"
	predecessor = "OV-MAIZE"
)

// A Campaign is the value-assignment campaign that the laboratory ran.
type Campaign struct {
	Assignment            string
	Material, Predecessor string
	Sessions              []Session
	// Values are the drawn up and approved values, by scale.
	Values map[string]registry.Item[store.Value]
	// Reported is the code of a delta whose line the new standard holds.
	Reported string
}

// campaign plans, measures, concludes and approves.
func (b *builder) campaign(ctx context.Context) error {
	b.clock.Until(at(time.May, 5, 9))
	near := map[string]float64{scaleC: -12.4, scaleN: 3.6}
	random := b.draw("campaign truth")
	for _, scale := range []string{scaleC, scaleN} {
		b.summary.truth.set(successor, scale, near[scale]+0.15*random.NormFloat64())
	}
	b.element[successor] = map[string]float64{"d13C": 0.51, "d15N": 0.118}
	if _, err := b.reg.StateMaterial(ctx, b.summary.Manager, successor, store.Material{Name: "sorghum protein", Kind: "working", Substance: "gluten", Matrix: "organic solid", Producer: labName,
		Lot: "2025-1", Storage: "closed jar over drying agent, dark, 15 to 25 °C", Minimum: &store.Amount{Value: "0.4", Unit: "mg"}, Succeeds: predecessor,
		Stock: &store.StockRule{MaximumAgeDays: 1825, RecheckDays: 365, Portion: &store.Amount{Value: "0.6", Unit: "mg"}, LeadDays: 180}}, registry.Edit{}); err != nil {
		return err
	}
	units, err := b.reg.AddUnits(ctx, b.summary.Manager, store.Unit{Material: successor, Label: successor + " jar", Container: "bottle", Content: &store.Amount{Value: "25", Unit: "g"}}, 4)
	if err != nil {
		return err
	}
	var jars []string
	for _, u := range units {
		b.units[u.Value.Label] = u.Code
		jars = append(jars, u.Code)
	}
	plan := store.Assignment{Title: "values of the successor of " + predecessor, Material: successor, Methods: []string{valueCN}, Instruments: []string{burner},
		Sessions: 3, Days: 3, Replicates: 8, Units: jars, Note: "jars drawn at random over the filling order"}
	for _, q := range []struct {
		scale                         string
		anchors                       []string
		value, repeatability, between float64
	}{{scaleC, []string{"IAEA-CH-7", "IAEA-CH-6", "USGS41"}, near[scaleC], 0.05, betweenC}, {scaleN, []string{"IAEA-N-1", "USGS32"}, near[scaleN], 0.09, betweenN}} {
		plan.Quantities = append(plan.Quantities, store.AssignmentQuantity{Scale: q.scale, Anchors: q.anchors,
			Planning:    store.PlanningValues{Value: q.value, Repeatability: q.repeatability, BetweenSession: q.between, AnchorReplicates: 4},
			Homogeneity: store.StudyPlan{Units: 4, Measurements: 6}, Stability: store.StudyPlan{NotNeeded: "dry protein of this kind has not moved in the laboratory's controls for ten years"},
			Acceptance: store.AssignmentLimits{SessionEffect: 3}})
	}
	p, err := b.reg.PlanAssignment(ctx, b.summary.Manager, "", plan, registry.Edit{})
	if err != nil {
		return err
	}
	if err := b.decide(ctx, b.summary.Signatory, p.Ref, 0, "approved", "", "plan reviewed before the data"); err != nil {
		return err
	}
	c := Campaign{Assignment: p.Code, Material: successor, Predecessor: predecessor, Values: map[string]registry.Item[store.Value]{}}
	for i, day := range []int{7, 13, 20} {
		random := b.draw(fmt.Sprintf("campaign %d", i+1))
		session, _, _, err := b.measure(ctx, runPlan{label: fmt.Sprintf("sorghum campaign, %d of 3", i+1), method: valueCN, instrument: burner,
			started: at(time.May, day, 17), day: combustionDay(random), seats: b.element.campaignSession(), random: random})
		if err != nil {
			return err
		}
		for _, q := range b.methods[valueCN].Quantities {
			fitted, err := b.fit(ctx, &session, q.Quantity, "")
			if err != nil {
				return err
			}
			if err := b.accept(ctx, session, fitted); err != nil {
				return err
			}
		}
		c.Sessions = append(c.Sessions, session)
	}
	b.clock.Until(at(time.May, 23, 9))
	for _, scale := range []string{scaleC, scaleN} {
		b.minutes(20)
		v, err := b.reg.ConcludeAssignment(ctx, b.summary.Manager, p.Code, registry.ConcludeRequest{Scale: scale, Note: "campaign of May",
			// Five comparisons in a hundred show a step where there is none; what then holds is decided.
			StepDecision: "both values stand; the predecessor is measured again in its next session"}, registry.Edit{ValidFrom: instant(at(time.May, 24, 0))})
		if err != nil {
			return fmt.Errorf("value of %s on %s: %w", successor, scale, err)
		}
		if err := b.decide(ctx, b.summary.Signatory, v.Ref, 0, "approved", "", "sessions, studies and budget reviewed"); err != nil {
			return err
		}
		c.Values[scale] = v
	}
	b.clock.Until(at(time.May, 26, 9))
	b.summary.Campaign = c
	b.summary.Sessions = append(b.summary.Sessions, c.Sessions...)
	return nil
}

// campaignSession seats the successor's jars in turn and the predecessor
// between rounds of international materials.
func (e elements) campaignSession() []seat {
	seats := e.warmUp()
	put := func(unit func(string) string, codes ...string) {
		for _, code := range codes {
			s := e.seat(code)
			s.unit = unit(code)
			seats = append(seats, s)
		}
	}
	vial := func(code string) string { return code + " vial" }
	own := func(number string) func(string) string {
		return func(code string) string { return jar(code, number) }
	}
	block := []string{"IAEA-CH-7", "IAEA-N-1", "USGS41", "USGS32", "IAEA-CH-6", "IAEA-N-1"}
	put(vial, "USGS32")
	for range 3 {
		put(vial, block...)
		for _, number := range []string{"1", "2", "3", "4"} {
			put(own(number), successor)
		}
		put(own("1"), predecessor)
		for _, number := range []string{"4", "3", "2", "1"} {
			put(own(number), successor)
		}
		put(own("1"), predecessor)
		put(vial, "IAEA-600")
	}
	put(vial, block...)
	put(vial, "USGS32")
	return seats
}
