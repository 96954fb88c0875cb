package demo

import (
	"context"
	"fmt"
	"math/rand/v2"
	"slices"
	"time"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// A runPlan is a session that is about to run.
type runPlan struct {
	label, method, instrument string
	started                   time.Time
	day                       instrumentDay
	seats                     []seat
	random                    *rand.Rand
	// refusedWith writes the file with these other names first, which the
	// registry is to refuse; its answer comes back.
	refusedWith map[string]string
}

// open takes into use what jars a session needs and that are sealed still.
func (b *builder) open(ctx context.Context, seats []seat) error {
	for _, s := range seats {
		code, ok := b.units[s.unit]
		if !ok || b.opened[s.unit] {
			continue
		}
		b.opened[s.unit] = true
		b.minutes(1)
		if _, err := b.reg.ChangeUnit(ctx, b.summary.Analyst, code, "in-use", "", nil, registry.Edit{Reason: "opened"}); err != nil {
			return fmt.Errorf("open %s: %w", s.unit, err)
		}
	}
	return nil
}

// determine measures the H3 factor of an instrument before a session, from ten pulses.
func (b *builder) determine(ctx context.Context, p runPlan, source ionSource) error {
	b.clock.Until(p.started.Add(-time.Hour))
	f, err := b.reg.StateFactor(ctx, b.summary.Analyst, p.instrument, store.Factor{Origin: registry.FromPulses, DeterminedAt: store.InstantOf(p.started.Add(-70 * time.Minute)), RatioUnit: "ppm", IntensityUnit: "nA",
		Resistor: 1e9, Shape: "flat", Pulses: source.pulses(b.draw("pulses " + p.label)), Gas: "the furnace's hydrogen", Settings: "as after the last service"}, registry.Edit{})
	if err != nil {
		return fmt.Errorf("H3 factor before %s: %w", p.label, err)
	}
	b.minutes(4)
	return b.decide(ctx, b.summary.Signatory, f.Ref, 0, "approved", "", "pulses and residuals reviewed")
}

// measure runs a session, writes its file and imports it.
func (b *builder) measure(ctx context.Context, p runPlan) (Session, []store.Reading, string, error) {
	session := Session{Label: p.label, Method: p.method, Instrument: p.instrument, StartedAt: p.started, Calibrations: map[string]string{}}
	for _, c := range p.day.channels {
		if c.source != nil {
			if err := b.determine(ctx, p, *c.source); err != nil {
				return session, nil, "", err
			}
		}
	}
	b.clock.Until(p.started.Add(-30 * time.Minute))
	if err := b.open(ctx, p.seats); err != nil {
		return session, nil, "", err
	}
	rows := run(p.random, p.day, p.started, p.seats, b.summary.truth, anchorsOf(b.methods[p.method]))
	b.clock.Until(morningAfter(rows[len(rows)-1].at))
	mapping, err := b.reg.ImportMapping(ctx, b.summary.Analyst, "", p.method)
	if err != nil {
		return session, nil, "", err
	}
	ending := mapping.Format
	session.File = fmt.Sprintf("%s_%s.%s", p.instrument, p.started.Format("20060102"), ending)
	digits := map[string]int{}
	for _, c := range p.day.channels {
		digits[c.quantity] = c.digits
	}
	send := func(rows []row) (registry.ImportAnswer, error) {
		table, err := layOut(mapping, rows, digits)
		if err != nil {
			return registry.ImportAnswer{}, err
		}
		data, err := fileOf(mapping, table)
		if err != nil {
			return registry.ImportAnswer{}, err
		}
		read, err := exchange.ReadTable(mapping, session.File, data)
		if err != nil {
			return registry.ImportAnswer{}, err
		}
		return b.reg.ImportReadings(ctx, b.summary.Analyst, registry.ImportRequest{Name: session.File, MediaType: mediaTypes[mapping.Format], Bytes: data, Table: read,
			New: &registry.SessionRequest{Label: p.label, Instrument: p.instrument, Method: p.method}})
	}
	refusal := ""
	if p.refusedWith != nil {
		renamed := slices.Clone(rows)
		for i := range renamed {
			if name, ok := p.refusedWith[renamed[i].subject]; ok {
				renamed[i].name = name
			}
		}
		_, err := send(renamed)
		if err == nil {
			return session, nil, "", fmt.Errorf("session %s: a name that means two samples was not refused", p.label)
		}
		if registry.MeaningOf(err) != registry.Invalid {
			return session, nil, "", fmt.Errorf("session %s: %w", p.label, err)
		}
		refusal = err.Error()
		b.minutes(12)
	}
	answer, err := send(rows)
	if err != nil {
		return session, nil, "", fmt.Errorf("session %s: %w", p.label, err)
	}
	session.Code, session.Readings = answer.Session.Code, len(answer.Readings)
	b.minutes(15)
	return session, answer.Readings, refusal, nil
}

var mediaTypes = map[string]string{"csv": "text/csv", "xlsx": "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet"}

// fit draws up one calibration.
func (b *builder) fit(ctx context.Context, session *Session, quantity, reason string) (registry.Item[store.Calibration], error) {
	b.minutes(2)
	c, err := b.reg.Fit(ctx, b.summary.Analyst, registry.FitRequest{Session: session.Code, Quantity: quantity, Reason: reason})
	if err != nil {
		return c, fmt.Errorf("session %s: %w", session.Label, err)
	}
	session.Calibrations[quantity] = c.Code
	return c, nil
}

// accept approves a calibration and states that its session stands.
func (b *builder) accept(ctx context.Context, session Session, c registry.Item[store.Calibration]) error {
	if err := b.approve(ctx, c.Ref); err != nil {
		return err
	}
	b.minutes(1)
	_, err := b.reg.StateOutcome(ctx, b.summary.Analyst, session.Code, store.Outcome{Quantity: c.Value.Quantity, Outcome: "accepted"}, registry.Edit{})
	return err
}

// routine measures a session in which nothing goes wrong, and accepts it.
func (b *builder) routine(ctx context.Context, p runPlan) error {
	session, _, _, err := b.measure(ctx, p)
	if err != nil {
		return err
	}
	for _, q := range b.methods[p.method].Quantities {
		c, err := b.fit(ctx, &session, q.Quantity, "")
		if err != nil {
			return err
		}
		if err := b.accept(ctx, session, c); err != nil {
			return err
		}
	}
	b.summary.Sessions = append(b.summary.Sessions, session)
	return nil
}

// exclude leaves readings out; acts counts the exclusions of the session before it.
func (b *builder) exclude(ctx context.Context, session string, acts int, cause, reason string, readings []int) error {
	b.minutes(9)
	_, err := b.reg.Exclude(ctx, b.summary.Analyst, session, store.Exclusion{Act: "exclude", Readings: readings, Cause: cause}, registry.Edit{After: acts, Reason: reason})
	return err
}

// morningAfter is when people come in after a session that ran overnight.
func morningAfter(end time.Time) time.Time {
	morning := time.Date(end.Year(), end.Month(), end.Day(), 9, 5, 0, 0, time.UTC)
	if morning.Before(end) {
		morning = morning.AddDate(0, 0, 1)
	}
	return morning
}
