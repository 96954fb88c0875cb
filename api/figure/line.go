package figure

import (
	"fmt"
	"io"
	"math"
	"strings"

	"deltamoor/store"
)

// Line draws how the anchors sit about the line of a calibration. On the scale
// of a session, tens of per mil long, deviations of hundredths cannot be seen,
// so the line itself is the horizontal at 0 and everything is drawn as its
// deviation from it in ‰: each anchor's assigned value with ±2u, each of its
// readings (residual times slope), and the band of ±2u of the line.
// A calibration that states no line is refused.
func Line(w io.Writer, c store.Version[store.Calibration], readings []store.Reading) error {
	b := c.Value
	if b.Line == nil || len(b.Anchors) == 0 {
		return fmt.Errorf("draw the line of %s: found no line or no anchors, expected both", c.Ref)
	}
	type mark struct {
		x, y, u float64
		title   string
		anchor  bool
	}
	var marks []mark
	var xs, ys span
	at := map[string]float64{}
	for _, a := range b.Anchors {
		decimals := decimalsOf(a.StandardUncertainty)
		title := fmt.Sprintf("%s, assigned %s ‰, u = %s ‰; adjusted by the fit to %s ‰", a.Material, signed(a.Value, decimals), signed(a.StandardUncertainty, decimals), signed(a.Adjusted, decimals+1))
		if l := a.LeftOut; l != nil {
			title += fmt.Sprintf("; predicted without it %s ‰, z = %s", signed(l.Predicted, decimals), signed(l.Z, 1))
		}
		m := mark{x: a.Adjusted, y: a.Value - a.Adjusted, u: a.StandardUncertainty, title: title, anchor: true}
		marks = append(marks, m)
		at[a.Material] = a.Adjusted
		xs.add(m.x)
		ys.add(m.y-2*m.u, m.y+2*m.u)
	}
	material := map[int]string{}
	for _, rd := range readings {
		if rd.Quantity == b.Quantity {
			material[rd.Number] = rd.Material
		}
	}
	for _, d := range b.Readings {
		x, ok := at[material[d.Number]]
		if !ok || d.Residual == nil {
			continue
		}
		y := *d.Residual * b.Line.Slope
		marks = append(marks, mark{x: x, y: y, title: fmt.Sprintf("reading %d of %s, %s ‰ from the line", d.Number, material[d.Number], signed(y, 3))})
		ys.add(y)
	}
	ys.add(0)
	p := plot{x: newAxis(xs.low, xs.high, plotLeft, plotRight, 8)}
	// The band: u of the line at a delta, from slope and intercept and their covariance.
	band := func(delta float64) float64 {
		raw := (delta - b.Line.Intercept) / b.Line.Slope
		v := b.Line.UIntercept*b.Line.UIntercept + raw*raw*b.Line.USlope*b.Line.USlope + 2*raw*b.Line.Covariance
		return 2 * math.Sqrt(math.Max(v, 0))
	}
	const steps = 48
	var upper, lower []string
	var curve [][2]float64
	for i := range steps + 1 {
		x := p.x.from + (p.x.to-p.x.from)*float64(i)/steps
		if u := band(x); !math.IsNaN(u) && !math.IsInf(u, 0) {
			curve = append(curve, [2]float64{x, u})
			ys.add(u, -u)
		}
	}
	p.y = newAxis(ys.low, ys.high, plotBottom, plotTop, 6)
	for i := range curve {
		upper = append(upper, px(p.x.at(curve[i][0]))+" "+px(p.y.at(curve[i][1])))
		back := curve[len(curve)-1-i]
		lower = append(lower, px(p.x.at(back[0]))+" "+px(p.y.at(-back[1])))
	}
	name := fmt.Sprintf("%s.%d", store.FormatCode(c.Code), c.Ref.Version)
	p.frame("Anchors about the line of "+name,
		fmt.Sprintf("Deviation of each anchor's assigned value (diamond, with ±2u) and of its readings (circles, set beside it) from the fitted line of %s on %s, against delta; the band is ±2u of the line.", name, b.Scale),
		"δ on "+b.Scale+" / ‰", "deviation from the line / ‰")
	if len(curve) > 1 {
		p.printf(`<path d="M%sL%sZ" fill="%s" fill-opacity="0.14"><title>±2u of the line</title></path>`+"\n", strings.Join(upper, "L"), strings.Join(lower, "L"), accent)
	}
	zero := p.y.at(0)
	p.line(plotLeft, zero, plotRight, zero, accent, 1.5)
	seen := map[float64]int{}
	for _, m := range marks {
		if m.anchor {
			continue
		}
		// Readings of one anchor share its delta: they are set beside it, in order.
		k := seen[m.x]
		seen[m.x]++
		x := p.x.at(m.x) + 9 + 5*float64(k%6)
		if x > plotRight {
			x = p.x.at(m.x) - 9 - 5*float64(k%6)
		}
		p.printf(`<circle cx="%s" cy="%s" r="3" fill="none" stroke="%s" stroke-width="1.2"><title>%s</title></circle>`+"\n", px(x), px(p.y.at(m.y)), quiet, escape(m.title))
	}
	for i, m := range marks {
		if !m.anchor {
			continue
		}
		x, y := p.x.at(m.x), p.y.at(m.y)
		p.printf("<g><title>%s</title>\n", escape(m.title))
		p.line(x, p.y.at(m.y-2*m.u), x, p.y.at(m.y+2*m.u), ink, 1.4)
		for _, end := range []float64{m.y - 2*m.u, m.y + 2*m.u} {
			p.line(x-4, p.y.at(end), x+4, p.y.at(end), ink, 1.4)
		}
		p.printf(`<path d="M%s %sl6 6l-6 6l-6 -6Z" fill="%s"/>`+"\n</g>\n", px(x), px(y-6), ink)
		anchor, dx := "middle", 0.0
		switch {
		case x > plotRight-40:
			anchor, dx = "end", 8
		case x < plotLeft+40:
			anchor, dx = "start", -8
		}
		p.text(x+dx, p.y.at(m.y+2*m.u)-7, anchor, ink, 11, fit(b.Anchors[i].Material, 24))
	}
	return p.writeTo(w)
}
