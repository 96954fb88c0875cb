package registry_test

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

func keysOf[T any](m map[string]T) map[string]bool {
	keys := map[string]bool{}
	for k := range m {
		keys[k] = true
	}
	return keys
}

// With exact readings and two anchors every session is the exact line through
// them, so a value τ anywhere below is the affine function of the two primary
// values that leaves HI-0 where it is: a change Δ of LO-0 moves it by
// Δ·(HI − τ)/(HI − LO), at any depth. (MID-0 would bend that; it is on the line
// in truth and moves with it here, by its own proposal.)
func TestShiftsThroughChainsAgreeWithTheAnalyticAnswer(t *testing.T) {
	for _, depth := range []int{3, 6, 12} {
		t.Run(fmt.Sprint(depth), func(t *testing.T) {
			c := openChain(t, depth, 0, calib.WeightsDeclared)
			const delta, lo, hi, mid = 0.2, -30, 10, -9
			affine := func(x float64) float64 { return delta * (hi - x) / (hi - lo) }
			all, summary := c.preview(registry.Proposal{Full: true, Values: []registry.ProposedValue{moved("LO-0", "-29.800"),
				moved("MID-0", fmt.Sprintf("%.6f", mid+affine(mid)))}})
			for g, rep := range c.reports {
				a, ok := all[rep.Lines[0].Code]
				if !ok {
					t.Fatalf("the delta of generation %d is not affected", g)
				}
				want := affine(c.truth[c.samples[g]])
				if math.Abs(a.Shift-want) > 1e-9 {
					t.Errorf("generation %d: shift %v, the analytic answer is %v", g, a.Shift, want)
				}
				if a.Full == nil || math.Abs(a.Full.Shift-want) > 1e-9 || math.Abs(a.Full.Fixed-want) > 1e-9 {
					t.Errorf("generation %d: re-evaluated %+v, the analytic answer is %v", g, a.Full, want)
				}
				if math.Abs(a.Parts[0]+a.Parts[1]-a.Shift) > 1e-12 || a.Parts[0] == 0 || a.Parts[1] == 0 {
					t.Errorf("generation %d: parts %v do not add to the shift %v", g, a.Parts, a.Shift)
				}
				if math.Abs(a.Ratio-math.Abs(a.Shift)/rep.Lines[0].StandardUncertainty) > 1e-12 {
					t.Errorf("generation %d: ratio %v of a shift of %v with u %v", g, a.Ratio, a.Shift, rep.Lines[0].StandardUncertainty)
				}
			}
			// Two sessions in each generation with the next two standards (three in the
			// first) and a sample each.
			want := registry.RevisionSummary{Laboratory: "TST", Position: summary.Position, Passed: 0, Judged: 0,
				Calibrations: registry.Counts{Moved: int64(2 * depth)}, Results: registry.Counts{Moved: int64(2*3*depth + 2)},
				Values: registry.Counts{Moved: int64(2*depth + 1)}, Finals: registry.Counts{Moved: int64(depth)}, Reported: registry.Counts{Moved: int64(depth)}}
			got := summary
			got.Largest, got.Spread = nil, [6]int64{}
			got.Calibrations.Over, got.Results.Over, got.Values.Over, got.Finals.Over, got.Reported.Over = 0, 0, 0, 0, 0
			if diff := cmp.Diff(want, got); diff != "" {
				t.Errorf("summary (-want +got):\n%s", diff)
			}
		})
	}
}

func TestAffectedSetsEqualBruteForce(t *testing.T) {
	for _, depth := range []int{3, 6, 12} {
		c := openChain(t, depth, 0.03, calib.WeightsReplicate)
		all := c.everything()
		version := func(code string) func(store.Raw) bool {
			return func(raw store.Raw) bool {
				return raw.Kind == store.KindValue && raw.Code == registry.ValueCode(code, chainScale, "")
			}
		}
		for _, material := range []string{"LO-0", "MID-0", "HI-1", fmt.Sprintf("LO-%d", depth-1), fmt.Sprintf("LO-%d", depth), "ALT-HI"} {
			got, _ := c.preview(registry.Proposal{Values: []registry.ProposedValue{moved(material, "0.5")}})
			if diff := cmp.Diff(bruteForce(all, version(material)), keysOf(got)); diff != "" {
				t.Errorf("depth %d, %s (-brute force +statement):\n%s", depth, material, diff)
			}
		}
		if depth == 12 {
			continue // one depth is enough for the rest, which does not depend on it
		}
		// A bottle since a date: the calibrations of sessions that started then or
		// later and in which it was used, found from the readings themselves.
		for _, since := range []*store.Instant{nil, instant(c.day(0, 1)), instant(c.day(1, 0))} {
			for name, bottle := range c.bottles {
				got, _ := c.preview(registry.Proposal{Units: []store.SuspectUnit{{Unit: bottle, Since: since}}})
				want := bruteForce(all, func(raw store.Raw) bool { return c.usedUnit(raw, bottle, since) })
				if diff := cmp.Diff(want, keysOf(got)); diff != "" {
					t.Errorf("depth %d, %s since %v (-brute force +statement):\n%s", depth, name, since, diff)
				}
			}
		}
	}
}

