package exchange

import (
	"fmt"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// readingsBody is the body of readings sent as JSON.
type readingsBody struct {
	DeltaUnit string        `json:"delta_unit" enum:"permil,mUr,per-meg,ppm"`
	Readings  []jsonReading `json:"readings" required:"true"`
}

// jsonReading is a registry.RawReading with what JSON must say of it.
type jsonReading struct {
	Name        string         `json:"name" required:"true"`
	Role        string         `json:"role" enum:",anchor,control,monitor,blank,gas,conditioning,sample"`
	Unit        string         `json:"unit"`
	Analysis    string         `json:"analysis"`
	Preparation string         `json:"preparation"`
	Position    *int           `json:"position"`
	Peak        *int           `json:"peak"`
	Time        *store.Instant `json:"time"`
	Amount      *float64       `json:"amount"`
	Compound    string         `json:"compound"`
	Retention   *float64       `json:"retention"`
	Width       *float64       `json:"width"`
	WidthBy     string         `json:"width_by" enum:",base,half-height"`
	Group       string         `json:"group"`
	Warning     string         `json:"warning"`
	Quantity    string         `json:"quantity" required:"true"`
	Raw         float64        `json:"raw" required:"true"`
	U           *float64       `json:"u"`
	Size        *float64       `json:"size"`

	Intensity    *float64 `json:"intensity"`
	GasIntensity *float64 `json:"gas_intensity"`
	GasRatio     *float64 `json:"gas_ratio"`
}

// ReadReadingsJSON reads {"readings": […]}, each with the members of
// registry.RawReading. Names, quantity and raw must be there. Unknown and
// repeated members, wrong types and missing members are refused by their place,
// all at once: `body.readings[3].raw`.
//
// The body may say its delta_unit: permil (the default) or mUr, which are the
// same, per-meg or ppm, which are a thousandth of it. raw and u are stored in ‰.
func ReadReadingsJSON(data []byte) (registry.ReadingTable, error) {
	const message = "read readings"
	if err := bounded(message, data); err != nil {
		return registry.ReadingTable{}, err
	}
	var body readingsBody
	if err := decodeStrict(message, "body", data, &body); err != nil {
		return registry.ReadingTable{}, err
	}
	switch n := len(body.Readings); {
	case n > registry.MaxReadings:
		return registry.ReadingTable{}, registry.Refuse(registry.TooLarge,
			"%s: %d readings, more than the %d that one import may have", message, n, registry.MaxReadings)
	case n == 0:
		return registry.ReadingTable{}, refuseOne(message, "body.readings", "an empty list", "at least one reading")
	}
	var faults complaints
	table := registry.ReadingTable{Rows: len(body.Readings), Encoding: encodingUTF8, Place: placeInBody}
	for i, r := range body.Readings {
		r.Name, r.Quantity = plainSpaces(r.Name), plainSpaces(r.Quantity)
		if r.Name == "" {
			faults.add(placeInBody(i, "name"), "an empty text", "the name of a material or sample")
		}
		if r.Quantity == "" {
			faults.add(placeInBody(i, "quantity"), "an empty text", "the name of a quantity, for example d13C")
		}
		for _, p := range []struct {
			field string
			value *int
		}{{"position", r.Position}, {"peak", r.Peak}} {
			if p.value != nil && *p.value < 0 {
				faults.add(placeInBody(i, p.field), fmt.Sprint(*p.value), "a whole number, 0 or more")
			}
		}
		if r.U != nil && *r.U < 0 {
			faults.add(placeInBody(i, "u"), FormatNumber(*r.U), "a standard uncertainty, which is not negative")
		}
		if body.DeltaUnit == "per-meg" || body.DeltaUnit == "ppm" {
			r.Raw /= 1000
			if r.U != nil {
				*r.U /= 1000
			}
		}
		table.Readings = append(table.Readings, registry.RawReading(r))
	}
	if err := faults.err(message + ": nothing was imported"); err != nil {
		return registry.ReadingTable{}, err
	}
	return table, nil
}

func placeInBody(reading int, field string) string {
	return fmt.Sprintf("body.readings[%d].%s", reading, field)
}
