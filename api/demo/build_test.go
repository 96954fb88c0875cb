package demo

import (
	"context"
	"math"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

const testSeed = 20250303

// place builds the laboratory of a seed in a store of its own.
func place(t testing.TB, seed uint64) (*Place, *Summary) {
	t.Helper()
	p, err := Open(t.Context(), store.Options{Database: t.TempDir()}, seed)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := p.Close(); err != nil {
			t.Error(err)
		}
	})
	s, err := Build(t.Context(), p.Registry, p.Clock, seed)
	if err != nil {
		t.Fatal(err)
	}
	return p, s
}

// A kept laboratory is built once and only read.
type kept struct {
	once    sync.Once
	place   *Place
	summary *Summary
	err     error
}

var (
	keptMu sync.Mutex
	keptOf = map[uint64]*kept{}
)

// laboratory is the laboratory of a seed for tests that only read it.
func laboratory(t testing.TB, seed uint64) (*Place, *Summary) {
	t.Helper()
	keptMu.Lock()
	k, ok := keptOf[seed]
	if !ok {
		k = &kept{}
		keptOf[seed] = k
	}
	keptMu.Unlock()
	k.once.Do(func() {
		ctx := context.Background() // it outlives the test that asks first
		if k.place, k.err = Open(ctx, store.Options{Database: filepath.Join(keptFolder, strconv.FormatUint(seed, 10))}, seed); k.err == nil {
			k.summary, k.err = Build(ctx, k.place.Registry, k.place.Clock, seed)
		}
	})
	if k.err != nil {
		t.Fatal(k.err)
	}
	return k.place, k.summary
}

func built(t testing.TB) (*Place, *Summary) {
	t.Helper()
	return laboratory(t, testSeed)
}

func TestBuiltLaboratoryVerifiesClean(t *testing.T) {
	t.Parallel()
	p, _ := built(t)
	v, err := p.Registry.Verify(t.Context(), registry.VerifyRequest{})
	if err != nil {
		t.Fatal(err)
	}
	for _, f := range v.Findings {
		t.Error(f)
	}
	// Calibrations: three value sessions of solids in two quantities, the first routine
	// session drawn up twice, the second once, three of waters, two routine ones of
	// which one is declined. Six solids and three waters have assigned values. The
	// campaign has three sessions in two quantities and gives two values; the laser
	// three sessions and three values. Five mornings have an H3 factor. The session
	// of June has two calibrations, four final values and as many lines.
	if want := 3*2 + 2*2 + 2 + 3 + 2 + 6*2 + 3 + 28 + 28 + 3*2 + 2 + 3 + 3 + 5 + 2 + 4 + 4; v.Recomputed != want || v.Equal != want {
		t.Errorf("recomputed %d numbers, %d of them to the bit; want %d of %d", v.Recomputed, v.Equal, want, want)
	}
	if len(v.Laboratories) != 2 {
		t.Errorf("verified %d laboratories, want common and %s", len(v.Laboratories), Laboratory)
	}
}

func TestEqualSeedsGiveEqualLedgers(t *testing.T) {
	t.Parallel()
	roots := func(p *Place) map[string][32]byte {
		v, err := p.Registry.Verify(t.Context(), registry.VerifyRequest{})
		if err != nil {
			t.Fatal(err)
		}
		out := map[string][32]byte{}
		for _, l := range v.Laboratories {
			out[l.Laboratory] = l.Root
		}
		return out
	}
	p, _ := built(t)
	again, _ := place(t, testSeed)
	one, two := roots(p), roots(again)
	for _, laboratory := range []string{store.Common, Laboratory} {
		if one[laboratory] == [32]byte{} || one[laboratory] != two[laboratory] {
			t.Errorf("%s: roots %x and %x of one seed, want them equal", laboratory, one[laboratory], two[laboratory])
		}
	}
	other, _ := laboratory(t, 1000)
	if three := roots(other); three[Laboratory] == one[Laboratory] {
		t.Errorf("another seed gives the same root %x", one[Laboratory])
	}
}

func TestReportedDeltasRecoverTheTruth(t *testing.T) {
	_, s := built(t)
	n := 0
	for _, r := range s.Reports {
		for _, l := range r.Lines {
			n++
			true_, ok := s.True(l.Sample, l.Scale)
			if !ok {
				t.Errorf("%s: no truth for sample %s on %s", l.Code, l.Sample, l.Scale)
				continue
			}
			if d := l.Value - true_; math.Abs(d) > 4*l.StandardUncertainty {
				t.Errorf("%s %s on %s: %.4f ‰, truth %.4f ‰, difference %.1f u", l.Code, l.Label, l.Scale, l.Value, true_, d/l.StandardUncertainty)
			}
		}
	}
	if n != 32 {
		t.Errorf("%d deltas were reported, want 14 solids twice and 4 waters", n)
	}
}

