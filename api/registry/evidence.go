package registry

import (
	"context"
	"encoding/json"
	"fmt"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/calib/assign"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// numberUsed is the number of a material's value as the session used it. Where
// the lot's homogeneity is known, every unit adds its own source, in the part
// of the material's readings that came from it: two sessions with one bottle
// share it, and two bottles do not. Readings whose unit is not recorded share
// one source for the lot and the session.
func (a *assembly) numberUsed(v store.Version[store.Value], role calib.Role) (uncertain.Number, []uncertain.Group, error) {
	n, groups, err := numberOf(v)
	terms := a.unitTerms(v, role)
	if err != nil || terms == nil {
		return n, groups, err
	}
	units, err := uncertain.New(0, terms...)
	if err != nil {
		return n, groups, err
	}
	n, err = uncertain.Linear(0, []float64{1, 1}, []uncertain.Number{n, units})
	return n, groups, err
}

// unitTerms are the units that a value was used from; nil for a value whose
// units do not differ.
func (a *assembly) unitTerms(v store.Version[store.Value], role calib.Role) []uncertain.Term {
	b := v.Value.UBetweenUnits
	if b == nil || b.StandardUncertainty == 0 {
		return nil
	}
	count := map[string]int{}
	total := 0
	for _, rd := range a.readings {
		if rd.Material != v.Value.Material || rd.Role != role || a.excluded[rd.Number] {
			continue
		}
		id := "unit:" + rd.Unit
		if rd.Unit == "" {
			id = "unit:" + v.Value.Material + "/" + a.session.Code
		}
		count[id]++
		total++
	}
	terms := []uncertain.Term{}
	for _, id := range slices.Sorted(mapKeys(count)) {
		terms = append(terms, uncertain.Term{Sensitivity: float64(count[id]) / float64(total),
			Source: uncertain.Source{ID: id, Kind: uncertain.KindUnit, U: b.StandardUncertainty, Group: b.Group, Per: unitPer(b)}})
	}
	return terms
}

// unitPer is ∂u_bb²/∂φ: the group's variance is u_bb² itself.
func unitPer(b *store.ValueComponent) []float64 {
	if b.Group == "" {
		return nil
	}
	return []float64{1}
}

// A portion is one measured test portion of a unit, on the scale of its session.
type portion struct {
	unit  string
	value float64
	mass  float64 // mg, as the readings say; 0 where they do not
}

// A witness is one session's evidence for the value of a material.
type witness struct {
	member
	number   uncertain.Number
	groups   []uncertain.Group
	portions []portion
}

func (w witness) session() string { return w.calibration.Value.Session }

// witnessOf computes a member again from its inputs: its number without the
// method's between-session component, which a campaign estimates itself, and
// the value of every portion, for the study of the units.
func witnessOf(ctx context.Context, v source, m member) (witness, error) {
	w := witness{member: m}
	a, err := assembleStored(ctx, v, m.calibration)
	if err != nil {
		return w, err
	}
	if w.number, w.groups, err = a.numberAlone(m.line); err != nil {
		return w, fmt.Errorf("%s: %w", m.calibration.Ref, err)
	}
	res := m.calibration.Value.Results[m.line]
	own := map[string]portion{} // by the portion's name
	a.readings = slices.Clone(a.readings)
	for i, rd := range a.readings {
		if rd.Material != res.Subject || rd.Role != res.Role {
			continue
		}
		name := strings.Join([]string{rd.Material, rd.Unit, nameOr(rd.Preparation, nameOr("analysis "+rd.Analysis, fmt.Sprint(rd.Number)))}, "\x1f")
		if rd.Preparation == "" && rd.Analysis == "" {
			name = strings.Join([]string{rd.Material, rd.Unit, fmt.Sprint(rd.Number)}, "\x1f")
		}
		p := own[name]
		p.unit = rd.Unit
		if x := amountOf(rd); x > p.mass {
			p.mass = x
		}
		own[name] = p
		a.readings[i].Material = name
	}
	a.controls = nil
	r, _, err := a.result()
	if err != nil {
		return w, err
	}
	for _, s := range r.Subjects {
		if p, ok := own[s.Subject]; ok {
			p.value = s.Value
			w.portions = append(w.portions, p)
		}
	}
	return w, nil
}

// numberAlone is the number of a result without the between-session component.
func (a *assembly) numberAlone(line int) (uncertain.Number, []uncertain.Group, error) {
	between := a.between
	defer func() { a.between = between }()
	a.between = nil
	r, s, err := a.result()
	if err != nil {
		return uncertain.Number{}, nil, err
	}
	if line < 0 || line >= len(r.Subjects) {
		return uncertain.Number{}, nil, fmt.Errorf("no result %d", line)
	}
	return r.Number(line), append(slices.Clone(s.Groups), r.Groups()...), nil
}

func witnesses(ctx context.Context, v source, members []member) ([]witness, error) {
	out := make([]witness, 0, len(members))
	for _, m := range members {
		w, err := witnessOf(ctx, v, m)
		if err != nil {
			return nil, err
		}
		out = append(out, w)
	}
	return out, nil
}

// campaignOf is the engine's input of a campaign's sessions.
func campaignOf(code string, q store.AssignmentQuantity, ws []witness) assign.Campaign {
	c := assign.Campaign{Assignment: code, Policy: policyOf(q)}
	seen := map[string]bool{}
	for _, w := range ws {
		c.Members = append(c.Members, assign.Member{Session: w.session(), Instrument: w.calibration.Value.Instrument, Result: w.number})
		for _, g := range w.groups {
			if !seen[g.ID] {
				seen[g.ID] = true
				c.Groups = append(c.Groups, g)
			}
		}
	}
	return c
}

// amountOf is the mass of a reading's test portion in mg; 0 where it is not said.
func amountOf(rd store.Reading) float64 {
	if rd.Extra == "" {
		return 0
	}
	var extra struct {
		Amount float64 `json:"amount"`
	}
	if json.Unmarshal([]byte(rd.Extra), &extra) != nil || !(extra.Amount > 0) {
		return 0
	}
	return extra.Amount
}

func daysBetween(a, b store.Instant) float64 { return float64(b-a) / 86400e6 }
