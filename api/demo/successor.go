package demo

import (
	"context"
	"fmt"
	"maps"
	"slices"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// laterSamples come to the museum in June, when the new standard is in use.
func laterSamples() []wantedSample {
	bone := map[string]float64{"d13C": 0.44, "d15N": 0.13}
	var list []wantedSample
	for i, near := range []map[string]float64{{scaleC: -19.8, scaleN: 9.6}, {scaleC: -17.1, scaleN: 11.9}} {
		list = append(list, wantedSample{museum, fmt.Sprintf("K%d", i+1), "bone collagen", near, bone, 2})
	}
	return list
}

// follow puts the new standard in its predecessor's place: a further version of
// the method, and a session whose line it holds.
func (b *builder) follow(ctx context.Context) error {
	b.clock.Until(at(time.June, 16, 9))
	method := b.methods[bulkCN]
	method.Procedure = "OV-P-12, issue 5"
	method.Quantities = slices.Clone(method.Quantities)
	for i := range method.Quantities {
		list := slices.Clone(method.Quantities[i].Roles)
		for j, r := range list {
			if r.Material == predecessor && r.Role == calib.Anchor {
				list[j].Material = successor
			}
		}
		method.Quantities[i].Roles = list
	}
	b.methods[bulkCN] = method
	m, err := b.reg.StateMethod(ctx, b.summary.Manager, bulkCN, method, registry.Edit{After: 1, Reason: successor + " follows " + predecessor + ", whose last jar is open"})
	if err != nil {
		return err
	}
	if err := b.decide(ctx, b.summary.Signatory, m.Ref, 0, "approved", "", "read against the procedure"); err != nil {
		return err
	}
	random := b.draw("later samples")
	samples := laterSamples()
	var bodies []store.Sample
	for _, s := range samples {
		bodies = append(bodies, store.Sample{Client: s.client, Label: s.label, Matrix: s.treatedAs(), Note: s.matrix, Wanted: wantedOf(s.near)})
	}
	b.minutes(20)
	items, err := b.reg.AddSamples(ctx, b.summary.Analyst, bodies)
	if err != nil {
		return err
	}
	for i, it := range items {
		s := samples[i]
		b.codes[[2]string{s.client, s.label}] = it.Code
		b.element[it.Code] = s.element
		b.summary.Samples[it.Code] = Sample{it.Code, s.client, s.label}
		for _, scale := range slices.Sorted(maps.Keys(s.near)) {
			b.summary.truth.set(it.Code, scale, s.near[scale]+0.2*random.NormFloat64())
		}
	}
	random = b.draw("solids of June")
	jars := routineJars("3")
	jars[successor] = "1"
	seats := b.element.solidsSession(b.seatsOf(samples), jars)
	for i, s := range seats {
		if s.subject == predecessor {
			in := b.element.seat(successor)
			in.unit = jar(successor, jars[successor])
			seats[i] = in
		}
	}
	if err := b.routine(ctx, runPlan{label: "solids of June", method: bulkCN, instrument: burner, started: at(time.June, 17, 17), day: combustionDay(random), seats: seats, random: random}); err != nil {
		return err
	}
	b.clock.Until(at(time.June, 19, 9))
	var finals []string
	for _, it := range items {
		for _, w := range it.Value.Wanted {
			b.minutes(2)
			f, err := b.reg.FinalValue(ctx, b.summary.Analyst, registry.FinalRequest{Sample: it.Code, Scale: w.Scale})
			if err != nil {
				return err
			}
			if err := b.decide(ctx, b.summary.Signatory, f.Ref, 0, "approved", "", "reviewed"); err != nil {
				return err
			}
			finals = append(finals, f.Code)
		}
	}
	b.minutes(30)
	r, err := b.reg.Issue(ctx, b.summary.Signatory, registry.ReportRequest{Client: museum, Title: "Stable isotopes, samples received in June 2025", Finals: finals})
	if err != nil {
		return err
	}
	b.summary.Reports = append(b.summary.Reports, r)
	b.summary.Campaign.Reported = r.Lines[0].Code
	return nil
}
