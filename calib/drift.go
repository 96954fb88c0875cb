package calib

import (
	"fmt"
	"math"
	"slices"
)

// A timeTerm is the drift: its basis functions g_j(t) around the reference
// time, the mean time of the fitted readings.
//
//	linear     t − t_ref
//	quadratic  t − t_ref, (t − t_ref)²
//	bracketed  continuous, piecewise linear between the mean times of the groups
//	           of monitor readings, constant beyond the end ones; Σ of the node
//	           values is 0 by γ_N = −Σ_{j<N} γ_j
type timeTerm struct {
	kind      Drift
	reference float64
	nodes     []float64 // bracketed
}

// columns is the number of free basis functions.
func (t *timeTerm) columns() int {
	switch t.kind {
	case DriftLinear:
		return 1
	case DriftQuadratic:
		return 2
	case DriftBracketed:
		return len(t.nodes) - 1
	}
	return 0
}

// reportedColumns is how many coefficients are reported: for bracketed, one
// more than there are columns.
func (t *timeTerm) reportedColumns() int {
	if t.kind == DriftBracketed {
		return len(t.nodes)
	}
	return t.columns()
}

// names lists what is reported.
func (t *timeTerm) names() []string {
	switch t.kind {
	case DriftLinear:
		return []string{"drift.linear"}
	case DriftQuadratic:
		return []string{"drift.linear", "drift.quadratic"}
	case DriftBracketed:
		names := make([]string, len(t.nodes))
		for i := range names {
			names[i] = fmt.Sprintf("drift.node.%d", i+1)
		}
		return names
	}
	return nil
}

// basis writes the free basis functions at a time.
func (t *timeTerm) basis(time float64, out []float64) {
	d := time - t.reference
	switch t.kind {
	case DriftLinear:
		out[0] = d
	case DriftQuadratic:
		out[0], out[1] = d, float64(d*d)
	case DriftBracketed:
		last := len(t.nodes) - 1
		for j := range out[:last] {
			out[j] = t.hat(time, j) - t.hat(time, last)
		}
	}
}

// reported writes the derivatives by the reported parameters: the weights of
// all nodes for bracketed, the basis itself for the others.
func (t *timeTerm) reported(time float64, out []float64) {
	if t.kind != DriftBracketed {
		t.basis(time, out)
		return
	}
	for j := range t.nodes {
		out[j] = t.hat(time, j)
	}
}

// hat is the weight of node j at a time, by linear interpolation, constant
// beyond the ends.
func (t *timeTerm) hat(time float64, j int) float64 {
	n := t.nodes
	switch {
	case time <= n[0]:
		return indicator(j == 0)
	case time >= n[len(n)-1]:
		return indicator(j == len(n)-1)
	case j > 0 && time >= n[j-1] && time <= n[j]:
		return (time - n[j-1]) / (n[j] - n[j-1])
	case j < len(n)-1 && time >= n[j] && time <= n[j+1]:
		return (n[j+1] - time) / (n[j+1] - n[j])
	}
	return 0
}

func indicator(b bool) float64 {
	if b {
		return 1
	}
	return 0
}

// takeTime makes the drift term for the fitted readings.
func (in *input) takeTime(fitted []int) (timeTerm, error) {
	t := timeTerm{kind: in.model.Drift, reference: math.NaN()}
	if t.kind == DriftNone || t.kind == "" {
		t.kind = DriftNone
		return t, nil
	}
	for i := range in.readings {
		rd := &in.readings[i]
		if rd.usable && (rd.class >= 0 || !rd.Role.material() || rd.Role == Control) && math.IsNaN(rd.time) {
			return t, &TermInputError{Refusal{Place: fmt.Sprintf("readings[%d].time", rd.index), Found: "nothing", Expected: "a time (drift " + string(t.kind) + ")"}}
		}
	}
	var sum float64
	var distinct distinctValues
	for _, i := range fitted {
		sum += in.readings[i].time
		distinct.add(in.readings[i].time)
	}
	t.reference = sum / float64(len(fitted))
	needed := 2
	if t.kind == DriftQuadratic {
		needed = 3
	}
	if distinct.n < needed {
		return t, &TermInputError{Refusal{Place: "model.drift", Found: fmt.Sprintf("%d distinct times of fitted readings", distinct.n), Expected: fmt.Sprintf("at least %d for drift %s", needed, t.kind)}}
	}
	if t.kind == DriftBracketed {
		return t, in.takeNodes(&t)
	}
	return t, nil
}

// takeNodes finds the groups: maximal runs of consecutive monitor readings, or
// of anchor readings where the session has no monitor. Blanks and gas do not
// break a run; an excluded reading of the group's kind neither makes nor breaks one.
func (in *input) takeNodes(t *timeTerm) error {
	monitored := slices.ContainsFunc(in.readings, func(rd reading) bool { return rd.Role == Monitor && rd.class >= 0 })
	var sum float64
	count := 0
	flush := func() {
		if count > 0 {
			t.nodes = append(t.nodes, sum/float64(count))
		}
		sum, count = 0, 0
	}
	for i := range in.readings {
		rd := &in.readings[i]
		member := rd.Role == Anchor
		if monitored {
			member = rd.Role == Monitor
		}
		switch {
		case member && rd.class >= 0:
			sum += rd.time
			count++
		case member || rd.Role == Blank || rd.Role == Gas:
		default:
			flush()
		}
	}
	flush()
	if len(t.nodes) < 2 {
		return &TermInputError{Refusal{Place: "model.drift", Found: fmt.Sprintf("%d group of monitor or anchor readings", len(t.nodes)), Expected: "at least 2 groups (drift bracketed)"}}
	}
	for j := 1; j < len(t.nodes); j++ {
		if !(t.nodes[j] > t.nodes[j-1]) {
			return &TermInputError{Refusal{Place: "model.drift", Found: fmt.Sprintf("two groups at one time, %v", t.nodes[j]), Expected: "groups at increasing times (drift bracketed)"}}
		}
	}
	return nil
}

// distinctValues counts distinct values, up to three.
type distinctValues struct {
	seen [3]float64
	n    int
}

func (d *distinctValues) add(v float64) {
	if d.n < len(d.seen) && !slices.Contains(d.seen[:d.n], v) {
		d.seen[d.n] = v
		d.n++
	}
}
