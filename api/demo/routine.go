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

// The jar that went bad took up something from a spatula; both isotopes show it.
var jarOffset = map[string]float64{"d13C": 0.24, "d15N": -0.45}

// peakOffset is what an incomplete combustion did to one nitrogen peak: carbon
// monoxide stands under it on the same mass.
const (
	peakOffset = 3.5
	peakLabel  = "B2"
)

// measureSolids runs two sessions of clients' solids. In the first a jar of an
// anchor has gone bad and one nitrogen peak is wrong; a few samples run again
// in the second.
func (b *builder) measureSolids(ctx context.Context) error {
	var first, second []wantedSample
	for _, s := range samplesToCome() {
		switch {
		case s.near[scaleC] == 0:
		case s.client == growers || s.label == sameName:
			first = append(first, s)
			if again[s.label] {
				second = append(second, s)
			}
		default:
			second = append(second, s)
			if again[s.label] {
				first = append(first, s)
			}
		}
	}
	if err := b.firstSolids(ctx, first); err != nil {
		return err
	}
	random := b.draw("solids 2")
	jars := routineJars("3")
	return b.routine(ctx, runPlan{label: "solids of April, 2", method: bulkCN, instrument: burner, started: at(time.April, 16, 17),
		day: combustionDay(random), seats: b.element.solidsSession(b.seatsOf(second), jars), random: random})
}

// routineJars are the jars in use, with the one of the anchor that goes bad.
func routineJars(bad string) map[string]string {
	jars := map[string]string{controlSolid: "2"}
	for _, code := range solidAnchors() {
		jars[code] = "1"
	}
	jars[badMaterial] = bad
	return jars
}

func (b *builder) firstSolids(ctx context.Context, samples []wantedSample) error {
	random := b.draw("solids 1")
	jars := routineJars("2")
	seats := b.element.solidsSession(b.seatsOf(samples), jars)
	wrong := b.codes[[2]string{growers, peakLabel}]
	done := false
	for i := range seats {
		if seats[i].unit == badJar {
			seats[i].offset = jarOffset
		}
		if seats[i].subject == wrong && !done {
			done = true
			seats[i].offset = map[string]float64{"d15N": peakOffset}
			seats[i].remark = "N2: queue large" // a broad tail, as the instrument says it
		}
	}
	names := map[string]string{}
	for _, code := range b.summary.SameLabel.Samples {
		names[code] = sameName
	}
	session, readings, refusal, err := b.measure(ctx, runPlan{label: "solids of April, 1", method: bulkCN, instrument: burner,
		started: at(time.April, 14, 17), day: combustionDay(random), seats: seats, random: random, refusedWith: names})
	if err != nil {
		return err
	}
	b.summary.SameLabel.Refusal = refusal

	b.summary.Jar = BadJar{Material: badMaterial, Label: badJar, Session: session.Code, Offset: jarOffset, Before: map[string][]calib.Flag{}, After: map[string][]calib.Flag{}, LeftOut: map[string]map[string]float64{}}
	b.summary.Peak = BadPeak{Sample: wrong, Session: session.Code, Offset: peakOffset}
	for i, rd := range readings {
		switch {
		case rd.Material == badMaterial:
			b.summary.Jar.Readings = append(b.summary.Jar.Readings, rd.Number)
			b.summary.Jar.Unit = rd.Unit
		case rd.Sample == wrong && rd.Quantity == "d15N" && b.summary.Peak.Reading == 0:
			b.summary.Peak.Reading, b.summary.Peak.CarbonReading = rd.Number, readings[i+1].Number
		}
	}
	quantities := []string{"d13C", "d15N"}
	for _, q := range quantities {
		c, err := b.fit(ctx, &session, q, "")
		if err != nil {
			return err
		}
		b.summary.Jar.Before[q] = c.Value.Flags
		b.summary.Jar.LeftOut[q] = map[string]float64{}
		for _, a := range c.Value.Anchors {
			if a.LeftOut != nil {
				b.summary.Jar.LeftOut[q][a.Material] = a.LeftOut.Z
			}
		}
	}
	if err := b.exclude(ctx, session.Code, 0, "contamination",
		"jar 2 reads away from the other anchors in carbon and in nitrogen; lumps and a foreign smell when it was opened again", b.summary.Jar.Readings); err != nil {
		return err
	}
	if err := b.exclude(ctx, session.Code, 1, "overlap",
		"nitrogen peak with a broad tail: carbon monoxide of an incomplete combustion under it; the carbon peak is whole", []int{b.summary.Peak.Reading}); err != nil {
		return err
	}
	for _, q := range quantities {
		c, err := b.fit(ctx, &session, q, "without jar 2 of "+badMaterial+"; see the exclusions of the session")
		if err != nil {
			return err
		}
		b.summary.Jar.After[q] = c.Value.Flags
		if err := b.accept(ctx, session, c); err != nil {
			return err
		}
	}
	b.summary.Sessions = append(b.summary.Sessions, session)
	b.minutes(20)
	_, err = b.reg.ChangeUnit(ctx, b.summary.Manager, b.summary.Jar.Unit, "quarantined", "", nil, registry.Edit{Reason: "disagreed in session " + store.FormatCode(session.Code)})
	return err
}

