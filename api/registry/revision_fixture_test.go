package registry_test

import (
	"context"
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

const chainScale = "d13C-VPDB-LSVEC"

// A chain is a registry in which working standards are valued from others, one
// generation after another, down to two primary materials LO-0 and HI-0 (and a
// third, MID-0, that some sessions use). Every generation has two sessions, in
// which the next standards and a client's sample are measured; the sample's
// delta is reported. Beside it stands a branch on other primary materials.
type chain struct {
	*bench
	depth   int
	noise   float64
	random  *rand.Rand
	truth   map[string]float64
	samples []string // by generation
	finals  []string
	reports []registry.Report
	other   registry.Report // of the branch that rests on nothing of the chain
	bottles map[string]string
}

var chainStart = time.Date(2026, 3, 3, 9, 0, 0, 0, time.UTC)

// chainMethod is a plain line with declared weights, all accepted sessions combined.
func chainMethod(w calib.Weights) store.Method {
	return store.Method{Title: "δ13C of solids", Quantities: []store.MethodQuantity{{Quantity: "d13C", Scale: chainScale, Model: calib.Model{Weights: w}}},
		Corrections: []store.Correction{{Name: "o17", State: "earlier", By: "acquisition software"}}, Final: store.FinalRule{Rule: registry.RuleAll}}
}

// openChain builds a chain. With noise 0 readings are exact, so that every value
// is an affine function of the primary ones; otherwise noise is their spread (‰).
func openChain(t testing.TB, depth int, noise float64, w calib.Weights) *chain {
	c := &chain{bench: openBench(t), depth: depth, noise: noise, random: rand.New(rand.NewPCG(uint64(depth), 7)), truth: map[string]float64{}, bottles: map[string]string{}}
	c.method("C-solid", chainMethod(w))
	for name, x := range map[string]float64{"LO": -30, "HI": 10, "MID": -9} {
		for g := 0; g <= depth; g++ {
			c.truth[fmt.Sprintf("%s-%d", name, g)] = x + 0.3*float64(g)
		}
		c.truth["ALT-"+name] = x - 1
	}
	names := []string{}
	for name := range c.truth {
		names = append(names, name)
	}
	slices.Sort(names)
	for _, name := range names {
		_, err := c.StateMaterial(c.ctx, c.manager, name, store.Material{Name: name + " powder", Kind: "working", Substance: "glycine"}, registry.Edit{})
		c.must(err)
		if strings.HasSuffix(name, "-0") || strings.HasPrefix(name, "ALT-") {
			c.primary(name)
		}
	}
	for _, name := range []string{"bottle 1", "bottle 2"} {
		added, err := c.AddUnits(c.ctx, c.manager, store.Unit{Material: "LO-0", Label: name, State: "open"}, 1)
		c.must(err)
		c.bottles[name] = added[0].Code
	}
	for g := 0; g < depth; g++ {
		next := []string{fmt.Sprintf("LO-%d", g+1), fmt.Sprintf("HI-%d", g+1)}
		if g == 0 {
			next = append(next, "MID-1")
		}
		anchors := []string{fmt.Sprintf("LO-%d", g), fmt.Sprintf("HI-%d", g)}
		if g < 2 {
			anchors = append(anchors, fmt.Sprintf("MID-%d", g))
		}
		sample := c.sample(fmt.Sprintf("client %d", g), "A1")
		c.truth[sample] = -21 + float64(g)
		c.samples = append(c.samples, sample)
		for k := range 2 {
			c.chainSession(g, k, anchors, append(slices.Clone(next), sample))
		}
		for _, name := range next {
			c.assign(name, g)
		}
		code := c.finalOf(sample)
		c.finals = append(c.finals, code)
		c.reports = append(c.reports, c.report(fmt.Sprintf("client %d", g), code))
	}
	sample := c.sample("client x", "A1")
	c.truth[sample] = -20
	c.chainSession(depth, 0, []string{"ALT-LO", "ALT-HI"}, []string{sample})
	c.other = c.report("client x", c.finalOf(sample))
	return c
}

func (c *chain) primary(name string) {
	c.t.Helper()
	from := store.InstantOf(chainStart.AddDate(-1, 0, 0))
	it, err := c.StateValue(c.ctx, c.manager, name, registry.ValueRequest{Scale: chainScale, Value: store.Decimal(fmt.Sprintf("%.3f", c.truth[name])),
		Stated: store.Stated{Text: "0.04", Kind: "standard"}, Basis: "certificate"}, registry.Edit{ValidFrom: &from})
	c.must(err)
	_, err = c.Decide(c.ctx, c.signatory, store.KindValue, it.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	c.must(err)
}

func (c *chain) day(g, k int) time.Time { return chainStart.AddDate(0, 0, 4*g+k) }

// chainSession measures three rounds of anchors and two portions of each subject.
func (c *chain) chainSession(g, k int, anchors, subjects []string) string {
	c.t.Helper()
	tab := registry.ReadingTable{Place: func(i int, field string) string { return fmt.Sprintf("row %d, column %q", i+2, field) }}
	add := func(name, role string) {
		i := len(tab.Readings)
		at := store.InstantOf(c.day(g, k).Add(time.Duration(i) * 10 * time.Minute))
		position, u := i+1, 0.03
		rd := registry.RawReading{Name: name, Role: role, Quantity: "d13C", Raw: 0.3 + 1.01*c.truth[name] + c.noise*c.random.NormFloat64(), U: &u, Time: &at, Position: &position}
		if name == "LO-0" {
			rd.Unit = fmt.Sprintf("bottle %d", k+1)
		}
		tab.Readings = append(tab.Readings, rd)
	}
	for range 3 {
		for _, a := range anchors {
			add(a, "anchor")
		}
		for _, s := range subjects {
			if len(tab.Readings) < 2*(len(anchors)+len(subjects)) {
				add(s, "sample")
			}
		}
	}
	tab.Rows = len(tab.Readings)
	if at := c.day(g, k).Add(12 * time.Hour); c.clock.Before(at) {
		c.clock = at
	}
	label := fmt.Sprintf("generation %d session %d", g, k)
	answer, err := c.ImportReadings(c.ctx, c.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid", Label: label},
		Name: "run.csv", MediaType: "text/csv", Bytes: []byte(label), Table: tab})
	c.must(err)
	code := answer.Session.Code
	fit, err := c.Fit(c.ctx, c.analyst, registry.FitRequest{Session: code, Quantity: "d13C"})
	c.must(err)
	_, err = c.Decide(c.ctx, c.signatory, store.KindCalibration, fit.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	c.must(err)
	_, err = c.StateOutcome(c.ctx, c.analyst, code, store.Outcome{Quantity: "d13C", Outcome: "accepted"}, registry.Edit{})
	c.must(err)
	return code
}

func (c *chain) assign(name string, g int) {
	c.t.Helper()
	from := store.InstantOf(c.day(g, 3))
	it, err := c.AssignValue(c.ctx, c.manager, registry.AssignRequest{Material: name, Scale: chainScale}, registry.Edit{ValidFrom: &from})
	c.must(err)
	_, err = c.Decide(c.ctx, c.signatory, store.KindValue, it.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	c.must(err)
}

func (c *chain) finalOf(sample string) string {
	c.t.Helper()
	f, err := c.FinalValue(c.ctx, c.analyst, registry.FinalRequest{Sample: sample, Scale: chainScale})
	c.must(err)
	_, err = c.Decide(c.ctx, c.signatory, store.KindFinal, f.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	c.must(err)
	return f.Code
}

// moved proposes another value of a primary material.
func moved(material, value string) registry.ProposedValue {
	return registry.ProposedValue{Material: material, Scale: chainScale, Value: store.Decimal(value), Stated: store.Stated{Text: "0.04", Kind: "standard"}}
}

// preview collects what a proposal moves, by version (and reported code).
func (c *chain) preview(p registry.Proposal) (map[string]registry.Affected, registry.RevisionSummary) {
	c.t.Helper()
	all := map[string]registry.Affected{}
	last := int64(-1)
	summary, err := c.PreviewRevision(c.ctx, c.auditor, p, func(a registry.Affected) error {
		if p.Full || a.Kind == store.KindCalibration || a.Kind == store.KindValue {
			if a.Position < last {
				c.t.Errorf("%s at position %d comes after position %d: not the order of the ledger", a.Ref, a.Position, last)
			}
			last = a.Position
		} else if last < 0 {
			c.t.Errorf("%s comes before any calibration", a.Ref)
		}
		name := a.Ref.String()
		if a.Reported != "" {
			name = a.Reported
		}
		if _, twice := all[name]; twice {
			c.t.Errorf("%s comes twice", name)
		}
		all[name] = a
		return nil
	})
	c.must(err)
	return all, summary
}

// everything reads every version of the laboratory's ledger.
func (c *chain) everything() []store.Raw {
	c.t.Helper()
	var all []store.Raw
	c.must(c.store.Read(c.ctx, func(ctx context.Context, v *store.View) error {
		all = nil
		for before := int64(0); ; {
			page, next, err := v.Recent(ctx, store.RecentQuery{Laboratory: "TST", Before: before, Limit: store.MaxLimit})
			if err != nil {
				return err
			}
			all = append(all, page...)
			if before = next; before == 0 {
				return nil
			}
		}
	}))
	slices.Reverse(all)
	return all
}

// bruteForce walks the bodies of all versions, and nothing else, for what rests
// on some of them through anchors, members and lines. It is the truth that the
// statements over edges are held against.
func bruteForce(all []store.Raw, root func(store.Raw) bool) map[string]bool {
	rests := map[store.Ref]bool{}
	found := map[string]bool{}
	for _, raw := range all { // inputs stand before what names them
		is := root(raw)
		for _, in := range raw.Inputs {
			is = is || rests[in.Ref] && (in.Part == "anchor" || in.Part == "member" || in.Part == "line")
		}
		if !is {
			continue
		}
		rests[raw.Ref] = true
		switch raw.Kind {
		case store.KindCalibration, store.KindFinal:
			found[raw.Ref.String()] = true
		case store.KindValue:
			if !root(raw) {
				found[raw.Ref.String()] = true
			}
		case store.KindReport:
			rep, err := store.Decode[store.Report](raw)
			if err != nil {
				panic(err)
			}
			for i, line := range rep.Value.Lines {
				if rests[raw.Inputs[i].Ref] {
					found[line.Code] = true
				}
			}
		}
	}
	return found
}
