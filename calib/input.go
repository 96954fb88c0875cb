package calib

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

// An input is a session made ready: readings and anchors in a fixed order, so
// that no sum depends on the order they came in.
type input struct {
	session *Session
	model   Model
	policy  Policy
	// readings, sorted by (time, number, material, raw).
	readings []reading
	// inputs are the anchors, sorted by material, and after them the correction
	// inputs, in the session's order; anchors is the first part.
	inputs, anchors []anchor
	// corrected is ∂raw/∂input of each reading, readings × corrections.
	corrected *adjust.Matrix
	sources   *anchorSources
	// vy is the covariance of the anchors' values; exact says it is zero. vyLow
	// is what it is beyond double precision, kept for full covariances only.
	vy, vyLow *adjust.Matrix
	exact     bool
	// covariance and cross are the session's, in sorted order; nil for none.
	covariance, cross *adjust.Matrix
	preparations      int
	// left out for want of a predecessor, by original index.
	withoutPrevious []int
	// control readings of a material that is an anchor, by original index.
	anchorControls []int
}

// A reading is a Reading made ready.
type reading struct {
	*Reading
	index      int // in the session
	position   int // in input.readings
	raw        float64
	time, size float64 // NaN for none
	u          float64 // NaN for none
	// previous is the position of the predecessor, −1 for none.
	previous    int
	previousRaw float64
	usable      bool
	// class is the position in anchors, or len(anchors) + the monitor's, of a
	// reading that is fitted; −1 for others.
	class       int
	preparation int
	// shared says that its preparation has other readings.
	shared bool
}

type anchor struct {
	index    int // in the session
	material string
	value    float64
	terms    []uncertain.Term
}

// prepare orders a validated session.
func prepare(s *Session, m Model, p Policy) (*input, error) {
	in := &input{session: s, model: m, policy: p.withDefaults()}
	in.takeAnchors()
	in.takeReadings()
	if err := in.takeOrder(); err != nil {
		return nil, err
	}
	in.takePreparations()
	in.takeCovariances()
	return in, nil
}

func (in *input) takeAnchors() {
	in.inputs = make([]anchor, 0, len(in.session.Anchors)+len(in.session.Corrections))
	for i, a := range in.session.Anchors {
		in.inputs = append(in.inputs, anchor{index: i, material: a.Material, value: a.Value.Value + 0, terms: sortedTerms(a.Value)})
	}
	in.anchors = in.inputs
	slices.SortFunc(in.anchors, func(a, b anchor) int { return strings.Compare(a.material, b.material) })
	for i, c := range in.session.Corrections {
		in.inputs = append(in.inputs, anchor{index: i, material: c.Name, value: c.Input.Value, terms: sortedTerms(c.Input)})
	}
	in.sources = in.newAnchorSources()
	m := len(in.anchors)
	t := in.sources.matrix(in)
	in.vy, in.exact = adjust.NewMatrix(m, m), true
	dense := in.session.ReadingCovariance != nil || in.session.CrossCovariance != nil
	if dense {
		in.vyLow = adjust.NewMatrix(m, m)
	}
	for i := range in.anchors {
		for j := 0; j <= i; j++ {
			var v, low float64
			if dense {
				v, low = adjust.ExtendedDot(t.Row(i), t.Row(j))
				in.vyLow.Set(i, j, low)
				in.vyLow.Set(j, i, low)
			} else {
				v = adjust.Dot(t.Row(i), t.Row(j))
			}
			in.vy.Set(i, j, v)
			in.vy.Set(j, i, v)
			in.exact = in.exact && v == 0
		}
	}
}

// sortedTerms are the terms of a validated number, sorted where they were not.
func sortedTerms(n uncertain.Number) []uncertain.Term {
	if n.Validate() == nil {
		return n.Terms
	}
	sorted, _ := uncertain.New(n.Value, n.Terms...) // each term was validated
	return sorted.Terms
}

