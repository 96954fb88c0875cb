package demo

import (
	"context"
	"fmt"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Size is how much routine work Volume makes.
type Size struct {
	// Sessions of solids, one each working day.
	Sessions int
	// Samples in each session, one portion each; 0 means 24.
	Samples int
	// Reported says of how many samples in each session final values are approved
	// and reported, in both quantities; the rest stay measured.
	Reported int
	// Progress is called after each session; nil is silent.
	Progress func(done, total int)
}

// Volumes count what Volume made.
type Volumes struct{ Sessions, Readings, Calibrations, Finals, Reported int }

// Volume adds routine sessions of solids to a laboratory that Build made: a
// list of samples, a file, two approved calibrations, and final values with
// their report for some of the samples. Memory does not grow with the number of
// sessions. Equal seeds on equal registries give equal ledgers.
func Volume(ctx context.Context, reg *registry.Registry, clock *Clock, s *Summary, size Size, seed uint64) (Volumes, error) {
	var v Volumes
	if size.Samples == 0 {
		size.Samples = 24
	}
	if size.Sessions < 0 || size.Samples < 0 || size.Reported < 0 || size.Reported > size.Samples {
		return v, fmt.Errorf("volume of %d sessions, %d samples each, %d reported: expected 0 or more sessions and samples, and no more reported than there are", size.Sessions, size.Samples, size.Reported)
	}
	b := newBuilder(reg, clock, seed)
	b.summary = &Summary{Seed: seed, Laboratory: s.Laboratory, Name: s.Name, Samples: map[string]Sample{}, truth: s.truth,
		Administrator: s.Administrator, Manager: s.Manager, Analyst: s.Analyst, Signatory: s.Signatory, Auditor: s.Auditor}
	for i := range size.Sessions {
		if err := b.volumeSession(ctx, i, size, &v); err != nil {
			return v, fmt.Errorf("volume: session %d of %d: %w", i+1, size.Sessions, err)
		}
		b.summary.Sessions = nil
		if size.Progress != nil {
			size.Progress(i+1, size.Sessions)
		}
	}
	return v, nil
}

func (b *builder) volumeSession(ctx context.Context, number int, size Size, v *Volumes) error {
	random := b.draw(fmt.Sprintf("volume %d", number))
	client := fmt.Sprintf("client %02d", random.IntN(20)+1)
	element := map[string]float64{"d13C": 0.44, "d15N": 0.10}
	bodies := make([]store.Sample, size.Samples)
	for i := range bodies {
		bodies[i] = store.Sample{Client: client, Label: fmt.Sprintf("%d", i+1), Matrix: "organic solid", Wanted: []store.Wanted{{Scale: scaleC}, {Scale: scaleN}}}
	}
	b.minutes(30)
	samples, err := b.reg.AddSamples(ctx, b.summary.Analyst, bodies)
	if err != nil {
		return err
	}
	var seats []seat
	for _, it := range samples {
		b.summary.truth.set(it.Code, scaleC, -27+13*random.Float64())
		b.summary.truth.set(it.Code, scaleN, 3+10*random.Float64())
		seats = append(seats, seat{subject: it.Code, name: store.FormatCode(it.Code), element: element})
	}
	defer func() {
		for _, it := range samples {
			delete(b.summary.truth, truthKey(it.Code, scaleC))
			delete(b.summary.truth, truthKey(it.Code, scaleN))
		}
	}()
	started := b.clock.Now().Truncate(time.Hour).Add(time.Hour)
	if err := b.routine(ctx, runPlan{label: fmt.Sprintf("routine %d", number+1), method: bulkCN, instrument: burner, started: started,
		day: combustionDay(random), seats: b.element.solidsSession(seats, routineJars("3")), random: random}); err != nil {
		return err
	}
	v.Sessions++
	v.Calibrations += 2
	v.Readings += b.summary.Sessions[0].Readings
	var finals []string
	for _, it := range samples[:size.Reported] {
		for _, scale := range []string{scaleC, scaleN} {
			f, err := b.reg.FinalValue(ctx, b.summary.Analyst, registry.FinalRequest{Sample: it.Code, Scale: scale})
			if err != nil {
				return err
			}
			if err := b.decide(ctx, b.summary.Signatory, f.Ref, 0, "approved", "", "reviewed"); err != nil {
				return err
			}
			finals = append(finals, f.Code)
			v.Finals++
		}
	}
	if len(finals) == 0 {
		return nil
	}
	r, err := b.reg.Issue(ctx, b.summary.Signatory, registry.ReportRequest{Client: client, Title: fmt.Sprintf("Stable isotopes, series %d", number+1), Finals: finals})
	v.Reported += len(r.Lines)
	return err
}
