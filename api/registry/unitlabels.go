package registry

import (
	"context"

	"deltamoor/store"
)

// A UnitLabel is what stands on the label of a unit.
type UnitLabel struct {
	Code, Label, Material string
	Name, Lot, Storage    string
	Hazards               []string
	OpenedAt              *store.Instant
}

// UnitLabels gives the labels of units, in the order asked for; without codes,
// those of a material's units that can still be used.
func (r *Registry) UnitLabels(ctx context.Context, actor Actor, material string, codes []string) ([]UnitLabel, error) {
	if len(codes) > MaxUnits {
		return nil, Refuse(TooLarge, "%d labels: one request makes at most %d", len(codes), MaxUnits)
	}
	var out []UnitLabel
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		wanted := codes
		if len(wanted) == 0 {
			key, err := findMaterial(ctx, v, actor.Laboratory, material)
			if err != nil {
				return err
			}
			units, err := above(ctx, v, actor.Laboratory, key, store.KindUnit)
			if err != nil {
				return err
			}
			for _, u := range units {
				wanted = append(wanted, u.Code)
			}
		}
		for _, code := range wanted {
			u, err := newest[store.Unit](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindUnit, Code: code})
			if err != nil {
				return err
			}
			if len(codes) == 0 && !usable(u.Value.State) {
				continue
			}
			m, err := newest[store.Material](ctx, v, store.Key{Laboratory: u.Value.MaterialLaboratory, Kind: store.KindMaterial, Code: u.Value.Material})
			if err != nil {
				return err
			}
			out = append(out, UnitLabel{Code: code, Label: u.Value.Label, Material: u.Value.Material, Name: m.Value.Name, Lot: m.Value.Lot,
				Storage: m.Value.Storage, Hazards: m.Value.Hazards, OpenedAt: u.Value.OpenedAt})
		}
		return nil
	})
	return out, err
}
