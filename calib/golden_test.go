package calib

import (
	"bytes"
	"crypto/sha256"
	"encoding/binary"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"math"
	"os"
	"reflect"
	"runtime"
	"strconv"
	"strings"
	"sync"
	"testing"

	"deltamoor/calib/uncertain"
)

var update = flag.Bool("update", false, "write golden files anew")

// The golden set of engine 1: goldenFits sessions made by a generator of exact
// binary fractions, a hash of eight bytes over every bit that comes out of each,
// and some of them in full. What quantiles and p-values (the library's) enter is
// not in the hashes, and is compared to nine digits in those in full. A change of
// any number is a new engine number beside this one; the set of engine 1 stays.
const (
	goldenFits   = 10_000
	goldenEvery  = 250 // of those in full
	goldenHashes = "testdata/golden/engine-1.hashes"
	goldenFull   = "testdata/golden/engine-1.json"
)

// A bitSource draws numbers that are the same on every machine: integers by
// shifts (Marsaglia 2003, doi:10.18637/jss.v008.i14), and fractions of 2²⁰.
type bitSource uint64

func (b *bitSource) next() uint64 {
	x := uint64(*b)
	x ^= x << 13
	x ^= x >> 7
	x ^= x << 17
	*b = bitSource(x)
	return x
}

func (b *bitSource) below(n int) int { return int(b.next() >> 33 % uint64(n)) }

// unit is in ±1, in steps of 2⁻¹⁹.
func (b *bitSource) unit() float64 { return float64(int64(b.next()>>44)-1<<19) / (1 << 19) }

// noise is the sum of four units, about normal with standard deviation 1.15.
func (b *bitSource) noise() float64 { return b.unit() + b.unit() + b.unit() + b.unit() }

// goldenCase makes the i-th session. Products are rounded before they are
// added, so that no machine fuses them.
func goldenCase(i int) (Session, Model, Policy) {
	b := bitSource(0x9E3779B97F4A7C15 ^ uint64(i+1)*0xD1B54A32D192ED03)
	for range 8 {
		b.next()
	}
	m := Model{
		Drift:   []Drift{DriftNone, DriftLinear, DriftQuadratic, DriftBracketed}[i%4],
		Size:    []Size{SizeNone, SizeLinear, SizeInverse, SizeLog, SizeBlank}[i/4%5],
		Memory:  []Memory{MemoryNone, MemoryCarryover}[i/20%2],
		Weights: []Weights{WeightsDeclared, WeightsEqual, WeightsReplicate, WeightsSize}[i/40%4],
	}
	p := Policy{BetweenSession: BetweenSession{Session: "S-1", Scale: "d13C"}}
	if i%3 == 1 {
		p.BetweenSession.StandardUncertainty = 0.03125
		p.BetweenSession.DegreesOfFreedom = float64(b.below(2) * 20)
		p.BetweenSession.Common = b.below(2) == 0
	}
	anchors := 2 + b.below(3)
	if i%97 == 13 {
		anchors, m.AllowSingleAnchor = 1, true
	}
	var s Session
	values := make([]float64, anchors)
	shared := b.below(3) == 0
	for k := range values {
		values[k] = float64(-40+25*k) + 4*b.unit()
		u := float64(b.below(4)) / 32 // 0: exact
		a := assigned(fmt.Sprint("A", k), values[k]+u*b.unit(), u)
		if shared {
			a.Value.Terms = append(a.Value.Terms, uncertain.Term{Source: uncertain.Source{ID: "scale", Kind: uncertain.KindAnchor, U: 0.015625, Group: "laboratory"}, Sensitivity: 1 + values[k]/64})
		}
		s.Anchors = append(s.Anchors, a)
	}
	if shared {
		s.Groups = []uncertain.Group{uncertain.NewGroup("laboratory", 1.0/4096, 6)}
	}
	rounds := 3 + b.below(3)
	prepared := m.Weights != WeightsDeclared && b.below(4) == 0
	before := 0.0
	put := func(subject string, role Role, true_ float64) *Reading {
		time, size := float64(len(s.Readings))/4, 4+3*b.unit()
		if b.below(50) == 0 {
			time = float64(b.below(9)) // out of order
		}
		f := 0.375 + float64(0.96875*true_) + time/64 + size/32
		raw := f + float64(before/64) + float64(b.noise()/16)
		before = raw
		u := float64(1+b.below(3)) / 16
		rd := s.read(subject, role, raw, u).at(time).sized(size)
		if prepared {
			rd.of(fmt.Sprint(subject, "/", len(s.Readings)/6))
		}
		rd.Excluded = b.below(25) == 0
		return rd
	}
	if b.below(2) == 0 {
		put("rinse", Conditioning, 0)
	} else {
		first := put("A0", Anchor, values[0])
		previous := values[0]
		first.Previous, first.Excluded = &previous, false
	}
	monitor, control := b.below(2) == 0, b.below(2) == 0
	for round := range rounds {
		for k, v := range values {
			put(fmt.Sprint("A", k), Anchor, v)
		}
		if monitor {
			put("M", Monitor, 7)
		}
		if control {
			put("C", Control, -12)
		}
		put(fmt.Sprint("P", round%3), Sample, -30+float64(10*b.unit()))
		put(fmt.Sprint("P", round%2), Sample, 5+float64(50*b.unit()))
	}
	if m.Weights == WeightsDeclared && i%5 == 2 {
		nu := float64(3 + b.below(30))
		m.DeclaredDF = &nu
	}
	n := len(s.Readings)
	if m.Weights == WeightsDeclared && i%11 == 3 {
		for x := range n {
			row := make([]float64, n)
			for y := range row {
				row[y] = 1.0 / 1024
			}
			row[x] = float64(*s.Readings[x].StandardUncertainty**s.Readings[x].StandardUncertainty) + 1.0/512
			s.ReadingCovariance = append(s.ReadingCovariance, row)
		}
	}
	if i%7 == 5 {
		per := make([]float64, n)
		for x := range per {
			per[x] = b.unit()
		}
		s.Corrections = []Correction{{Name: "H3", PerReading: per, Input: uncertain.Number{Value: 4,
			Terms: []uncertain.Term{{Source: uncertain.Source{ID: "correction:h3/1", Kind: uncertain.KindCorrection, U: 0.03125}, Sensitivity: 1}}}}}
	}
	return s, m, p
}