func instant(at time.Time) *store.Instant { i := store.InstantOf(at); return &i }

func (c *chain) usedUnit(raw store.Raw, unit string, since *store.Instant) bool {
	if raw.Kind != store.KindCalibration {
		return false
	}
	body, err := store.Decode[store.Calibration](raw)
	c.must(err)
	used := false
	c.must(c.store.Read(c.ctx, func(ctx context.Context, v *store.View) error {
		return v.Readings(ctx, "TST", body.Value.Session, func(rd store.Reading) error {
			used = used || rd.Unit == unit
			return nil
		})
	}))
	return used && (since == nil || *body.Value.StartedAt >= *since)
}

// The prediction misses the re-evaluation at fixed variances by the second
// order: half the change leaves a quarter of the miss. Estimating the variances
// again changes more than that only where they depend on the values.
func TestPredictionAgreesWithReevaluationToSecondOrder(t *testing.T) {
	for _, weights := range []calib.Weights{calib.WeightsDeclared, calib.WeightsReplicate, calib.WeightsEqual} {
		t.Run(string(weights), func(t *testing.T) {
			c := openChain(t, 3, 0.05, weights)
			miss := func(delta float64) map[string]float64 {
				all, _ := c.preview(registry.Proposal{Full: true, Values: []registry.ProposedValue{moved("LO-0", fmt.Sprintf("%.6f", -30+delta))}})
				out := map[string]float64{}
				for name, a := range all {
					if a.Full == nil || a.Full.Why != "" {
						t.Fatalf("%s is not re-evaluated: %+v", name, a.Full)
					}
					out[name] = math.Abs(a.Shift - a.Full.Fixed)
					if a.Shift == 0 || !(a.Full.StandardUncertainty > 0) {
						t.Errorf("%s: shift %v, new u %v", name, a.Shift, a.Full.StandardUncertainty)
					}
				}
				return out
			}
			whole, half := miss(0.8), miss(0.4)
			worst := 0.0
			for name, m := range whole {
				worst = max(worst, m)
				if m > 1e-7 && !(half[name] < 0.3*m) {
					t.Errorf("%s: halving the change leaves %.3g of a miss of %.3g, want a quarter", name, half[name], m)
				}
			}
			if worst < 1e-7 {
				t.Errorf("the largest miss is %v: this registry does not show the second order", worst)
			}
		})
	}
}

// The full re-evaluation without any change is what is stored.
func TestReevaluationOfNoChangeChangesNothing(t *testing.T) {
	c := openChain(t, 3, 0.05, calib.WeightsReplicate)
	all, _ := c.preview(registry.Proposal{Full: true, Values: []registry.ProposedValue{moved("LO-0", "-30.000")}})
	if len(all) == 0 {
		t.Fatal("nothing rests on LO-0")
	}
	for name, a := range all {
		if a.Full == nil || math.Abs(a.Full.Shift) > 1e-12 || math.Abs(a.Full.Fixed) > 1e-9 || math.Abs(a.Full.StandardUncertainty-a.StandardUncertainty) > 1e-12 {
			t.Errorf("%s: %+v with u %v", name, a.Full, a.StandardUncertainty)
		}
	}
}

func TestWithdrawnValueLeavesItsAnchorOut(t *testing.T) {
	c := openChain(t, 3, 0.05, calib.WeightsDeclared)
	all, summary := c.preview(registry.Proposal{Full: true, Values: []registry.ProposedValue{{Material: "MID-0", Scale: chainScale, Withdrawn: true}}})
	a := all[c.reports[0].Lines[0].Code]
	// The same sessions fitted without the anchor's readings, by the exclusion of every one of them.
	var exclusions []store.RevisionExclusion
	c.must(c.store.Read(c.ctx, func(ctx context.Context, v *store.View) error {
		sessions, _, err := v.List(ctx, store.ListQuery{Laboratory: "TST", Kind: store.KindSession, Newest: true})
		for _, s := range sessions {
			x := store.RevisionExclusion{Session: s.Code}
			if err := v.Readings(ctx, "TST", s.Code, func(rd store.Reading) error {
				if rd.Material == "MID-0" {
					x.Readings = append(x.Readings, rd.Number)
				}
				return nil
			}); err != nil {
				return err
			}
			if len(x.Readings) > 0 {
				exclusions = append(exclusions, x)
			}
		}
		return err
	}))
	if len(exclusions) != 2 {
		t.Fatalf("%d sessions read MID-0, want the 2 of the first generation", len(exclusions))
	}
	left, _ := c.preview(registry.Proposal{Full: true, Exclusions: exclusions})
	b := left[c.reports[0].Lines[0].Code]
	if a.Full == nil || b.Full == nil || math.Abs(a.Full.Shift-b.Full.Shift) > 1e-12 || a.Full.Shift == 0 {
		t.Errorf("withdrawn %+v, readings left out %+v: want the same shift", a.Full, b.Full)
	}
	// For the plain line the left-out prediction gives the fit without the anchor,
	// up to the second order of the change.
	if d := math.Abs(a.Shift - a.Full.Fixed); d > 0.05*math.Abs(a.Full.Fixed) {
		t.Errorf("predicted %v, without the anchor %v", a.Shift, a.Full.Fixed)
	}
	// What stands on nothing but two anchors cannot do without one.
	all, summary = c.preview(registry.Proposal{Values: []registry.ProposedValue{{Material: "ALT-HI", Scale: chainScale, Withdrawn: true}}})
	if a := all[c.other.Lines[0].Code]; a.Why == "" || summary.Reported.Untold != 1 || summary.Calibrations.Untold != 1 {
		t.Errorf("two anchors less one: %+v, %+v", a, summary.Reported)
	}
}