func (in *input) takeReadings() {
	in.readings = make([]reading, len(in.session.Readings))
	value := func(v *float64) float64 {
		if v == nil {
			return math.NaN()
		}
		return *v + 0 // −0 becomes 0
	}
	for i := range in.session.Readings {
		rd := &in.session.Readings[i]
		in.readings[i] = reading{
			Reading: rd, index: i, raw: rd.Raw + 0, time: value(rd.Time), size: value(rd.Size), u: value(rd.StandardUncertainty),
			previous: -1, class: -1, preparation: -1,
		}
	}
	if !slices.IsSortedFunc(in.readings, compareReadings) {
		slices.SortStableFunc(in.readings, compareReadings)
	}
	for i := range in.readings {
		in.readings[i].position = i
	}
	in.takeClasses()
}

// compareReadings is the order of every sum. What follows raw only keeps
// readings apart that differ in nothing before. What is not known, NaN, comes
// first.
func compareReadings(a, b reading) int {
	if c := cmp.Compare(a.time, b.time); c != 0 {
		return c
	}
	if c := compareIDs(a.ID, b.ID); c != 0 {
		return c
	}
	return cmp.Or(
		strings.Compare(a.Subject, b.Subject),
		cmp.Compare(a.raw, b.raw),
		strings.Compare(string(a.Role), string(b.Role)),
		cmp.Compare(a.size, b.size),
		cmp.Compare(a.u, b.u),
		strings.Compare(a.Preparation, b.Preparation),
	)
}

// compareIDs orders "<session>/<number>" by number, and other identities as text.
func compareIDs(a, b string) int {
	if a == b {
		return 0
	}
	i, j := strings.LastIndexByte(a, '/'), strings.LastIndexByte(b, '/')
	if a[:i+1] == b[:j+1] {
		x, errX := strconv.Atoi(a[i+1:])
		y, errY := strconv.Atoi(b[j+1:])
		if errX == nil && errY == nil && x != y {
			return cmp.Compare(x, y)
		}
	}
	return strings.Compare(a, b)
}

// takeClasses gives each reading that may be fitted its material. A material
// that is anchor and monitor is an anchor.
func (in *input) takeClasses() {
	position := make(map[string]int, len(in.anchors))
	for k, a := range in.anchors {
		position[a.material] = k
	}
	var monitors []string
	for i := range in.readings {
		rd := &in.readings[i]
		if rd.Role == Monitor && !rd.Excluded {
			if _, ok := position[rd.Subject]; !ok {
				monitors = append(monitors, rd.Subject)
			}
		}
	}
	slices.Sort(monitors)
	for k, code := range slices.Compact(monitors) {
		position[code] = len(in.anchors) + k
	}
	for i := range in.readings {
		rd := &in.readings[i]
		if k, ok := position[rd.Subject]; ok && !rd.Excluded {
			switch {
			case rd.Role == Anchor, rd.Role == Monitor:
				rd.class = k
			case rd.Role == Control && k < len(in.anchors):
				in.anchorControls = append(in.anchorControls, rd.index)
			}
		}
	}
	slices.Sort(in.anchorControls)
}

// takeOrder finds each reading's predecessor, where memory asks for it, and
// what may be used.
func (in *input) takeOrder() error {
	carry := in.model.Memory == MemoryCarryover
	last := -1
	var declared []int
	for i := range in.readings {
		rd := &in.readings[i]
		rd.usable = rd.Role.measured() && !rd.Excluded
		if !carry {
			continue
		}
		if i > 0 {
			p := &in.readings[i-1]
			if compareIDs(p.ID, rd.ID) == 0 && !(p.time < rd.time) {
				return &OrderError{Refusal{Place: fmt.Sprintf("readings[%d].time", rd.index), Found: fmt.Sprintf("no order between it and readings[%d]", p.index), Expected: "times or numbers that say which reading came before (memory)"}}
			}
		}
		if rd.Role == Gas || rd.Role == Blank {
			continue
		}
		switch {
		case rd.Previous != nil:
			declared = append(declared, i)
		case last >= 0:
			rd.previous, rd.previousRaw = last, in.readings[last].raw
			in.readings[last].standIn(rd)
		default:
			if rd.usable {
				in.withoutPrevious = append(in.withoutPrevious, rd.index)
			}
			rd.usable, rd.class = false, -1
		}
		last = i
	}
	// A declared predecessor becomes a reading of its own, which nothing uses.
	for _, i := range declared {
		rd := &in.readings[i]
		before := reading{Reading: &Reading{Role: Conditioning}, index: -1, raw: *rd.Previous + 0, time: math.NaN(), size: math.NaN(), u: math.NaN(), previous: -1, class: -1, preparation: -1}
		before.ID = strings.TrimPrefix(rd.sourceID(), "reading:") + ".previous"
		before.standIn(rd)
		before.position = len(in.readings)
		rd = &in.readings[i]
		rd.previous, rd.previousRaw = len(in.readings), before.raw
		in.readings = append(in.readings, before)
	}
	return nil
}

