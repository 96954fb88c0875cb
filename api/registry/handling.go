package registry

import (
	"context"

	"deltamoor/store"
)

// Handling is what whoever handles a material has to know; it advises nothing
// and defers to the safety data sheet.
type Handling struct {
	Material, Name string
	Storage        string
	Preparation    string
	MinimumPortion *store.Amount
	Language       string
	Hazards        []HazardStatement
	Caution        string
}

// Handling tells how a material is kept and what its hazards are, in a language
// ("" is English).
func (r *Registry) Handling(ctx context.Context, actor Actor, material, language string) (Handling, error) {
	var out Handling
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		key, err := findMaterial(ctx, v, actor.Laboratory, material)
		if err != nil {
			return err
		}
		m, err := newest[store.Material](ctx, v, key)
		if err != nil {
			return err
		}
		out, err = handlingOf(m.Version, language)
		return err
	})
	return out, err
}

func handlingOf(m store.Version[store.Material], language string) (Handling, error) {
	b := m.Value
	out := Handling{Material: m.Code, Name: b.Name, Storage: b.Storage, Preparation: b.Preparation, MinimumPortion: b.Minimum, Language: nameOr(language, "en")}
	var err error
	if out.Hazards, err = HazardStatements(out.Language, b.Hazards); err != nil {
		return out, err
	}
	if out.Caution = cautionOf(b); out.Caution == "" && len(b.Hazards) > 0 {
		out.Caution = deferral
	}
	return out, nil
}