func TestAssignedValuesRecoverTheTruth(t *testing.T) {
	p, s := built(t)
	for _, standard := range standards() {
		for scale := range standard.near {
			v, err := registry.One[store.Value](t.Context(), p.Registry, s.Auditor, store.KindValue, registry.ValueCode(standard.code, scale, ""), 0, store.Moment{})
			if err != nil {
				t.Fatal(err)
			}
			if v.State != store.Approved || v.Value.Basis != "assignment" || len(v.Value.Sources) < 4 {
				t.Errorf("%s: %s, basis %q, %d sources; want an approved assignment with its sources", v.Code, v.State, v.Value.Basis, len(v.Value.Sources))
			}
			true_, _ := s.True(standard.code, scale)
			if d := number(t, v.Value.Value) - true_; math.Abs(d) > 4*v.Value.StandardUncertainty {
				t.Errorf("%s: %s ‰, truth %.4f ‰, difference %.1f u", v.Code, v.Value.Value, true_, d/v.Value.StandardUncertainty)
			}
		}
	}
}

func number(t testing.TB, d store.Decimal) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(string(d), 64)
	if err != nil {
		t.Fatal(err)
	}
	return x
}

func TestBadJarIsFlaggedBeforeItsExclusionAndNotAfter(t *testing.T) {
	_, s := built(t)
	disagrees := func(flags []calib.Flag) bool {
		return slices.ContainsFunc(flags, func(f calib.Flag) bool {
			return f.Code == "anchor_disagrees" && slices.ContainsFunc(f.Readings, func(n int) bool { return slices.Contains(s.Jar.Readings, n) })
		})
	}
	for _, q := range []string{"d13C", "d15N"} {
		if !disagrees(s.Jar.Before[q]) {
			t.Errorf("%s: %s is not flagged before its exclusion; flags are %v", q, s.Jar.Material, s.Jar.Before[q])
		}
		for anchor, z := range s.Jar.LeftOut[q] {
			if bad := s.Jar.LeftOut[q][s.Jar.Material]; anchor != s.Jar.Material && math.Abs(z) >= math.Abs(bad) {
				t.Errorf("%s: %s stands off by z = %.1f, the bad %s by %.1f only", q, anchor, z, s.Jar.Material, bad)
			}
		}
		for _, f := range s.Jar.After[q] {
			if f.Code == "anchor_disagrees" || f.Severity == calib.Serious || f.Subject == s.Jar.Material {
				t.Errorf("%s: after the exclusion there is still %v", q, f)
			}
		}
	}
	if n := len(s.Jar.Readings); n != 8 {
		t.Errorf("%d readings were left out, want 4 portions in two quantities", n)
	}
}

func TestBadPeakIsLeftOutWithoutItsCarbon(t *testing.T) {
	p, s := built(t)
	i := slices.IndexFunc(s.Sessions, func(x Session) bool { return x.Code == s.Peak.Session })
	uses := func(quantity string, reading int) bool {
		c, err := registry.One[store.Calibration](t.Context(), p.Registry, s.Auditor, store.KindCalibration, s.Sessions[i].Calibrations[quantity], 0, store.Moment{})
		if err != nil {
			t.Fatal(err)
		}
		for _, r := range c.Value.Results {
			if r.Subject == s.Peak.Sample {
				return slices.Contains(r.Readings, reading)
			}
		}
		t.Fatalf("sample %s has no %s", s.Peak.Sample, quantity)
		return false
	}
	if uses("d15N", s.Peak.Reading) {
		t.Errorf("the nitrogen value uses reading %d, which was excluded", s.Peak.Reading)
	}
	if !uses("d13C", s.Peak.CarbonReading) {
		t.Errorf("the carbon value does not use reading %d of the same analysis", s.Peak.CarbonReading)
	}
}

func TestOneLabelOfTwoClientsStaysTwoSamples(t *testing.T) {
	_, s := built(t)
	if len(s.SameLabel.Samples) != 2 || s.SameLabel.Samples[0] == s.SameLabel.Samples[1] {
		t.Fatalf("samples called %s: %v, want two", s.SameLabel.Label, s.SameLabel.Samples)
	}
	for _, want := range []string{s.SameLabel.Samples[0], s.SameLabel.Samples[1], `"A1"`} {
		if !strings.Contains(s.SameLabel.Refusal, want) {
			t.Errorf("the refusal does not name %s:\n%s", want, s.SameLabel.Refusal)
		}
	}
	for i, r := range s.Reports {
		for _, l := range r.Lines {
			if l.Label == sameName && l.Sample != s.SameLabel.Samples[i] {
				t.Errorf("the report to %s has sample %s under %s, want %s", r.Value.Client, l.Sample, l.Label, s.SameLabel.Samples[i])
			}
			if s.Samples[l.Sample].Client != r.Value.Client {
				t.Errorf("the report to %s has sample %s of %s", r.Value.Client, l.Sample, s.Samples[l.Sample].Client)
			}
		}
	}
}

