package demo

import (
	"math/rand/v2"
	"slices"
)

// elements of everything that can stand in a session, by subject.
type elements map[string]map[string]float64

func (e elements) seat(subject string) seat { return seat{subject: subject, element: e[subject]} }

// combustionDay is the combustion analyser on one day: within its usual ways,
// never twice the same.
func combustionDay(random *rand.Rand) instrumentDay {
	return instrumentDay{minutes: 9, channels: []channel{
		{quantity: "d15N", scale: scaleN, gas: -1.2, stretch: 1 + 0.004*random.NormFloat64(), drift: 0.03 * random.NormFloat64(), size: 0.015 + 0.003*random.NormFloat64(),
			reference: 22, noise: 0.09, between: betweenN, digits: 3, perAmount: 0.35, blank: capsules},
		{quantity: "d13C", scale: scaleC, gas: -24.7, stretch: 0.985 + 0.004*random.NormFloat64(), drift: 0.02 * random.NormFloat64(),
			noise: 0.05, between: betweenC, digits: 3, perAmount: 0.09},
	}}
}

// conversionDay is the conversion furnace on one day.
func conversionDay(random *rand.Rand) instrumentDay {
	return instrumentDay{minutes: 6, channels: []channel{
		{quantity: "d2H", scale: scaleH, gas: -95, stretch: 0.955 + 0.01*random.NormFloat64(), drift: 0.3 * random.NormFloat64(),
			memory: 0.02 + 0.004*random.NormFloat64(), noise: 1.1, between: betweenH, digits: 2, perAmount: 0.5,
			source: &ionSource{factor: 4.1 + 0.005*random.NormFloat64(), ratio: 282, plateau: 5, height: 0.5}},
	}}
}

// warmUp are the first positions of a combustion session: two portions that
// condition the reactor, and an empty capsule.
func (e elements) warmUp() []seat {
	s := e.seat(controlSolid)
	s.role, s.unit = "rodage", jar(controlSolid, "1")
	empty := seat{name: "capsule", role: "vide", element: map[string]float64{"d15N": 0.03}, amount: 3}
	return []seat{s, s, empty}
}

// valueSession seats the working solids as unknowns among international
// materials, which open, close and divide the session.
func (e elements) valueSession() []seat {
	seats := e.warmUp()
	vial := func(codes ...string) {
		for _, code := range codes {
			s := e.seat(code)
			s.unit = code + " vial"
			seats = append(seats, s)
		}
	}
	candidates := func(codes ...string) {
		for _, code := range codes {
			s := e.seat(code)
			s.unit = jar(code, "1")
			seats = append(seats, s)
		}
	}
	block := []string{"IAEA-CH-7", "IAEA-N-1", "USGS41", "USGS32", "IAEA-CH-6", "IAEA-N-1"}
	vial("USGS32")
	vial(block...)
	candidates("OV-SEDGE", "OV-LAMB", "OV-CURD", "OV-CRAB", "OV-MAIZE", controlSolid, "OV-SEDGE", "OV-LAMB")
	vial("IAEA-600")
	vial(block...)
	candidates("OV-CURD", "OV-CRAB", "OV-MAIZE", controlSolid, "OV-SEDGE", "OV-LAMB", "OV-CURD", "OV-CRAB")
	vial("IAEA-600")
	vial(block...)
	candidates("OV-MAIZE", controlSolid, "OV-SEDGE", "OV-LAMB", "OV-CURD", "OV-CRAB", "OV-MAIZE", controlSolid)
	vial("IAEA-600")
	vial(block...)
	vial("USGS32")
	return seats
}

// valueWaterSession does the same for waters, in crimped tubes of which three
// or four follow each other, so that carry-over shows on the first.
func (e elements) valueWaterSession() []seat {
	var seats []seat
	tubes := func(n int, code, unit, role string) {
		for range n {
			s := e.seat(code)
			s.unit, s.role = unit, role
			seats = append(seats, s)
		}
	}
	vial := func(n int, codes ...string) {
		for _, code := range codes {
			tubes(n, code, code+" vial", "")
		}
	}
	own := func(n int, codes ...string) {
		for _, code := range codes {
			tubes(n, code, jar(code, "1"), "")
		}
	}
	tubes(3, controlWater, jar(controlWater, "1"), "yes")
	vial(3, "VSMOW2", "SLAP2")
	own(3, "OV-SNOW", "OV-SHORE", controlWater)
	vial(2, "USGS46")
	vial(3, "SLAP2", "VSMOW2")
	own(3, controlWater, "OV-SNOW", "OV-SHORE")
	vial(2, "USGS46")
	vial(3, "VSMOW2", "SLAP2")
	return seats
}

// solidsSession seats samples between rounds of the anchors and the control,
// taken from the jars that are named by number.
func (e elements) solidsSession(samples []seat, jars map[string]string) []seat {
	seats := e.warmUp()
	round := func(codes ...string) {
		for _, code := range codes {
			s := e.seat(code)
			s.unit = jar(code, jars[code])
			seats = append(seats, s)
		}
	}
	third := (len(samples) + 2) / 3
	round("OV-SEDGE", "OV-MAIZE", "OV-CURD", "OV-CRAB", "OV-LAMB", controlSolid)
	for part := range slices.Chunk(samples, max(third, 1)) {
		seats = append(seats, part...)
		round("OV-CURD", "OV-CRAB", controlSolid, "OV-LAMB", "OV-MAIZE", "OV-SEDGE")
	}
	return seats
}

// watersSession seats samples, every one three tubes long, between rounds of
// the two anchors and the control.
func (e elements) watersSession(samples []seat, number string) []seat {
	var seats []seat
	tubes := func(n int, code, role string) {
		for range n {
			s := e.seat(code)
			s.unit, s.role = jar(code, number), role
			seats = append(seats, s)
		}
	}
	tubes(3, controlWater, "yes")
	tubes(3, "OV-SNOW", "")
	tubes(3, "OV-SHORE", "")
	tubes(2, controlWater, "")
	half := (len(samples) + 1) / 2
	seats = append(seats, samples[:half]...)
	tubes(3, "OV-SHORE", "")
	tubes(3, "OV-SNOW", "")
	tubes(2, controlWater, "")
	seats = append(seats, samples[half:]...)
	tubes(3, "OV-SNOW", "")
	tubes(3, "OV-SHORE", "")
	return seats
}