// standIn takes u and size from the reading after it where a predecessor
// states none (conditioning, for instance): it is taken to be as good.
func (rd *reading) standIn(after *reading) {
	if math.IsNaN(rd.u) {
		rd.u = after.u
	}
	if math.IsNaN(rd.size) {
		rd.size = after.size
	}
}

// takePreparations numbers the preparations; a reading without one has its
// own. Readings that are not used may be predecessors and are numbered too.
func (in *input) takePreparations() {
	number := map[string]int{}
	count := 0
	var first []int // usable reading of each preparation, −1 for none yet
	for i := range in.readings {
		rd := &in.readings[i]
		k, ok := number[rd.Preparation]
		if rd.Preparation == "" || !ok {
			k = count
			count++
			first = append(first, -1)
			if rd.Preparation != "" {
				number[rd.Preparation] = k
			}
		}
		rd.preparation = k
		switch {
		case !rd.usable:
		case first[k] < 0:
			first[k] = i
		default:
			rd.shared, in.readings[first[k]].shared = true, true
		}
	}
	in.preparations = count
}

func (in *input) takeCovariances() {
	s := in.session
	if len(s.Corrections) > 0 {
		in.corrected = adjust.NewMatrix(len(in.readings), len(s.Corrections))
		for i := range in.readings {
			for j, c := range s.Corrections {
				if k := in.readings[i].index; k >= 0 {
					in.corrected.Set(i, j, c.PerReading[k])
				}
			}
		}
	}
	n, m := len(in.readings), len(in.anchors)
	if s.ReadingCovariance != nil {
		in.covariance = adjust.NewMatrix(n, n)
		for i := range in.readings {
			a := in.readings[i].index
			if a < 0 {
				after := in.readings[slices.IndexFunc(in.readings, func(rd reading) bool { return rd.previous == i })].index
				in.covariance.Set(i, i, s.ReadingCovariance[after][after])
				continue
			}
			for j := range in.readings {
				if b := in.readings[j].index; b >= 0 {
					in.covariance.Set(i, j, s.ReadingCovariance[a][b])
				}
			}
			in.readings[i].u = math.Sqrt(in.covariance.At(i, i))
		}
	}
	if s.CrossCovariance != nil {
		in.cross = adjust.NewMatrix(n, m)
		for i := range in.readings {
			if in.readings[i].index < 0 {
				continue
			}
			for k := range in.anchors {
				in.cross.Set(i, k, s.CrossCovariance[in.readings[i].index][in.anchors[k].index])
			}
		}
	}
}

// sourceID is the identity of a reading's noise.
func (rd *reading) sourceID() string {
	var b strings.Builder
	rd.writeSourceID(&b)
	return b.String()
}

func (rd *reading) writeSourceID(b *strings.Builder) {
	b.WriteString("reading:")
	if rd.ID == "" {
		b.WriteString("#")
		b.WriteString(strconv.Itoa(rd.index))
		return
	}
	b.WriteString(rd.ID)
}

// preparationID is the identity of a preparation's effect.
func (rd *reading) preparationID() string {
	if rd.Preparation == "" {
		return "preparation:" + strings.TrimPrefix(rd.sourceID(), "reading:")
	}
	session := ""
	if i := strings.LastIndexByte(rd.ID, '/'); i >= 0 {
		session = rd.ID[:i+1]
	}
	return "preparation:" + session + rd.Preparation
}
