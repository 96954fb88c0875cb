package demo

import (
	"context"
	"fmt"
	"maps"
	"math/rand/v2"
	"slices"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// Build invents a laboratory in a registry: an empty one is initialised, one in
// use gets a further laboratory. The registry and its store must tell the time
// of the clock and draw from Random(seed); then equal seeds give equal ledgers.
//
// It takes some two hundred acts of the registry, each as a person of the
// laboratory with that person's roles.
func Build(ctx context.Context, reg *registry.Registry, clock *Clock, seed uint64) (*Summary, error) {
	b := newBuilder(reg, clock, seed)
	for _, step := range []struct {
		what string
		do   func(context.Context) error
	}{
		{"found the laboratory", b.found},
		{"register materials", b.register},
		{"state methods", b.stateMethods},
		{"assign values to working standards", b.assignValues},
		{"list samples", b.listSamples},
		{"measure solids", b.measureSolids},
		{"measure waters", b.measureWaters},
		{"report", b.report},
		{"run a campaign", b.campaign},
		{"measure waters by laser", b.measureByLaser},
		{"use the new standard", b.follow},
		{"revoke the first token", b.revoke},
	} {
		if err := step.do(ctx); err != nil {
			return nil, fmt.Errorf("build the invented laboratory: %s: %w", step.what, err)
		}
	}
	return b.summary, nil
}

type builder struct {
	reg     *registry.Registry
	clock   *Clock
	seed    uint64
	summary *Summary
	methods map[string]store.Method
	element elements
	// codes of samples, by client and label; units by label, and those in use.
	codes  map[[2]string]string
	units  map[string]string
	opened map[string]bool
}

func newBuilder(reg *registry.Registry, clock *Clock, seed uint64) *builder {
	b := &builder{reg: reg, clock: clock, seed: seed, methods: methods(), element: elements{}, codes: map[[2]string]string{}, units: map[string]string{}, opened: map[string]bool{}}
	b.summary = &Summary{Seed: seed, Laboratory: Laboratory, Name: labName, truth: truth{}, Samples: map[string]Sample{},
		Administrator: administrator.actor(Laboratory), Manager: manager.actor(Laboratory), Analyst: analyst.actor(Laboratory),
		Signatory: signatory.actor(Laboratory), Auditor: auditor.actor(Laboratory)}
	for _, s := range standards() {
		b.element[s.code] = s.element
	}
	for _, m := range internationals() {
		b.element[m.code] = m.element
	}
	return b
}

// draw gives the randomness of one purpose.
func (b *builder) draw(purpose string) *rand.Rand { return rand.New(stream(b.seed, purpose)) }

func (b *builder) minutes(n int) { b.clock.Advance(time.Duration(n) * time.Minute) }

func (b *builder) found(ctx context.Context) error {
	q := registry.InitRequest{Laboratory: Laboratory, Name: labName, Zone: zone, SecondPerson: true, Person: administrator.code, PersonName: administrator.name}
	done, err := b.reg.Initialised(ctx)
	if err != nil {
		return err
	}
	if done {
		_, err = b.reg.AddLaboratory(ctx, q)
	} else {
		_, err = b.reg.Init(ctx, q)
	}
	if err != nil {
		return err
	}
	for _, p := range []person{manager, analyst, signatory, auditor} {
		b.minutes(3)
		if _, err := b.reg.AddPerson(ctx, b.summary.Administrator, p.code, store.Person{Name: p.name, Roles: p.roles}); err != nil {
			return err
		}
	}
	return nil
}

// revoke ends the token that came with the laboratory: drawn from a known seed,
// its secret is none.
func (b *builder) revoke(ctx context.Context) error {
	page, err := b.reg.Tokens(ctx, b.summary.Administrator, registry.Query{})
	if err != nil {
		return err
	}
	for _, t := range page.Items {
		b.minutes(1)
		if _, err := b.reg.RevokeToken(ctx, b.summary.Administrator, t.Code, "drawn from a known seed"); err != nil {
			return err
		}
	}
	return nil
}

var scaleOf = map[string]string{"d13C": scaleC, "d15N": scaleN, "d2H": scaleH, "d18O": scaleO}

// register brings in instruments, gases, working standards and the vials of
// international materials, and draws what each of them really is.
func (b *builder) register(ctx context.Context) error {
	random := b.draw("truth")
	for _, in := range []struct {
		code string
		body store.Instrument
	}{
		{burner, store.Instrument{Name: "combustion analyser with mass spectrometer", Configuration: "tin capsules, oxidation and reduction reactors, helium carrier", Serial: "OV-0412", Location: "east bay"}},
		{cracker, store.Instrument{Name: "conversion furnace with mass spectrometer", Configuration: "crimped silver tubes, chromium reactor at 1030 °C, helium carrier", Serial: "OV-0533", Location: "west bay"}},
		{mirrors, store.Instrument{Name: "laser absorption analyser for waters", Configuration: "vaporiser at 110 °C, dry air carrier", Serial: "OV-0561", Location: "west bay"}},
	} {
		b.minutes(5)
		if _, err := b.reg.StateInstrument(ctx, b.summary.Manager, in.code, in.body, registry.Edit{}); err != nil {
			return err
		}
	}
	bottles := gases()
	for _, code := range slices.Sorted(maps.Keys(bottles)) {
		b.minutes(2)
		if _, err := b.reg.StateMaterial(ctx, b.summary.Manager, code, bottles[code], registry.Edit{}); err != nil {
			return err
		}
	}
	for _, s := range standards() {
		b.minutes(4)
		body := store.Material{Name: s.name, Kind: s.kind, Substance: s.substance, Matrix: s.matrix, Producer: labName, Lot: s.lot, Storage: s.storage, Status: "current"}
		if _, err := b.reg.StateMaterial(ctx, b.summary.Manager, s.code, body, registry.Edit{}); err != nil {
			return err
		}
		unit := store.Unit{Material: s.code, Label: s.code + " jar", Content: &store.Amount{Value: store.Decimal(s.content), Unit: s.contentUnit}}
		items, err := b.reg.AddUnits(ctx, b.summary.Manager, unit, s.units)
		if err != nil {
			return err
		}
		for _, it := range items {
			b.units[it.Value.Label] = it.Code
		}
		for _, scale := range slices.Sorted(maps.Keys(s.near)) {
			b.summary.truth.set(s.code, scale, s.near[scale]+0.15*random.NormFloat64())
		}
	}
	anchors := map[string]map[string]bool{}
	for _, method := range []string{valueCN, valueWater, laser} {
		maps.Copy(anchors, anchorsOf(b.methods[method]))
	}
	for _, m := range internationals() {
		b.minutes(2)
		if _, err := b.reg.AddUnits(ctx, b.summary.Manager, store.Unit{Material: m.code, Label: m.code + " vial", State: "in-use"}, 1); err != nil {
			return err
		}
		for _, quantity := range slices.Sorted(maps.Keys(m.element)) {
			code := registry.ValueCode(m.code, scaleOf[quantity], registry.Total)
			value, err := registry.One[store.Value](ctx, b.reg, b.summary.Manager, store.KindValue, code, 0, store.Moment{})
			if err != nil {
				return fmt.Errorf("published value of %s: %w", m.code, err)
			}
			if anchors[quantity][m.code] && value.Value.Provisional {
				return fmt.Errorf("published value %s is provisional and cannot anchor", code)
			}
			var x float64
			if _, err := fmt.Sscan(string(value.Value.Value), &x); err != nil {
				return fmt.Errorf("published value %s: %w", code, err)
			}
			b.summary.truth.set(m.code, scaleOf[quantity], x+value.Value.StandardUncertainty*random.NormFloat64())
		}
	}
	return nil
}

func (b *builder) stateMethods(ctx context.Context) error {
	for _, code := range slices.Sorted(maps.Keys(b.methods)) {
		b.minutes(20)
		m, err := b.reg.StateMethod(ctx, b.summary.Manager, code, b.methods[code], registry.Edit{})
		if err != nil {
			return fmt.Errorf("method %s: %w", code, err)
		}
		if err := b.decide(ctx, b.summary.Signatory, m.Ref, 0, "approved", "", "read against the procedure"); err != nil {
			return err
		}
	}
	return nil
}

// decide records one decision; seen counts those before it.
func (b *builder) decide(ctx context.Context, actor registry.Actor, ref store.Ref, seen int, act, reason, meaning string) error {
	b.minutes(6)
	_, err := b.reg.Decide(ctx, actor, ref.Kind, ref.Code, registry.DecisionRequest{Act: act, Reason: reason, Version: ref.Version, Seen: seen, Meaning: meaning})
	if err != nil {
		return fmt.Errorf("%s %s %s: %w", act, ref.Kind, ref.Code, err)
	}
	return nil
}

// approve lets the analyst submit and the signatory approve.
func (b *builder) approve(ctx context.Context, ref store.Ref) error {
	if err := b.decide(ctx, b.summary.Analyst, ref, 0, "submitted", "", "made"); err != nil {
		return err
	}
	return b.decide(ctx, b.summary.Signatory, ref, 1, "approved", "", "reviewed")
}

func at(month time.Month, day, hour int) time.Time {
	return time.Date(2025, month, day, hour, 10, 0, 0, time.UTC)
}

// assignValues runs three sessions on each instrument against international
// materials and takes the working standards' values from them.
func (b *builder) assignValues(ctx context.Context) error {
	for i, day := range []int{10, 12, 17} {
		random := b.draw(fmt.Sprintf("value solids %d", i+1))
		if err := b.routine(ctx, runPlan{label: fmt.Sprintf("values of solids, %d of 3", i+1), method: valueCN, instrument: burner,
			started: at(time.March, day, 17), day: combustionDay(random), seats: b.element.valueSession(), random: random}); err != nil {
			return err
		}
		random = b.draw(fmt.Sprintf("value waters %d", i+1))
		if err := b.routine(ctx, runPlan{label: fmt.Sprintf("values of waters, %d of 3", i+1), method: valueWater, instrument: cracker,
			started: at(time.March, day+1, 17), day: conversionDay(random), seats: b.element.valueWaterSession(), random: random}); err != nil {
			return err
		}
	}
	b.clock.Until(at(time.March, 24, 9))
	for _, s := range standards() {
		for _, scale := range slices.Sorted(maps.Keys(s.near)) {
			b.minutes(10)
			v, err := b.reg.AssignValue(ctx, b.summary.Manager, registry.AssignRequest{Material: s.code, Scale: scale, Note: "three sessions, two weeks"},
				registry.Edit{ValidFrom: instant(at(time.April, 1, 0))})
			if err != nil {
				return fmt.Errorf("value of %s on %s: %w", s.code, scale, err)
			}
			if err := b.decide(ctx, b.summary.Signatory, v.Ref, 0, "approved", "", "sessions and budget reviewed"); err != nil {
				return err
			}
		}
	}
	return nil
}

func wantedOf(near map[string]float64) []store.Wanted {
	var list []store.Wanted
	for _, scale := range slices.Sorted(maps.Keys(near)) {
		list = append(list, store.Wanted{Scale: scale})
	}
	return list
}

// listSamples registers what the clients sent and draws what it really is.
func (b *builder) listSamples(ctx context.Context) error {
	random := b.draw("samples")
	b.clock.Until(at(time.April, 7, 9))
	for _, client := range []string{growers, museum} {
		var bodies []store.Sample
		var wanted []wantedSample
		for _, s := range samplesToCome() {
			if s.client == client {
				wanted = append(wanted, s)
				bodies = append(bodies, store.Sample{Client: s.client, Label: s.label, Matrix: s.treatedAs(), Note: s.matrix, Wanted: wantedOf(s.near)})
			}
		}
		b.minutes(30)
		items, err := b.reg.AddSamples(ctx, b.summary.Analyst, bodies)
		if err != nil {
			return err
		}
		for i, it := range items {
			s := wanted[i]
			b.codes[[2]string{s.client, s.label}] = it.Code
			b.element[it.Code] = s.element
			b.summary.Samples[it.Code] = Sample{it.Code, s.client, s.label}
			if s.label == sameName {
				b.summary.SameLabel.Label = sameName
				b.summary.SameLabel.Samples = append(b.summary.SameLabel.Samples, it.Code)
			}
			for _, scale := range slices.Sorted(maps.Keys(s.near)) {
				b.summary.truth.set(it.Code, scale, s.near[scale]+0.2*random.NormFloat64())
			}
		}
	}
	return nil
}

// seatsOf seats the portions of samples: first one of each, then the second of
// those that have one, and so on.
func (b *builder) seatsOf(samples []wantedSample) []seat {
	var seats []seat
	for portion := range 3 {
		for _, s := range samples {
			if portion < s.portions {
				seats = append(seats, b.sampleSeat(s))
			}
		}
	}
	return seats
}

// sampleSeat names a sample in the file: by the client's label where that means
// one sample, else by its code.
func (b *builder) sampleSeat(s wantedSample) seat {
	code := b.codes[[2]string{s.client, s.label}]
	out := b.element.seat(code)
	if out.name = s.label; s.label == sameName {
		out.name = store.FormatCode(code)
	}
	return out
}
