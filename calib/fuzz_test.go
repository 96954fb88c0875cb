package calib

import (
	"encoding/binary"
	"fmt"
	"math"
	"slices"
	"testing"

	"deltamoor/calib/uncertain"
)

// A byteSource reads a session from bytes; past the end it reads zeros.
type byteSource struct{ data []byte }

func (b *byteSource) next() byte {
	if len(b.data) == 0 {
		return 0
	}
	x := b.data[0]
	b.data = b.data[1:]
	return x
}

// number is mostly an ordinary one with two decimals, now and then a mad one or
// any eight bytes.
func (b *byteSource) number() float64 {
	switch k := b.next(); k {
	case 1:
		mad := []float64{0, math.Copysign(0, -1), math.NaN(), math.Inf(1), math.Inf(-1), 1e300, -1e300, 1e-300, 1e60, -1e59, 1e-59, 1e-150, 1e30, -1e-30, math.SmallestNonzeroFloat64, math.MaxFloat64}
		return mad[int(b.next())%len(mad)]
	case 2:
		var raw [8]byte
		for i := range raw {
			raw[i] = b.next()
		}
		return math.Float64frombits(binary.BigEndian.Uint64(raw[:]))
	default:
		return float64(int16(uint16(k)<<8|uint16(b.next()))) / 512
	}
}

// positive is mostly above zero.
func (b *byteSource) positive() float64 {
	switch k := b.next(); k {
	case 1:
		return b.number()
	default:
		return float64(1+int(k)) / 256
	}
}

func (b *byteSource) optional(value func() float64) *float64 {
	if b.next() == 1 {
		return nil
	}
	x := value()
	return &x
}

// session makes a session, a model and a policy of whatever the bytes say.
func (b *byteSource) session() (Session, Model, Policy) {
	pick := func(words ...string) string { return words[int(b.next())%len(words)] }
	m := Model{Drift: Drift(pick("", "none", "linear", "quadratic", "bracketed")), Size: Size(pick("", "none", "linear", "inverse", "log", "blank")),
		Memory: Memory(pick("", "none", "carryover", "none")), Weights: Weights(pick("", "declared", "equal", "replicate", "size"))}
	flags := b.next()
	m.AllowSingleAnchor = flags&1 == 1
	if flags&6 == 6 {
		m.DeclaredDF = b.optional(b.positive)
	}
	var p Policy
	if flags&24 == 24 {
		p = Policy{Probability: b.positive() / 2, CoverageFactor: b.positive(), LeftOutLimit: b.positive(), MinimumSpan: b.positive(), MinimumAnchors: int(b.next()),
			BetweenSession: BetweenSession{StandardUncertainty: b.positive(), DegreesOfFreedom: b.positive(), Session: "S", Scale: "D", Common: b.next()%2 == 0}}
	}
	var s Session
	anchors := int(b.next()) % 5
	for i := range anchors {
		a := AssignedValue{Material: fmt.Sprint("A", i), Value: uncertain.Exact(b.number())}
		if b.next()%3 > 0 {
			a.Value.Terms = []uncertain.Term{{Source: uncertain.Source{ID: "anchor:" + a.Material, Kind: uncertain.KindAnchor, U: b.positive()}, Sensitivity: 1}}
		}
		if flags&32 != 0 {
			a.Value.Terms = append(a.Value.Terms, uncertain.Term{Source: uncertain.Source{ID: "scale", Kind: uncertain.KindAnchor, U: 0.1}, Sensitivity: b.number()})
		}
		s.Anchors = append(s.Anchors, a)
	}
	roles := []Role{Anchor, Anchor, Anchor, Anchor, Anchor, Sample, Sample, Monitor, Control, Blank, Gas, Conditioning}
	for n := 0; len(b.data) > 0 && n < 40; n++ {
		k := b.next()
		role := roles[int(k)%len(roles)]
		subject := fmt.Sprint("A", n%max(1, anchors))
		switch role {
		case Sample:
			subject = fmt.Sprint("P", k%3)
		case Monitor, Control:
			subject = fmt.Sprint("M", k%2)
		}
		rd := Reading{ID: fmt.Sprintf("S/%d", n+1), Subject: subject, Role: role, Raw: b.number(), StandardUncertainty: b.optional(b.positive), Time: b.optional(b.number), Size: b.optional(b.positive)}
		extra := b.next()
		if extra&3 == 3 {
			rd.Preparation = fmt.Sprint(subject, "/", extra>>6)
		}
		rd.Excluded = extra&28 == 28
		if extra&96 == 96 {
			rd.Previous = b.optional(b.number)
		}
		s.Readings = append(s.Readings, rd)
	}
	return s, m, p
}

// FuzzFit: whatever the session, a fit answers with finite numbers whose shares
// sum to one, or refuses by name; readings in another order change no bit.
func FuzzFit(f *testing.F) {
	for i := range 24 {
		b := bitSource(i*7919 + 1)
		seed := []byte{byte(i % 5), byte(i % 6), byte(i % 4), byte(i / 5), byte(i), 2 + byte(i%3)}
		for range 300 {
			seed = append(seed, byte(b.next()>>40))
		}
		f.Add(seed)
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		s, m, p := (&byteSource{data}).session()
		r, err := Fit(s, m, p)
		if err != nil {
			if !named(err) {
				t.Fatalf("unnamed error %v", err)
			}
			return
		}
		if bad := insane(r); len(bad) > 0 {
			t.Fatalf("%s: %v", m.label(), bad[:min(4, len(bad))])
		}
		turned := s
		turned.Readings = slices.Clone(s.Readings)
		slices.Reverse(turned.Readings)
		again, err := Fit(turned, m, p)
		if err != nil {
			t.Fatalf("%s: refused in the other order: %v", m.label(), err)
		}
		for i, x := range r.Parameters {
			if y := again.Parameters[i]; math.Float64bits(x.Value) != math.Float64bits(y.Value) || math.Float64bits(x.StandardUncertainty) != math.Float64bits(y.StandardUncertainty) {
				t.Fatalf("%s: %s is %v in one order and %v in the other", m.label(), x.Name, x, y)
			}
		}
		if c, err := r.Companion(); err != nil {
			if !named(err) {
				t.Fatalf("companion: unnamed error %v", err)
			}
		} else if math.IsNaN(c.Parameters[0].Value) || math.IsNaN(c.Parameters[1].Value) {
			t.Fatalf("companion: %v", c.Parameters)
		}
	})
}
