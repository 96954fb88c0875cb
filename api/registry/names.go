package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/store"
)

// resolveReadings turns names into records: materials by code, name or alias,
// samples by code or label, roles by the file, else by the method, else sample.
// What is unknown or could be two things is complained of, never guessed.
func resolveReadings(ctx context.Context, v *store.View, laboratory string, method store.Method, table ReadingTable) ([]store.Reading, error) {
	type subject struct {
		material, sample string
		body             *store.Material
		complaint        *Complaint
	}
	subjects := map[string]subject{}
	units := map[[2]string]string{} // by label and material: two materials may each have a "bottle 1"
	var c complaints
	out := make([]store.Reading, 0, len(table.Readings))
	quantities := map[string]store.MethodQuantity{}
	var known []string
	for _, q := range method.Quantities {
		quantities[q.Quantity] = q
		known = append(known, q.Quantity)
	}
	for i, raw := range table.Readings {
		place := func(field string) string { return table.Place(i, field) }
		s, ok := subjects[raw.Name]
		if !ok {
			material, sample, body, complaint, err := resolveSubject(ctx, v, laboratory, raw.Name)
			if err != nil {
				return nil, err
			}
			s = subject{material, sample, body, complaint}
			subjects[raw.Name] = s
		}
		q, ok := quantities[raw.Quantity]
		if !ok {
			c.add(place("quantity"), quote(raw.Quantity), "a quantity of the method: %s", strings.Join(known, ", "))
			continue
		}
		role := calib.Role(raw.Role)
		if raw.Role != "" && !slices.Contains(roleWords, raw.Role) {
			c.add(place("role"), quote(raw.Role), "one of %s", strings.Join(roleWords, ", "))
			continue
		}
		nameless := role == calib.Blank || role == calib.Gas || role == calib.Conditioning
		if s.complaint != nil && !(nameless && s.material == "" && s.sample == "") {
			k := *s.complaint
			k.Place = place("name")
			c = append(c, k)
			continue
		}
		if role == "" {
			role = roleOf(q, s.material)
		}
		if s.material != "" {
			if k := roleForbidden(s.body, s.material, raw.Quantity, role); k != "" {
				c.add(place("role"), quote(string(role)), "%s", k)
			}
		} else if role == calib.Anchor || role == calib.Control || role == calib.Monitor {
			c.add(place("name"), quote(raw.Name), "a reference material for the role %s; this is a sample", role)
		}
		rd := store.Reading{Analysis: raw.Analysis, Preparation: raw.Preparation, Position: raw.Position, Peak: raw.Peak,
			Quantity: raw.Quantity, Role: role, Material: s.material, Sample: s.sample, Compound: raw.Compound, Group: raw.Group,
			At: raw.Time, Raw: raw.Raw, U: raw.U, Size: raw.Size}
		if raw.U != nil && *raw.U < 0 {
			c.add(place("u"), fmt.Sprint(*raw.U), "a standard uncertainty of 0 or more")
		}
		for field, x := range map[string]*float64{"width": raw.Width, "intensity": raw.Intensity, "gas_intensity": raw.GasIntensity, "gas_ratio": raw.GasRatio} {
			if x != nil && !(*x > 0) {
				c.add(place(field), fmt.Sprint(*x), "a number above 0")
			}
		}
		if raw.Unit != "" {
			code, ok := units[[2]string{raw.Unit, s.material}]
			if !ok {
				var complaint *Complaint
				var err error
				if code, complaint, err = resolveUnit(ctx, v, laboratory, raw.Unit, s.material); err != nil {
					return nil, err
				}
				if complaint != nil {
					complaint.Place = place("unit")
					c = append(c, *complaint)
					continue
				}
				units[[2]string{raw.Unit, s.material}] = code
			}
			rd.Unit = code
		}
		widthBy := raw.WidthBy
		if raw.Width == nil {
			widthBy = ""
		}
		extra, err := store.Extra(map[string]any{"amount": raw.Amount, "retention": raw.Retention, "width": raw.Width, "width_by": widthBy, "warning": raw.Warning,
			"intensity": raw.Intensity, "gas_intensity": raw.GasIntensity, "gas_ratio": raw.GasRatio})
		if err != nil {
			return nil, err
		}
		rd.Extra = extra
		out = append(out, rd)
	}
	if len(c) > MaxComplaints*20 {
		c = c[:MaxComplaints*20]
	}
	return out, Complain("these readings cannot be imported; nothing was stored", c)
}

