package registry

import (
	"context"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/store"
)

// ReportFacts are what a report rests on, gathered once for the completeness
// check, the paragraph on methods and the tables: each version once.
type ReportFacts struct {
	Finals       []store.Version[store.Final]
	Samples      []store.Version[store.Sample]
	Calibrations []store.Version[store.Calibration]
	Sessions     []store.Version[store.Session]
	Methods      []store.Version[store.Method]
	Instruments  []store.Version[store.Instrument]
	Anchors      []AnchorFact // by scale and value, lowest first
	Controls     []ControlFact
	Exclusions   []store.Version[store.Exclusion]
	// Sized tells of each session whether its readings state a size or an amount.
	Sized map[string]bool
}

// An AnchorFact is an assigned value that pinned lines of the report.
type AnchorFact struct {
	Value    store.Version[store.Value]
	Material string
	Lot      string
	// Behind are the outside values that a value assigned here comes from.
	Behind   []store.Ref
	Campaign string
	Sessions int
}

// A ControlFact is what a control was found to be, over the sessions of the report.
type ControlFact struct {
	Material, Scale string
	// Accepted (‰) and its u; nil where the control had no value in force.
	Accepted, AcceptedU *float64
	Found               []float64 // one for each session
	Analyses            int
}

// factsOf gathers what final values rest on.
func factsOf(ctx context.Context, v source, finals []store.Ref) (ReportFacts, error) {
	f := ReportFacts{Sized: map[string]bool{}}
	seen := map[store.Ref]bool{}
	anchors, controls := map[store.Ref]int{}, map[string]int{}
	once := func(ref store.Ref) bool {
		if seen[ref] {
			return false
		}
		seen[ref] = true
		return true
	}
	reported := len(finals)
	finals = slices.Clone(finals)
	for i := 0; i < len(finals); i++ {
		final, err := decodeVersion[store.Final](ctx, v, finals[i])
		if err != nil {
			return f, err
		}
		if i < reported {
			f.Finals = append(f.Finals, final)
		}
		for _, in := range final.Inputs {
			switch {
			case in.Kind == store.KindFinal && once(in.Ref): // what a converted value was converted from
				finals = append(finals, in.Ref)
			case in.Kind == store.KindSample && once(in.Ref):
				s, err := decodeVersion[store.Sample](ctx, v, in.Ref)
				if err != nil {
					return f, err
				}
				f.Samples = append(f.Samples, s)
			case in.Kind == store.KindCalibration && once(in.Ref):
				if err := f.calibration(ctx, v, in.Ref, once, anchors, controls); err != nil {
					return f, err
				}
			}
		}
	}
	slices.SortFunc(f.Anchors, func(a, b AnchorFact) int {
		if c := strings.Compare(a.Value.Value.Scale, b.Value.Value.Scale); c != 0 {
			return c
		}
		x, _, _ := numberOf(a.Value)
		y, _, _ := numberOf(b.Value)
		switch {
		case x.Value < y.Value:
			return -1
		case x.Value > y.Value:
			return 1
		}
		return strings.Compare(a.Material, b.Material)
	})
	slices.SortFunc(f.Controls, func(a, b ControlFact) int { return strings.Compare(a.Scale+a.Material, b.Scale+b.Material) })
	return f, nil
}

func (f *ReportFacts) calibration(ctx context.Context, v source, ref store.Ref, once func(store.Ref) bool, anchors map[store.Ref]int, controls map[string]int) error {
	c, err := decodeVersion[store.Calibration](ctx, v, ref)
	if err != nil {
		return err
	}
	f.Calibrations = append(f.Calibrations, c)
	accepted := map[string]store.Version[store.Value]{}
	for _, in := range c.Inputs {
		switch in.Part {
		case "session":
			if once(in.Ref) {
				s, err := decodeVersion[store.Session](ctx, v, in.Ref)
				if err != nil {
					return err
				}
				f.Sessions = append(f.Sessions, s)
				sized := true
				err = v.Readings(ctx, s.Laboratory, s.Code, func(rd store.Reading) error {
					if rd.Role == calib.Sample && rd.Size == nil && !strings.Contains(rd.Extra, "amount") {
						sized = false
					}
					return nil
				})
				if err != nil {
					return err
				}
				f.Sized[s.Code] = sized
			}
		case "method":
			if once(in.Ref) {
				m, err := decodeVersion[store.Method](ctx, v, in.Ref)
				if err != nil {
					return err
				}
				f.Methods = append(f.Methods, m)
			}
		case "instrument":
			if once(in.Ref) {
				m, err := decodeVersion[store.Instrument](ctx, v, in.Ref)
				if err != nil {
					return err
				}
				f.Instruments = append(f.Instruments, m)
			}
		case "exclusion":
			if once(in.Ref) {
				x, err := decodeVersion[store.Exclusion](ctx, v, in.Ref)
				if err != nil {
					return err
				}
				f.Exclusions = append(f.Exclusions, x)
			}
		case "anchor":
			i, ok := anchors[in.Ref]
			if !ok {
				i = len(f.Anchors)
				anchors[in.Ref] = i
				fact, err := anchorFact(ctx, v, in.Ref)
				if err != nil {
					return err
				}
				f.Anchors = append(f.Anchors, fact)
			}
			f.Anchors[i].Sessions++
		case "control":
			value, err := decodeVersion[store.Value](ctx, v, in.Ref)
			if err != nil {
				return err
			}
			accepted[value.Value.Material] = value
		}
	}
	for _, res := range c.Value.Results {
		if res.Role != calib.Control {
			continue
		}
		key := c.Value.Scale + "/" + res.Subject
		i, ok := controls[key]
		if !ok {
			i = len(f.Controls)
			controls[key] = i
			f.Controls = append(f.Controls, ControlFact{Material: res.Subject, Scale: c.Value.Scale})
		}
		if value, ok := accepted[res.Subject]; ok {
			n, _, err := numberOf(value)
			if err != nil {
				return err
			}
			u := value.Value.StandardUncertainty
			f.Controls[i].Accepted, f.Controls[i].AcceptedU = &n.Value, &u
		}
		f.Controls[i].Found = append(f.Controls[i].Found, res.Value)
		f.Controls[i].Analyses += res.N
	}
	return nil
}

func anchorFact(ctx context.Context, v source, ref store.Ref) (AnchorFact, error) {
	value, err := decodeVersion[store.Value](ctx, v, ref)
	if err != nil {
		return AnchorFact{}, err
	}
	fact := AnchorFact{Value: value, Material: value.Value.Material}
	for _, in := range value.Inputs {
		switch in.Kind {
		case store.KindMaterial:
			m, err := decodeVersion[store.Material](ctx, v, in.Ref)
			if err != nil {
				return fact, err
			}
			fact.Lot = m.Value.Lot
		case store.KindAssignment:
			fact.Campaign = in.Code
		}
	}
	n, _, err := numberOf(value)
	if err != nil || value.Value.Sources == nil {
		return fact, err
	}
	for _, t := range n.Terms {
		if behind, ok := anchorRef(t.ID); ok {
			fact.Behind = append(fact.Behind, behind)
		}
	}
	return fact, nil
}
