package registry_test

import (
	"context"
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// restate records and approves a further version of a primary value.
func (c *chain) restate(name, value string, after int, from time.Time) {
	c.t.Helper()
	at := store.InstantOf(from)
	it, err := c.StateValue(c.ctx, c.manager, name, registry.ValueRequest{Scale: chainScale, Value: store.Decimal(value),
		Stated: store.Stated{Text: "0.04", Kind: "standard"}, Basis: "certificate"}, registry.Edit{After: after, ValidFrom: &at, Reason: "a certificate that came late"})
	c.must(err)
	_, err = c.Decide(c.ctx, c.signatory, store.KindValue, it.Code, registry.DecisionRequest{Act: "approved", Version: after + 1})
	c.must(err)
}

func (c *chain) root() string {
	c.t.Helper()
	var text string
	c.must(c.store.Read(c.ctx, func(ctx context.Context, v *store.View) error {
		root, size, err := v.Root(ctx, "TST", -1)
		text = fmt.Sprintf("%d %s", size, root)
		return err
	}))
	return text
}

// A certificate arrives years after the session: what was believed then stays
// to be read, what is believed now holds for the session too, and the delta as
// it would be today is what fitting its sessions again gives.
func TestLateCertificateMovesWhatIsBelievedNowAndNotWhatWasBelieved(t *testing.T) {
	c := openChain(t, 2, 0.03, calib.WeightsReplicate)
	code := c.reports[0].Lines[0].Code
	before := store.InstantOf(c.clock)
	session := store.InstantOf(c.day(0, 0))
	still, err := c.Today(c.ctx, c.auditor, code, nil)
	c.must(err)
	if still.Shift != 0 || still.Value != still.Reported.Value || len(still.Replaced) != 0 || still.Material || still.Why != "" {
		t.Errorf("with nothing said since: %+v", still)
	}

	c.clock = c.clock.AddDate(3, 0, 0)
	c.restate("LO-0", "-29.900", 1, chainStart.AddDate(-1, 0, 0))
	c.restate("HI-0", "11.000", 1, chainStart.AddDate(2, 0, 0)) // a re-valuation: it begins after the sessions
	key := registry.ValueCode("LO-0", chainScale, "")
	for _, q := range []struct {
		m    store.Moment
		want int
	}{{store.Moment{ValidAt: &session, AsOf: &before}, 1}, {store.Moment{ValidAt: &session}, 2}} {
		it, err := registry.One[store.Value](c.ctx, c.Registry, c.auditor, store.KindValue, key, 0, q.m)
		c.must(err)
		if it.Ref.Version != q.want {
			t.Errorf("at %v version %d holds, want %d", q.m, it.Ref.Version, q.want)
		}
	}

	root := c.root()
	now, err := c.Today(c.ctx, c.auditor, code, nil)
	c.must(err)
	if len(now.Replaced) != 2 || now.Replaced[0].Session == now.Replaced[1].Session {
		t.Fatalf("replaced %+v, want LO-0 in each of the two sessions", now.Replaced)
	}
	for _, r := range now.Replaced {
		if r.Old.Code != key || r.Old.Version != 1 || r.New.Version != 2 || r.OldValue != -30 || r.NewValue != -29.9 || r.Part != "anchor" {
			t.Errorf("replaced %+v", r)
		}
	}
	all, _ := c.preview(registry.Proposal{Full: true, Values: []registry.ProposedValue{{Material: "LO-0", Scale: chainScale, Version: 1, Use: 2}}})
	full := all[code].Full
	if full == nil || math.Abs(now.Shift-full.Shift) > 1e-12 || math.Abs(now.StandardUncertainty-full.StandardUncertainty) > 1e-12 || now.Shift == 0 {
		t.Errorf("today: shift %v with u %v; a revision with the same version re-evaluates %+v", now.Shift, now.StandardUncertainty, full)
	}
	if want := math.Abs(now.Shift) / now.Reported.StandardUncertainty; now.Ratio != want || now.Material != (want > registry.Material) {
		t.Errorf("ratio %v, material %v; want %v", now.Ratio, now.Material, want)
	}
	then, err := c.Today(c.ctx, c.auditor, code, &before)
	c.must(err)
	if then.Shift != 0 || len(then.Replaced) != 0 {
		t.Errorf("as of before the certificate: %+v", then)
	}
	// One generation on, the standards made in the house still stand as approved.
	next, err := c.Today(c.ctx, c.auditor, c.reports[1].Lines[0].Code, nil)
	c.must(err)
	for _, r := range next.Replaced {
		if !strings.HasPrefix(r.Old.Code, "MID") && !strings.HasPrefix(r.Old.Code, "LO-0") {
			t.Errorf("replaced %+v in the next generation", r)
		}
	}
	if c.root() != root {
		t.Error("asking has changed the ledger")
	}

	_, err = c.Decide(c.ctx, c.signatory, store.KindValue, registry.ValueCode("MID-0", chainScale, ""), registry.DecisionRequest{Act: "withdrawn", Version: 1, Seen: 1, Reason: "contaminated", EffectAt: &session})
	c.must(err)
	if lost, err := c.Today(c.ctx, c.auditor, code, nil); err != nil || !strings.Contains(lost.Why, "withdrawn") {
		t.Errorf("with an anchor withdrawn: %+v, %v", lost, err)
	}
	if _, err := c.Today(c.ctx, c.auditor, code, &session); registry.MeaningOf(err) != registry.NotFound {
		t.Errorf("as of before it was issued: %v, want not found", err)
	}
}

// A trace as of a moment tells the states and decisions of that moment.
func TestTraceTellsWhatHadBeenSaid(t *testing.T) {
	c := openChain(t, 2, 0.03, calib.WeightsDeclared)
	code := c.reports[1].Lines[0].Code
	whole, err := c.Trace(c.ctx, c.auditor, "", code, 0)
	c.must(err)
	before := store.InstantOf(c.clock)
	c.clock = c.clock.AddDate(0, 1, 0)
	key := registry.ValueCode("LO-0", chainScale, "")
	effect := store.InstantOf(c.clock.AddDate(0, 1, 0))
	_, err = c.Decide(c.ctx, c.signatory, store.KindValue, key, registry.DecisionRequest{Act: "withdrawn", Version: 1, Seen: 1, Reason: "broken", EffectAt: &effect})
	c.must(err)
	later := effect + 1
	for name, q := range map[string]struct {
		m         store.Moment
		state     store.State
		decisions int
	}{
		"as of before":          {store.Moment{AsOf: &before}, store.Approved, 1},
		"now":                   {store.Moment{}, store.Approved, 2},
		"when it has effect":    {store.Moment{ValidAt: &later}, store.Withdrawn, 2},
		"later, as said before": {store.Moment{ValidAt: &later, AsOf: &before}, store.Approved, 1},
	} {
		trace, err := c.TraceAt(c.ctx, c.auditor, registry.TraceQuery{Code: code, Moment: q.m})
		c.must(err)
		if len(trace.Nodes) != len(whole.Nodes) || len(trace.Edges) != len(whole.Edges) {
			t.Errorf("%s: %d nodes and %d edges, want %d and %d: the chain is pinned", name, len(trace.Nodes), len(trace.Edges), len(whole.Nodes), len(whole.Edges))
		}
		for _, n := range trace.Nodes {
			if n.Kind == store.KindValue && n.Code == key && (n.State != q.state || len(n.Decisions) != q.decisions) {
				t.Errorf("%s: %s with %d decisions, want %s with %d", name, n.State, len(n.Decisions), q.state, q.decisions)
			}
		}
	}
	early := store.InstantOf(c.day(0, 0))
	if _, err := c.TraceAt(c.ctx, c.auditor, registry.TraceQuery{Code: code, Moment: store.Moment{AsOf: &early}}); registry.MeaningOf(err) != registry.NotFound {
		t.Errorf("as of before it was issued: %v, want not found", err)
	}
}

// Traces equal what follows from every body, one by one; and every number's
// contributions add up to its variance.
func TestTracesEqualBruteForceAndContributionsAddUp(t *testing.T) {
	for _, depth := range []int{3, 6, 12} {
		c := openChain(t, depth, 0.03, calib.WeightsReplicate)
		all := c.everything()
		byRef := map[string]store.Raw{}
		for _, raw := range all {
			byRef[raw.Ref.String()] = raw
		}
		c.must(c.store.Read(c.ctx, func(ctx context.Context, v *store.View) error { // what it rests on in common
			for _, raw := range all {
				for _, in := range raw.Inputs {
					if _, ok := byRef[in.Ref.String()]; !ok {
						other, err := v.Version(ctx, in.Key, in.Ref.Version)
						if err != nil {
							return err
						}
						byRef[in.Ref.String()] = other
					}
				}
			}
			return nil
		}))
		for twice := range 2 { // the second time from what is remembered
			trace, err := c.Trace(c.ctx, c.auditor, "", c.reports[depth-1].Lines[0].Code, 0)
			c.must(err)
			want, edges := map[string]bool{}, 0
			var down func(name string)
			down = func(name string) {
				if want[name] {
					return
				}
				want[name] = true
				for _, in := range byRef[name].Inputs {
					edges++
					down(in.Ref.String())
				}
			}
			down(trace.Nodes[0].Ref.String())
			got := map[string]bool{}
			for _, n := range trace.Nodes {
				got[n.Ref.String()] = true
			}
			if diff := cmp.Diff(want, got); diff != "" || len(trace.Edges) != edges || trace.Cut != 0 {
				t.Errorf("depth %d, time %d: %d edges, want %d; nodes (-brute force +trace):\n%s", depth, twice+1, len(trace.Edges), edges, diff)
			}
		}
		results, values := 0, 0
		for _, raw := range all {
			switch raw.Kind {
			case store.KindCalibration:
				body, err := store.Decode[store.Calibration](raw)
				c.must(err)
				for _, res := range body.Value.Results {
					sum := 0.0
					for _, s := range res.Sources {
						sum += s.VarianceShare
					}
					if results++; math.Abs(sum-1) > 1e-9 {
						t.Errorf("depth %d: the shares of %s in %s add up to %v", depth, res.Subject, raw.Ref, sum)
					}
				}
			case store.KindValue:
				body, err := store.Decode[store.Value](raw)
				c.must(err)
				if body.Value.Sources == nil {
					continue
				}
				sum := 0.0
				for _, s := range body.Value.Sources {
					sum += s.Sensitivity * s.Sensitivity * s.U * s.U
				}
				u := body.Value.StandardUncertainty
				if values++; math.Abs(math.Sqrt(sum)-u) > 1e-9*u {
					t.Errorf("depth %d: the sources of %s give u %v, stated %v", depth, raw.Ref, math.Sqrt(sum), u)
				}
			}
		}
		if results == 0 || values != 2*depth+1 {
			t.Errorf("depth %d: looked at %d results and %d values, want %d values", depth, results, values, 2*depth+1)
		}
	}
}