func TestRejectedSessionGivesNoValueAndStays(t *testing.T) {
	p, s := built(t)
	n := 0
	err := p.Registry.Readings(t.Context(), s.Auditor, s.Rejected.Session, func(store.Reading) error { n++; return nil })
	if err != nil || n == 0 {
		t.Errorf("the rejected session has %d readings, error %v; want them all there", n, err)
	}
	if !slices.ContainsFunc(s.Rejected.Flags, func(f calib.Flag) bool { return f.Code == "slope_outside_limits" }) {
		t.Errorf("the leak is not flagged: %v", s.Rejected.Flags)
	}
	for _, r := range s.Reports {
		for _, l := range r.Lines {
			tr, err := p.Registry.Trace(t.Context(), s.Auditor, "", l.Code, 0)
			if err != nil {
				t.Fatal(err)
			}
			if slices.ContainsFunc(tr.Nodes, func(n registry.TraceNode) bool { return n.Code == s.Rejected.Session }) {
				t.Errorf("%s rests on the rejected session", l.Code)
			}
		}
	}
}

func TestTracesEndInDefinitionsPublishedValuesAndMaterials(t *testing.T) {
	p, s := built(t)
	for _, r := range s.Reports {
		for _, l := range r.Lines {
			tr, err := p.Registry.Trace(t.Context(), s.Auditor, "", l.Code, 0)
			if err != nil {
				t.Fatal(err)
			}
			leaf := make([]bool, len(tr.Nodes))
			for i := range leaf {
				leaf[i] = true
			}
			for _, e := range tr.Edges {
				leaf[e.From] = false
			}
			published, definition := 0, 0
			for i, n := range tr.Nodes {
				switch n.Kind {
				case store.KindScale:
					definition++
				case store.KindMaterial, store.KindSample, store.KindInstrument, store.KindRelation:
				default:
					if leaf[i] {
						t.Errorf("%s: the chain breaks off at %s", l.Code, n.Ref)
					}
				}
				if n.Kind == store.KindValue && n.Laboratory == store.Common {
					published++
				}
				// The next day's determination of a factor follows one that held that morning, and
				// the method has a further issue since June.
				later := n.State == store.Superseded && (n.Kind == store.KindFactor || n.Kind == store.KindMethod && n.Code == bulkCN && n.Ref.Version == 1)
				if n.Kind.Decided() && n.State != store.Approved && !later {
					t.Errorf("%s rests on %s, which is %s", l.Code, n.Ref, n.State)
				}
			}
			if published < 2 || definition < 1 || tr.Cut != 0 {
				t.Errorf("%s: %d published values, %d scales, %d cut; want at least two anchors and a scale, all followed", l.Code, published, definition, tr.Cut)
			}
		}
	}
}

func TestNoTokenOfAKnownSeedIsLeft(t *testing.T) {
	p, s := built(t)
	page, err := p.Registry.Tokens(t.Context(), s.Administrator, registry.Query{})
	if err != nil {
		t.Fatal(err)
	}
	if len(page.Items) == 0 {
		t.Error("no token is on record, want the first one, revoked")
	}
	for _, token := range page.Items {
		if !token.Value.Revoked {
			t.Errorf("token %s is alive", token.Code)
		}
	}
}

func BenchmarkBuild(b *testing.B) {
	for b.Loop() {
		p, err := Open(b.Context(), store.Options{Database: b.TempDir()}, testSeed)
		if err != nil {
			b.Fatal(err)
		}
		if _, err := Build(b.Context(), p.Registry, p.Clock, testSeed); err != nil {
			b.Fatal(err)
		}
		if err := p.Close(); err != nil {
			b.Fatal(err)
		}
	}
}

// The furnace's files hold what H3+ ions add; the factor of the morning takes
// it out, and the waters come back as they are. Every hydrogen delta carries it.
func TestHydrogenRestsOnTheFactorOfItsMorning(t *testing.T) {
	p, s := built(t)
	checked := 0
	for _, r := range s.Reports {
		for _, l := range r.Lines {
			if l.Quantity != "d2H" {
				continue
			}
			tr, err := p.Registry.Trace(t.Context(), s.Auditor, "", l.Code, 0)
			if err != nil {
				t.Fatal(err)
			}
			for _, e := range tr.Edges {
				if e.Part == "factor" && tr.Nodes[e.From].Depth == 2 {
					checked++
					if e.Share == nil || !(*e.Share > 0 && *e.Share < 1) {
						t.Errorf("%s: the factor's share of the variance is %v", l.Code, e.Share)
					}
				}
			}
		}
	}
	if checked == 0 {
		t.Error("no reported hydrogen delta rests on a factor")
	}
}
