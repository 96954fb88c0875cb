package registry

import (
	"context"
	"fmt"

	"deltamoor/calib"
	"deltamoor/store"
)

// seatingFlags says what is missing before any fit is tried.
func seatingFlags(readings []store.Reading, method store.Method) []calib.Flag {
	var flags []calib.Flag
	for _, q := range method.Quantities {
		anchors, controls := map[string]int{}, map[string]int{}
		var lastStandard, lastSample, any int
		for _, rd := range readings {
			if rd.Quantity != q.Quantity {
				continue
			}
			any++
			switch rd.Role {
			case calib.Anchor:
				anchors[rd.Material]++
				lastStandard = rd.Number
			case calib.Control:
				controls[rd.Material]++
				lastStandard = rd.Number
			case calib.Monitor:
				lastStandard = rd.Number
			case calib.Sample:
				lastSample = rd.Number
			}
		}
		if any == 0 {
			flags = append(flags, calib.Flag{Code: "quantity_missing", Severity: calib.Note, Message: fmt.Sprintf("The method measures %s, and no reading has it.", q.Quantity)})
			continue
		}
		if len(anchors) < 2 {
			flags = append(flags, calib.Flag{Code: "too_few_anchors", Severity: calib.Serious,
				Message: fmt.Sprintf("%s has %d anchors; a line needs two that span the samples.", q.Quantity, len(anchors)), Advice: "Check names and roles, or add the missing anchor."})
		}
		if len(controls) == 0 {
			flags = append(flags, calib.Flag{Code: "no_control", Severity: calib.Warning,
				Message: fmt.Sprintf("%s has no control: nothing checks the line independently.", q.Quantity), Advice: "Run at least one material of known value that is no anchor."})
		}
		if lastSample > lastStandard {
			flags = append(flags, calib.Flag{Code: "sample_after_last_standard", Severity: calib.Warning, Readings: []int{lastSample},
				Message: fmt.Sprintf("Samples for %s follow the last reference material, so drift behind it is not seen.", q.Quantity), Advice: "End every session with anchors."})
		}
	}
	return flags
}

// overlapFlags names the sessions of the same instrument that ran at the same time.
func overlapFlags(ctx context.Context, v *store.View, laboratory, code string, s store.Session) ([]calib.Flag, error) {
	if s.StartedAt == nil || s.EndedAt == nil {
		return nil, nil
	}
	seen := map[string]bool{code: true}
	var others []string
	for _, name := range store.SessionDays(s.Instrument, *s.StartedAt, *s.EndedAt) {
		keys, err := v.Resolve(ctx, laboratory, store.KindSession, name)
		if err != nil {
			return nil, err
		}
		for _, key := range keys {
			if seen[key.Code] {
				continue
			}
			seen[key.Code] = true
			other, err := newest[store.Session](ctx, v, key)
			if err != nil {
				return nil, err
			}
			o := other.Value
			if o.StartedAt != nil && o.EndedAt != nil && *o.StartedAt <= *s.EndedAt && *s.StartedAt <= *o.EndedAt {
				others = append(others, store.FormatCode(key.Code))
			}
		}
	}
	if len(others) == 0 {
		return nil, nil
	}
	return []calib.Flag{{Code: "overlapping_session", Severity: calib.Warning,
		Message: fmt.Sprintf("%s was measuring session %s at the same time.", s.Instrument, short(others, 3)),
		Advice:  "One instrument runs one series at a time: check the instrument, the clock and whether the file was exported twice."}}, nil
}