// A numberSink takes every number of a result in one order, with its name.
type numberSink func(name string, v float64)

// goldenNumbers walks through everything of a result but what quantiles enter.
func goldenNumbers(r *Result, put numberSink) {
	slice := func(name string, v []float64) {
		for i, x := range v {
			put(fmt.Sprint(name, " ", i), x)
		}
	}
	matrix := func(name string, m [][]float64) {
		for i, row := range m {
			slice(fmt.Sprint(name, " ", i), row)
		}
	}
	optional := func(name string, v *float64) {
		if v != nil {
			put(name, *v)
		}
	}
	put("condition number", r.ConditionNumber)
	for _, p := range r.Parameters {
		put(p.Name, p.Value)
		put("u "+p.Name, p.StandardUncertainty)
	}
	matrix("covariance", r.Covariance)
	matrix("noise covariance", r.NoiseCovariance)
	matrix("anchor sensitivity", r.AnchorSensitivities)
	matrix("anchor derivative", r.AnchorDerivatives)
	matrix("correction sensitivity", r.CorrectionSensitivities)
	matrix("correction derivative", r.CorrectionDerivatives)
	for _, v := range r.Variances {
		put("variance "+v.Name, v.Value)
		put("ν "+v.Name, v.DegreesOfFreedom)
	}
	matrix("variance covariance", r.VarianceCovariance)
	optional("reference time", r.ReferenceTime)
	optional("reference size", r.ReferenceSize)
	optional("chi-square", r.ChiSquare)
	put("degrees of freedom", float64(r.DegreesOfFreedom))
	optional("Birge ratio", r.BirgeRatio)
	optional("residual sd", r.ResidualSD)
	if l := r.LackOfFit; l != nil {
		slice("lack of fit", []float64{l.F, l.NumeratorDF, l.DenominatorDF})
	}
	optional("AICc", r.AICc)
	if l := r.Line; l != nil {
		slice("line", []float64{l.Slope, l.Intercept, l.USlope, l.UIntercept, l.Covariance})
	}
	if l := r.Blank; l != nil {
		slice("blank", []float64{l.Size, l.RawDelta, l.USize, l.URawDelta, l.Covariance})
	}
	for _, n := range r.Needs {
		put("need "+n.Term, n.DeltaChiSquare)
		optional("need F "+n.Term, n.F)
		optional("need AICc with "+n.Term, n.AICcWith)
		optional("need AICc without "+n.Term, n.AICcWithout)
	}
	for _, x := range r.Readings {
		name := fmt.Sprint("reading ", x.Index, " ")
		optional(name+"predicted", x.Predicted)
		optional(name+"residual", x.Residual)
		optional(name+"standardised", x.StandardizedResidual)
		optional(name+"studentised", x.StudentizedResidual)
		optional(name+"leverage", x.Leverage)
		optional(name+"Cook", x.CooksDistance)
	}
	for _, a := range r.Anchors {
		put("adjusted "+a.Material, a.Adjusted)
		if l := a.LeftOut; l != nil {
			slice("left out "+a.Material, []float64{l.Predicted, l.StandardUncertainty, l.Z})
		}
	}
	for _, x := range r.Subjects {
		name := x.Subject + " " + string(x.Role)
		slice(name, []float64{float64(x.N), x.Value, x.StandardUncertainty, x.Expanded.DegreesOfFreedom, x.BetweenSession})
		slice(name+" gradient", x.Gradient)
		slice(name+" coefficient", x.Coefficients)
		slice(name+" other coefficient", x.OtherCoefficients)
		for _, c := range x.Sources {
			slice(name+" source "+c.ID, []float64{c.Sensitivity, c.U, c.VarianceShare})
		}
	}
}