func TestThresholdAndRankingKeepWhatMattersMost(t *testing.T) {
	c := openChain(t, 6, 0.03, calib.WeightsReplicate)
	p := registry.Proposal{Values: []registry.ProposedValue{moved("LO-0", "-29.95")}, Top: 5}
	all, summary := c.preview(p)
	var ratios []float64
	for _, a := range all {
		if a.Kind != store.KindCalibration {
			ratios = append(ratios, a.Ratio)
		}
	}
	slices.Sort(ratios)
	slices.Reverse(ratios)
	if len(summary.Largest) != 5 {
		t.Fatalf("%d ranked, want 5", len(summary.Largest))
	}
	for i, a := range summary.Largest {
		if a.Ratio != ratios[i] {
			t.Errorf("rank %d has ratio %v, want %v", i, a.Ratio, ratios[i])
		}
	}
	p.Threshold = ratios[len(ratios)/2]
	some, again := c.preview(p)
	want := 0
	for name, a := range all {
		if a.Ratio >= p.Threshold {
			want++
			if _, ok := some[name]; !ok {
				t.Errorf("%s with ratio %v is missing", name, a.Ratio)
			}
		}
	}
	if len(some) != want || want == len(all) || want == 0 {
		t.Errorf("%d beyond the threshold, want %d of %d", len(some), want, len(all))
	}
	if diff := cmp.Diff(summary, again); diff != "" {
		t.Errorf("the threshold changes the counts (-without +with):\n%s", diff)
	}
}

func TestChangeFromADateLeavesEarlierSessions(t *testing.T) {
	c := openChain(t, 3, 0.03, calib.WeightsDeclared)
	q := moved("LO-0", "-29.9")
	q.From = instant(c.day(0, 1))
	all, summary := c.preview(registry.Proposal{Values: []registry.ProposedValue{q}})
	// Of the two sessions with LO-0 the second started at that moment.
	if summary.Calibrations.Moved != 1+2*2 {
		t.Errorf("%d calibrations moved, want 5", summary.Calibrations.Moved)
	}
	whole, _ := c.preview(registry.Proposal{Values: []registry.ProposedValue{moved("LO-0", "-29.9")}})
	code := c.reports[2].Lines[0].Code
	if r := all[code].Shift / whole[code].Shift; !(r > 0.2 && r < 0.8) {
		t.Errorf("the shift is %v of the whole: want about half, from one of two sessions", r)
	}
}

func TestProposalsAreRefusedWithThePlace(t *testing.T) {
	c := openChain(t, 3, 0.03, calib.WeightsDeclared)
	for name, q := range map[string]struct {
		p    registry.Proposal
		want string
	}{
		"nothing":       {registry.Proposal{}, "0 changes"},
		"unknown":       {registry.Proposal{Values: []registry.ProposedValue{moved("NOBODY", "1")}}, "body.values[0]"},
		"two answers":   {registry.Proposal{Values: []registry.ProposedValue{{Material: "LO-0", Scale: chainScale, Value: "1", Withdrawn: true}}}, "exactly one"},
		"no u":          {registry.Proposal{Values: []registry.ProposedValue{{Material: "LO-0", Scale: chainScale, Value: "1"}}}, "body.values[0].stated"},
		"not a number":  {registry.Proposal{Values: []registry.ProposedValue{moved("LO-0", "one")}}, "body.values[0].value"},
		"unknown unit":  {registry.Proposal{Units: []store.SuspectUnit{{Unit: "B0000000000"}}}, "body.units[0].unit"},
		"same version":  {registry.Proposal{Methods: []registry.ProposedMethod{{Method: "C-solid", Version: 1, Use: 1}}}, "another version"},
		"no reading":    {registry.Proposal{Exclusions: []store.RevisionExclusion{{Session: "S"}}}, "body.exclusions[0].session"},
		"bad threshold": {registry.Proposal{Threshold: math.NaN(), Values: []registry.ProposedValue{moved("LO-0", "1")}}, "query.threshold"},
	} {
		_, err := c.PreviewRevision(c.ctx, c.auditor, q.p, nil)
		if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), q.want) {
			t.Errorf("%s: %v, want a complaint with %q", name, err, q.want)
		}
	}
}
