package registry

import (
	"cmp"
	"fmt"
	"slices"

	"deltamoor/calib"
	"deltamoor/calib/correct"
)

// resolutionFlags mark neighbouring peaks of one analysis that are not resolved
// as the method asks (IUPAC 1993, doi:10.1351/pac199365040819, 3.7).
func (a *assembly) resolutionFlags() []calib.Flag {
	limit := a.limits.MinimumResolution
	if limit == 0 {
		return nil
	}
	type peak struct {
		correct.ChromatographicPeak
		by     string
		number int
		name   string
	}
	analyses := map[string][]peak{}
	for _, rd := range a.readings {
		e, err := extras(rd)
		if err != nil || e.Retention == nil || e.Width == nil {
			continue
		}
		key := rd.Analysis
		if key == "" && rd.Position != nil {
			key = fmt.Sprintf("position %d", *rd.Position)
		}
		if key == "" {
			continue
		}
		name := rd.Compound
		if name == "" {
			name = fmt.Sprintf("reading %d", rd.Number)
		}
		analyses[key] = append(analyses[key], peak{correct.ChromatographicPeak{Retention: *e.Retention, Width: *e.Width}, e.WidthBy, rd.Number, name})
	}
	var flags []calib.Flag
	for _, key := range slices.Sorted(mapKeys(analyses)) {
		peaks := analyses[key]
		slices.SortFunc(peaks, func(a, b peak) int {
			return cmp.Or(cmp.Compare(a.Retention, b.Retention), cmp.Compare(a.number, b.number))
		})
		for i := 1; i < len(peaks); i++ {
			first, second := peaks[i-1], peaks[i]
			resolution, err := correct.Resolution(first.ChromatographicPeak, second.ChromatographicPeak, correct.Width(nameOr(first.by, string(correct.BaseWidth))))
			if err != nil || resolution >= limit {
				continue
			}
			flags = append(flags, calib.Flag{Code: "peaks_not_resolved", Severity: calib.Warning, Readings: []int{first.number, second.number},
				Message: fmt.Sprintf("%s and %s are resolved by %.2f only, from widths at %s; the method asks for %.2f.", first.name, second.name, resolution,
					map[string]string{"half-height": "half height"}[first.by]+map[string]string{"": "the base", "base": "the base"}[first.by], limit),
				Advice: "Each pulls the other's delta towards its own: integrate again, or leave both out with the cause overlap."})
		}
	}
	return flags
}