// goldenQuantiles are the numbers that the library's quantiles enter.
func goldenQuantiles(r *Result, put numberSink) {
	if r.PValue != nil {
		put("p", *r.PValue)
	}
	if r.LackOfFit != nil {
		put("p of lack of fit", r.LackOfFit.PValue)
	}
	for _, n := range r.Needs {
		put("p of need "+n.Term, n.PValue)
	}
	for _, x := range r.Subjects {
		put(x.Subject+" "+string(x.Role)+" k", x.Expanded.CoverageFactor)
		put(x.Subject+" "+string(x.Role)+" U", x.Expanded.U)
	}
}

// refusalOf names a refusal by its types and places: its words may get better.
func refusalOf(err error) string {
	if list, ok := err.(interface{ Unwrap() []error }); ok {
		var parts []string
		for _, e := range list.Unwrap() {
			parts = append(parts, refusalOf(e))
		}
		return strings.Join(parts, "; ")
	}
	place := ""
	if placed := (interface{ Refused() Refusal })(nil); errors.As(err, &placed) {
		place = placed.Refused().Place
	}
	return fmt.Sprintf("%s at %s", reflect.TypeOf(err).Elem().Name(), place)
}

// goldenResult fits the i-th case and hashes the bits of what comes out.
func goldenResult(i int) (hash [8]byte, r *Result, err error) {
	s, m, p := goldenCase(i)
	r, err = FitWith("1", s, m, p)
	h := sha256.New()
	if err != nil {
		h.Write([]byte(refusalOf(err)))
	} else {
		var bits [8]byte
		goldenNumbers(r, func(name string, v float64) {
			h.Write([]byte(name))
			binary.BigEndian.PutUint64(bits[:], math.Float64bits(v))
			h.Write(bits[:])
		})
	}
	copy(hash[:], h.Sum(nil))
	return hash, r, err
}

// A goldenFit is one fit in full. Bits are hexadecimal floating point, quantiles
// decimal.
type goldenFit struct {
	Case      int               `json:"case"`
	Model     Model             `json:"model"`
	Refusal   string            `json:"refusal,omitempty"`
	Bits      map[string]string `json:"bits,omitempty"`
	Quantiles map[string]string `json:"quantiles,omitempty"`
}

