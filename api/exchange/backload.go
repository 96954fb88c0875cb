package exchange

import (
	"deltamoor/api/registry"
	"deltamoor/store"
)

// ValueHeadings are the headings of a list of values assigned before the
// registry was in use; the first six must be there.
const ValueHeadings = "material,scale,value,kind,basis,valid_from,uncertainty,k,n,nu,measurand,evidence"

// ReadValues reads values assigned before the registry was in use, by the
// fixed headings of ValueHeadings. Uncertainty is as printed, and kind says what
// it is: standard, expanded (with k), sd (with n), half-width, exact, none.
// Values keep their digits.
func ReadValues(name string, data []byte) ([]registry.BackLoadRow, error) {
	var list []registry.BackLoadRow
	form := newListForm("values", ValueHeadings, 6, "material", registry.MaxBackLoad)
	err := form.read(name, data, func(r listRow) {
		list = append(list, registry.BackLoadRow{Material: r.needed("material", "its code"), Scale: r.needed("scale", "its code"), Measurand: r.text("measurand"), Value: store.Decimal(r.digits("value")),
			Stated: store.Stated{Text: r.digits("uncertainty"), Kind: r.text("kind"), K: r.optional("k"), N: r.whole("n")}, DegreesOfFreedom: r.optional("nu"),
			Basis: r.text("basis"), Evidence: r.text("evidence"), ValidFrom: r.instant("valid_from"), Place: r.place})
	})
	if err != nil {
		return nil, err
	}
	return list, nil
}
