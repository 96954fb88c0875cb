package exchange

import (
	"deltamoor/api/registry"
	"deltamoor/store"
)

// UnitHeadings are the headings of a list of units; the first two must be there.
const UnitHeadings = "material,label,container,state,content,content_unit,location,filling_order"

// ReadUnits reads units of materials, by the fixed headings of UnitHeadings.
func ReadUnits(name string, data []byte) ([]registry.UnitRow, error) {
	var list []registry.UnitRow
	form := newListForm("units", UnitHeadings, 2, "label", registry.MaxUnits)
	err := form.read(name, data, func(r listRow) {
		u := store.Unit{Material: r.needed("material", "its code"), Label: r.needed("label", "what stands on the unit"), Container: r.text("container"), State: r.text("state"),
			Content: r.amount("content", "content_unit"), Location: r.text("location")}
		if n := r.whole("filling_order"); n != nil {
			u.FillingOrder = *n
		}
		list = append(list, registry.UnitRow{Unit: u, Place: r.place})
	})
	if err != nil {
		return nil, err
	}
	return list, nil
}

// UseHeadings are the headings of a log of uses kept outside sessions; the
// first two must be there.
const UseHeadings = "unit,reason,at,state,taken,left,amount_unit,location,excursion"

// ReadUses reads a log of what happened to units outside sessions, by the fixed
// headings of UseHeadings. taken is what was taken out, left what is in it then,
// both in amount_unit; excursion says how it was not stored as it should be.
func ReadUses(name string, data []byte) ([]registry.UseRow, error) {
	var list []registry.UseRow
	form := newListForm("uses", UseHeadings, 2, "unit", registry.MaxUses)
	err := form.read(name, data, func(r listRow) {
		list = append(list, registry.UseRow{Unit: r.needed("unit", "the code or label of a unit"), Reason: r.needed("reason", "what happened and why"), Place: r.place,
			UnitUse: registry.UnitUse{State: r.text("state"), Location: r.text("location"), At: r.instant("at"), Excursion: r.text("excursion"),
				Taken: r.amount("taken", "amount_unit"), Left: r.amount("left", "amount_unit")}})
	})
	if err != nil {
		return nil, err
	}
	return list, nil
}

// StudyHeadings are the headings of the measurements of a study; the first two
// must be there, and days for one of stability.
const StudyHeadings = "unit,value,session,portion_mg,days,order"

// ReadStudy reads the measurements of a study of units or of stability, by the
// fixed headings of StudyHeadings: value in ‰, session what was measured
// together, days of storage, order of filling.
func ReadStudy(name string, data []byte) (measurements []store.StudyMeasurement, place func(i int, field string) string, err error) {
	var rows []listRow
	form := newListForm("measurements", StudyHeadings, 2, "unit", registry.MaxStudy)
	err = form.read(name, data, func(r listRow) {
		m := store.StudyMeasurement{Unit: r.needed("unit", "the unit that the portion came from"), Session: r.text("session"), Portion: r.numeric("portion_mg"), Days: r.numeric("days"), Order: r.numeric("order")}
		if x := r.optional("value"); x != nil {
			m.Value = *x
		} else {
			r.needed("value", "the measured value (‰)")
		}
		measurements, rows = append(measurements, m), append(rows, r)
	})
	if err != nil {
		return nil, nil, err
	}
	return measurements, func(i int, field string) string { return rows[i].place(field) }, nil
}