func fullFit(i int, r *Result, err error) goldenFit {
	_, m, _ := goldenCase(i)
	g := goldenFit{Case: i, Model: m, Bits: map[string]string{}, Quantiles: map[string]string{}}
	if err != nil {
		g.Refusal = refusalOf(err)
		return g
	}
	goldenNumbers(r, func(name string, v float64) { g.Bits[name] = strconv.FormatFloat(v, 'x', -1, 64) })
	goldenQuantiles(r, func(name string, v float64) { g.Quantiles[name] = strconv.FormatFloat(v, 'g', 12, 64) })
	return g
}

// TestGoldenSetOfEngine1 computes every fit of the set again.
func TestGoldenSetOfEngine1(t *testing.T) {
	hashes := make([]byte, 8*goldenFits)
	full := make([]goldenFit, goldenFits/goldenEvery)
	var wait sync.WaitGroup
	var mu sync.Mutex
	refused := map[string]int{}
	for w := range runtime.GOMAXPROCS(0) {
		wait.Add(1)
		go func() {
			defer wait.Done()
			for i := w; i < goldenFits; i += runtime.GOMAXPROCS(0) {
				h, r, err := goldenResult(i)
				copy(hashes[8*i:], h[:])
				if i%goldenEvery == 0 {
					full[i/goldenEvery] = fullFit(i, r, err)
				}
				if err != nil {
					mu.Lock()
					refused[refusalOf(err)]++
					mu.Unlock()
				}
			}
		}()
	}
	wait.Wait()
	total := 0
	for name, n := range refused {
		t.Logf("%d × %s", n, name)
		total += n
	}
	if total > goldenFits/4 {
		t.Errorf("%d of %d sessions are refused: the set guards too little", total, goldenFits)
	}
	if *update {
		writeGolden(t, hashes, full)
	}
	want, err := os.ReadFile(goldenHashes)
	if err != nil {
		t.Fatal(err)
	}
	if len(want) != len(hashes) {
		t.Fatalf("%d bytes of hashes, want %d", len(want), len(hashes))
	}
	wrong := 0
	for i := range goldenFits {
		if !bytes.Equal(hashes[8*i:8*i+8], want[8*i:8*i+8]) {
			if wrong++; wrong <= 5 {
				_, m, _ := goldenCase(i)
				t.Errorf("case %d (%s): other bits than engine 1 made", i, m.label())
			}
		}
	}
	if wrong > 0 {
		t.Errorf("%d of %d fits have other bits than engine 1 made", wrong, goldenFits)
	}
	compareFull(t, full)
}

func compareFull(t *testing.T, full []goldenFit) {
	t.Helper()
	data, err := os.ReadFile(goldenFull)
	if err != nil {
		t.Fatal(err)
	}
	var want []goldenFit
	if err := json.Unmarshal(data, &want); err != nil {
		t.Fatal(err)
	}
	if len(want) != len(full) {
		t.Fatalf("%d fits in full, want %d", len(want), len(full))
	}
	for i, w := range want {
		g := full[i]
		if g.Refusal != w.Refusal || len(g.Bits) != len(w.Bits) {
			t.Errorf("case %d: refusal %q and %d numbers, want %q and %d", g.Case, g.Refusal, len(g.Bits), w.Refusal, len(w.Bits))
		}
		for name, bits := range w.Bits {
			if g.Bits[name] != bits {
				t.Errorf("case %d: %s is %s, want %s", g.Case, name, g.Bits[name], bits)
			}
		}
		for name, text := range w.Quantiles {
			a, _ := strconv.ParseFloat(text, 64)
			b, err := strconv.ParseFloat(g.Quantiles[name], 64)
			if err != nil || math.Abs(a-b) > 1e-9*math.Max(math.Abs(a), 1e-3) {
				t.Errorf("case %d: %s is %s, want %s", g.Case, name, g.Quantiles[name], text)
			}
		}
	}
}

func writeGolden(t *testing.T, hashes []byte, full []goldenFit) {
	t.Helper()
	text, err := json.Marshal(full)
	if err != nil {
		t.Fatal(err)
	}
	text = bytes.ReplaceAll(text, []byte(`{"case"`), []byte("\n{\"case\""))
	for name, data := range map[string][]byte{goldenHashes: hashes, goldenFull: append(text, '\n')} {
		if err := os.WriteFile(name, data, 0o644); err != nil {
			t.Fatal(err)
		}
	}
}
