package figure

import (
	"fmt"
	"io"
	"math"

	"deltamoor/calib"
	"deltamoor/store"
)

// Residuals draws the residuals of a calibration in the order of measurement:
// standardized ones where the fit states them (then with lines at ±2), else in
// ‰ of the raw delta. Readings without a time stand by their number. A
// calibration without residuals is refused.
func Residuals(w io.Writer, c store.Version[store.Calibration], readings []store.Reading) error {
	b := c.Value
	byNumber := map[int]store.Reading{}
	timed := true
	var origin store.Instant
	first := true
	for _, rd := range readings {
		if rd.At != nil && (first || *rd.At < origin) {
			origin, first = *rd.At, false
		}
		if rd.Quantity == b.Quantity {
			byNumber[rd.Number] = rd
			timed = timed && rd.At != nil
		}
	}
	standardized := true
	n := 0
	for _, d := range b.Readings {
		if d.Residual != nil {
			n++
			standardized = standardized && d.Standardized != nil
		}
	}
	if n == 0 {
		return fmt.Errorf("draw the residuals of %s: found none", c.Ref)
	}
	type mark struct {
		x, y  float64
		role  calib.Role
		title string
		far   bool
	}
	var marks []mark
	var xs, ys span
	for _, d := range b.Readings {
		if d.Residual == nil {
			continue
		}
		rd := byNumber[d.Number]
		m := mark{x: float64(d.Number), y: *d.Residual, role: rd.Role}
		if timed && rd.At != nil {
			m.x = float64(*rd.At-origin) / 3600e6
		}
		m.title = fmt.Sprintf("reading %d, %s, %s: residual %s ‰", d.Number, rd.Material+rd.Sample, rd.Role, signed(*d.Residual, 3))
		if d.Standardized != nil {
			m.title += ", standardized " + signed(*d.Standardized, 2)
		}
		if standardized {
			m.y = *d.Standardized
			m.far = math.Abs(m.y) > 2
		}
		if math.IsNaN(m.y) || math.IsInf(m.y, 0) {
			continue
		}
		marks = append(marks, m)
		xs.add(m.x)
		ys.add(m.y)
	}
	ys.add(0)
	if standardized {
		ys.add(-2.2, 2.2)
	}
	p := plot{x: newAxis(xs.low, xs.high, plotLeft, plotRight, 8), y: newAxis(ys.low, ys.high, plotBottom, plotTop, 6)}
	xLabel, yLabel := "number of the reading", "residual of the raw delta / ‰"
	if timed {
		xLabel = "hours since the first reading"
	}
	if standardized {
		yLabel = "standardized residual"
	}
	name := fmt.Sprintf("%s.%d", store.FormatCode(c.Code), c.Ref.Version)
	p.frame("Residuals of "+name, fmt.Sprintf("Residuals of the readings in the fit of %s on %s, in the order of measurement: diamonds are anchors, squares monitors, circles others.", name, b.Scale), xLabel, yLabel)
	p.line(plotLeft, p.y.at(0), plotRight, p.y.at(0), accent, 1.5)
	if standardized {
		for _, limit := range []float64{-2, 2} {
			p.line(plotLeft, p.y.at(limit), plotRight, p.y.at(limit), quiet, 1, ` stroke-dasharray="5 4"`)
		}
	}
	for _, m := range marks {
		x, y, fill := p.x.at(m.x), p.y.at(m.y), ink
		if m.far {
			fill = warn
		}
		var shape string
		switch m.role {
		case calib.Anchor:
			shape = fmt.Sprintf(`<path d="M%s %sl5 5l-5 5l-5 -5Z" fill="%s">`, px(x), px(y-5), fill)
		case calib.Monitor:
			shape = fmt.Sprintf(`<path d="M%s %sh8v8h-8Z" fill="%s">`, px(x-4), px(y-4), fill)
		default:
			shape = fmt.Sprintf(`<path d="M%s %sa4 4 0 1 0 8 0a4 4 0 1 0 -8 0Z" fill="%s">`, px(x-4), px(y), fill)
		}
		p.printf("%s<title>%s</title></path>\n", shape, escape(m.title))
	}
	return p.writeTo(w)
}