func roleOf(q store.MethodQuantity, material string) calib.Role {
	for _, mr := range q.Roles {
		if material != "" && strings.EqualFold(mr.Material, material) {
			return mr.Role
		}
	}
	return calib.Sample
}

// roleForbidden says why a material may not have a role for a quantity; "" when it may.
func roleForbidden(m *store.Material, code, quantity string, role calib.Role) string {
	if m == nil || role == calib.Sample || role == calib.Conditioning {
		return ""
	}
	for _, allowed := range m.Roles {
		if allowed.Quantity == quantity && !slices.Contains(allowed.Roles, role) {
			words := make([]string, len(allowed.Roles))
			for i, r := range allowed.Roles {
				words[i] = string(r)
			}
			return fmt.Sprintf("a role that material %s may have for %s: %s", code, quantity, nameOr(strings.Join(words, ", "), "none"))
		}
	}
	return ""
}

// resolveSubject finds what a name in a table stands for.
func resolveSubject(ctx context.Context, v *store.View, laboratory, name string) (material, sample string, body *store.Material, complaint *Complaint, err error) {
	var candidates []store.Key
	for _, lab := range []string{laboratory, store.Common} {
		keys, err := v.Resolve(ctx, lab, store.KindMaterial, name)
		if err != nil {
			return "", "", nil, nil, err
		}
		if exact := slices.IndexFunc(keys, func(k store.Key) bool { return k.Code == name }); exact >= 0 {
			keys = keys[exact : exact+1]
		}
		candidates = append(candidates, keys...)
		if len(keys) > 0 {
			break
		}
	}
	if code, err := store.ParseCode(name); err == nil && code[0] == 'P' {
		name = code
	}
	samples, err := v.Resolve(ctx, laboratory, store.KindSample, name)
	if err != nil {
		return "", "", nil, nil, err
	}
	candidates = append(candidates, samples...)
	switch {
	case len(candidates) == 0:
		return "", "", nil, &Complaint{Found: quote(name), Expected: "the code, name or alias of a registered material, or the code or label of a sample on the list"}, nil
	case len(candidates) > 1:
		return "", "", nil, &Complaint{Found: quote(name), Expected: "a name that means one thing; this could be " + (&AmbiguousError{Name: name, Candidates: candidates}).candidates()}, nil
	case candidates[0].Kind == store.KindSample:
		return "", candidates[0].Code, nil, nil, nil
	}
	raw, err := v.Newest(ctx, candidates[0])
	if err != nil {
		return "", "", nil, nil, err
	}
	m, err := store.Decode[store.Material](raw)
	return candidates[0].Code, "", &m.Value, nil, err
}

func resolveUnit(ctx context.Context, v *store.View, laboratory, name, material string) (string, *Complaint, error) {
	lookFor := name
	if code, err := store.ParseCode(name); err == nil && code[0] == 'B' {
		lookFor = code
	}
	keys, err := v.Resolve(ctx, laboratory, store.KindUnit, lookFor)
	if err != nil {
		return "", nil, err
	}
	var fit []store.Key
	var unit store.Unit
	for _, key := range keys {
		it, err := newest[store.Unit](ctx, v, key)
		if err != nil {
			return "", nil, err
		}
		if it.Value.Material == material {
			fit, unit = append(fit, key), it.Value
		}
	}
	switch {
	case len(fit) == 0:
		return "", &Complaint{Found: quote(name), Expected: "the code or label of a unit of " + nameOr(material, "a material")}, nil
	case len(fit) > 1:
		return "", &Complaint{Found: quote(name), Expected: "a label that means one unit; use its code"}, nil
	case unit.State == "empty" || unit.State == "disposed" || unit.State == "quarantined":
		return "", &Complaint{Found: quote(name), Expected: "a unit that can be used; this one is " + unit.State}, nil
	}
	return fit[0].Code, nil, nil
}
