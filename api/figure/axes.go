package figure

import "math"

// An axis maps numbers to a coordinate.
type axis struct {
	from, to   float64 // numbers
	start, end float64 // coordinates
	ticks      []float64
	decimals   int
}

// newAxis spans numbers with some room, with about n round ticks.
func newAxis(low, high, start, end float64, n int) axis {
	if !(high > low) {
		room := math.Max(math.Abs(low)*0.01, 0.01)
		low, high = low-room, high+room
	}
	room := (high - low) * 0.06
	a := axis{from: low - room, to: high + room, start: start, end: end}
	raw := (a.to - a.from) / float64(n)
	power := math.Pow(10, math.Floor(math.Log10(raw)))
	step := 10 * power
	for _, m := range []float64{1, 2, 5} {
		if m*power >= raw {
			step = m * power
			break
		}
	}
	a.decimals = min(max(-int(math.Floor(math.Log10(step)+1e-9)), 0), 12)
	for k := math.Ceil(a.from / step); k*step <= a.to; k++ {
		a.ticks = append(a.ticks, k*step)
	}
	return a
}

func (a axis) at(x float64) float64 {
	return a.start + (x-a.from)/(a.to-a.from)*(a.end-a.start)
}

// A plot is a frame with two axes.
type plot struct {
	drawing
	x, y axis
}

// The frame of every plot, in CSS pixels.
const (
	plotWidth, plotHeight = 720.0, 400.0
	plotLeft, plotRight   = 70.0, 700.0
	plotTop, plotBottom   = 30.0, 346.0
)

// frame draws axes, ticks and labels.
func (p *plot) frame(title, description, xLabel, yLabel string) {
	p.open(plotWidth, plotHeight, title, description)
	for _, t := range p.y.ticks {
		y := p.y.at(t)
		p.line(plotLeft, y, plotRight, y, rule, 0.5, ` stroke-opacity="0.6"`)
		p.text(plotLeft-8, y+4, "end", quiet, 11, signed(t, p.y.decimals))
	}
	for _, t := range p.x.ticks {
		x := p.x.at(t)
		p.line(x, plotBottom, x, plotBottom+5, quiet, 1)
		p.text(x, plotBottom+19, "middle", quiet, 11, signed(t, p.x.decimals))
	}
	p.line(plotLeft, plotBottom, plotRight, plotBottom, quiet, 1)
	p.line(plotLeft, plotTop, plotLeft, plotBottom, quiet, 1)
	p.text((plotLeft+plotRight)/2, plotHeight-12, "middle", ink, 12, xLabel)
	p.text(plotLeft, plotTop-12, "start", ink, 12, yLabel)
}

// span widens a range by numbers that are finite.
type span struct {
	low, high float64
	any       bool
}

func (s *span) add(values ...float64) {
	for _, v := range values {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			continue
		}
		if !s.any {
			s.low, s.high, s.any = v, v, true
		}
		s.low, s.high = math.Min(s.low, v), math.Max(s.high, v)
	}
}
