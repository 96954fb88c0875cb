package demo

import (
	"context"
	"fmt"
	"math/rand/v2"
	"slices"
	"time"

	"deltamoor/api/registry"
)

// injections of one vial, by the laser's habit.
const injections = 6

// laserDay is the laser on one day. It reads against its maker's line, which is
// near the scale, and remembers a little of the vial before.
func laserDay(random *rand.Rand) instrumentDay {
	return instrumentDay{minutes: 8, channels: []channel{
		{quantity: "d18O", scale: scaleO, gas: 0.4, stretch: 0.99 + 0.004*random.NormFloat64(), drift: 0.01 * random.NormFloat64(), memory: 0.03,
			noise: 0.05, between: betweenO, digits: 3, perAmount: 1.1},
	}}
}

// laserSession seats the working waters as unknowns among international ones,
// every vial six injections long.
func (e elements) laserSession() []seat {
	var seats []seat
	for i, code := range []string{"VSMOW2", "SLAP2", "USGS46", "OV-SNOW", "OV-SHORE", controlWater, "VSMOW2", "SLAP2", controlWater, "OV-SHORE", "OV-SNOW", "USGS46", "SLAP2", "VSMOW2"} {
		s := seat{subject: code, element: map[string]float64{"d18O": 0.888}, unit: code + " vial", portion: fmt.Sprintf("v%02d", i+1)}
		if s.unit = code + " vial"; slices.Contains([]string{"OV-SNOW", "OV-SHORE", controlWater}, code) {
			s.unit = jar(code, "1")
		}
		for range injections {
			seats = append(seats, s)
		}
	}
	return seats
}

// measureByLaser gives the working waters a value for oxygen too.
func (b *builder) measureByLaser(ctx context.Context) error {
	random := b.draw("laser truth")
	waters := map[string]float64{"OV-SNOW": -23.4, "OV-SHORE": -2.1, controlWater: -13.2}
	for _, code := range []string{"OV-SNOW", "OV-SHORE", controlWater} {
		b.summary.truth.set(code, scaleO, waters[code]+0.1*random.NormFloat64())
	}
	for i, day := range []int{3, 5, 11} {
		random := b.draw(fmt.Sprintf("laser %d", i+1))
		if err := b.routine(ctx, runPlan{label: fmt.Sprintf("waters by laser, %d of 3", i+1), method: laser, instrument: mirrors,
			started: at(time.June, day, 8), day: laserDay(random), seats: b.element.laserSession(), random: random}); err != nil {
			return err
		}
	}
	b.clock.Until(at(time.June, 13, 9))
	for _, code := range []string{"OV-SNOW", "OV-SHORE", controlWater} {
		b.minutes(10)
		v, err := b.reg.AssignValue(ctx, b.summary.Manager, registry.AssignRequest{Material: code, Scale: scaleO, Note: "three sessions, ten days"},
			registry.Edit{ValidFrom: instant(at(time.June, 14, 0))})
		if err != nil {
			return fmt.Errorf("value of %s on %s: %w", code, scaleO, err)
		}
		if err := b.decide(ctx, b.summary.Signatory, v.Ref, 0, "approved", "", "sessions and budget reviewed"); err != nil {
			return err
		}
	}
	return nil
}