// measureWaters runs the clients' waters twice: a leak spoils the first
// session, which is rejected and stays.
func (b *builder) measureWaters(ctx context.Context) error {
	var samples []seat
	for _, s := range samplesToCome() {
		if s.near[scaleH] != 0 {
			for range s.portions {
				samples = append(samples, b.sampleSeat(s))
			}
		}
	}
	random := b.draw("waters 1")
	// Room air in the furnace mixes with every sample: the line gets flat and noisy.
	leaking := conversionDay(random)
	leaking.channels[0].stretch *= 0.78
	leaking.channels[0].noise *= 3
	session, _, _, err := b.measure(ctx, runPlan{label: "waters of April, 1", method: water, instrument: cracker, started: at(time.April, 22, 17),
		day: leaking, seats: b.element.watersSession(samples, "2"), random: random})
	if err != nil {
		return err
	}
	c, err := b.fit(ctx, &session, "d2H", "")
	if err != nil {
		return err
	}
	b.summary.Rejected = Rejection{Session: session.Code, Flags: c.Value.Flags}
	b.minutes(25)
	if _, err := b.reg.StateOutcome(ctx, b.summary.Analyst, session.Code, store.Outcome{Quantity: "d2H", Outcome: "rejected", Cause: "leak"},
		registry.Edit{Reason: "slope far below the furnace's history and noise three times the usual; the lower seal leaked"}); err != nil {
		return err
	}
	if err := b.decide(ctx, b.summary.Signatory, c.Ref, 0, "declined", "the session is rejected", "reviewed"); err != nil {
		return err
	}
	session.Rejected = true
	b.summary.Sessions = append(b.summary.Sessions, session)

	random = b.draw("waters 2")
	return b.routine(ctx, runPlan{label: "waters of April, 2", method: water, instrument: cracker, started: at(time.April, 24, 17),
		day: conversionDay(random), seats: b.element.watersSession(samples, "3"), random: random})
}

// report draws up every final value, has it approved, and issues one report
// for each client.
func (b *builder) report(ctx context.Context) error {
	b.clock.Until(at(time.April, 28, 9))
	finals := map[string][]string{}
	shown := ""
	for _, s := range samplesToCome() {
		code := b.codes[[2]string{s.client, s.label}]
		for _, scale := range slices.Sorted(maps.Keys(s.near)) {
			b.minutes(1)
			f, err := b.reg.FinalValue(ctx, b.summary.Analyst, registry.FinalRequest{Sample: code, Scale: scale})
			if err != nil {
				return fmt.Errorf("final value of %s %s on %s: %w", s.client, s.label, scale, err)
			}
			b.minutes(1)
			if err := b.decide(ctx, b.summary.Signatory, f.Ref, 0, "approved", "", "reviewed"); err != nil {
				return err
			}
			finals[s.client] = append(finals[s.client], f.Code)
			if s.client == growers && s.label == sameName && scale == scaleC {
				shown = f.Code
			}
		}
	}
	for _, client := range []string{growers, museum} {
		b.minutes(30)
		r, err := b.reg.Issue(ctx, b.summary.Signatory, registry.ReportRequest{Client: client, Title: "Stable isotopes, samples received in April 2025", Finals: finals[client],
			Note: "Values rest on the laboratory's working standards and through them on international reference materials; each has a permanent code."})
		if err != nil {
			return fmt.Errorf("report to %s: %w", client, err)
		}
		b.summary.Reports = append(b.summary.Reports, r)
		for _, line := range r.Lines {
			if line.Final.Code == shown {
				b.summary.Shown = line.Code
			}
		}
	}
	return nil
}
