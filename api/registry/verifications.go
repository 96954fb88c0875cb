package registry

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"sort"
	"strings"
	"sync"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A Verification is the outcome of recomputing what a registry holds.
type Verification struct {
	Laboratories []LaboratoryVerification
	// Findings are the differences, the store's first; Count counts those beyond the list too.
	Findings []store.Finding
	Count    int
	// Recomputed counts calibrations, final values, assigned values and report
	// lines computed again; Equal those whose every bit was the same.
	Recomputed, Equal int
}

// A LaboratoryVerification says how much of one laboratory's ledger was checked, and its root.
type LaboratoryVerification struct {
	Laboratory string
	Entries    int64
	Root       ledger.Hash
	// Checkpoints counts the signed checkpoints that lead to the recomputed roots.
	Checkpoints int
}

// Clean tells whether nothing was found.
func (v Verification) Clean() bool { return v.Count == 0 }

// A VerifyRequest chooses what to verify: everything, or one number's chain.
type VerifyRequest struct {
	// Laboratories to verify; none means all.
	Laboratories []string
	Workers      int
	Progress     func(done, total int64)
	// Outside are signed checkpoints kept outside the registry, Verifiers the
	// public keys to check them with beside those recorded.
	Outside   [][]byte
	Verifiers []string
}

// Verify recomputes everything: every hash, every laboratory's Merkle root,
// every derived row, every calibration, final value, assigned value and report
// line, from stored inputs. It is an operation of whoever holds the database,
// so it takes no actor; the HTTP face asks for one.
func (r *Registry) Verify(ctx context.Context, q VerifyRequest) (Verification, error) {
	var out Verification
	laboratories := q.Laboratories
	if len(laboratories) == 0 {
		err := r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
			var err error
			laboratories, err = v.Laboratories(ctx)
			return err
		})
		if err != nil {
			return out, err
		}
	}
	var mu sync.Mutex
	for _, laboratory := range laboratories {
		var recomputed []store.Finding
		found, err := r.store.Verify(ctx, laboratory, store.VerifyOptions{Workers: q.Workers, Progress: q.Progress, Outside: r.outsideOf(laboratory, laboratories, q.Outside), Verifiers: q.Verifiers,
			Visit: func(ctx context.Context, raw store.Raw) error {
				var c recheck
				err := r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
					c = recheck{}
					return c.version(ctx, v, raw)
				})
				if err != nil && ctx.Err() != nil {
					return err
				}
				if err != nil {
					c.add(raw, "", "numbers that cannot be computed again: "+err.Error(), "the same numbers from the inputs it names")
				}
				mu.Lock()
				defer mu.Unlock()
				out.Recomputed += c.recomputed
				out.Equal += c.equal
				out.Count += len(c.findings)
				if len(recomputed) < maxFindings {
					recomputed = append(recomputed, c.findings...)
				}
				return nil
			}})
		if err != nil {
			return out, fmt.Errorf("verify laboratory %s: %w", laboratory, err)
		}
		keys, err := r.keyFindings(ctx, laboratory)
		if err != nil {
			return out, fmt.Errorf("verify laboratory %s: %w", laboratory, err)
		}
		recomputed = append(recomputed, keys...)
		out.Count += len(keys)
		sort.SliceStable(recomputed, func(i, j int) bool { return recomputed[i].Position < recomputed[j].Position })
		out.Findings = append(append(out.Findings, found.List...), recomputed...)
		out.Count += found.Count
		out.Laboratories = append(out.Laboratories, LaboratoryVerification{Laboratory: laboratory, Entries: found.Size, Root: found.Root, Checkpoints: found.Checkpoints})
	}
	return out, nil
}

// maxFindings bounds the list of recomputed differences of one laboratory.
const maxFindings = 1000

// A recheck computes one version again from the inputs it names.
type recheck struct {
	findings          []store.Finding
	recomputed, equal int
	// compared is filled in where set: each number beside what came of it again.
	compared *NumbersCompared
}

func (c *recheck) add(raw store.Raw, path, found, expected string) {
	key := raw.Ref.String()
	if path != "" {
		key += " " + path
	}
	c.findings = append(c.findings, store.Finding{Position: raw.Position, Table: "versions", Key: key, Found: found, Expected: expected})
}

func (c *recheck) version(ctx context.Context, v source, raw store.Raw) error {
	var again any
	var scale, condition float64
	switch raw.Kind {
	case store.KindCalibration:
		stored, err := store.Decode[store.Calibration](raw)
		if err != nil {
			return err
		}
		a, err := assembleStored(ctx, v, stored)
		if err != nil {
			return err
		}
		scale, condition = a.largest(), stored.Value.ConditionNumber
		refitted, err := a.fit()
		if err != nil {
			return err
		}
		if stored.Value.Needs == nil { // recorded before they were kept
			refitted.Needs = nil
		}
		again = refitted
	case store.KindFinal:
		stored, err := store.Decode[store.Final](raw)
		if err != nil {
			return err
		}
		from, rel, ok, err := converted(ctx, v, stored.Inputs)
		if err != nil {
			return err
		}
		remake := againFinal
		if ok {
			remake = func(ctx context.Context, v source, f store.Version[store.Final]) (store.Final, []member, error) {
				return againConverted(ctx, v, f, from, rel)
			}
		}
		body, members, err := remake(ctx, v, stored)
		if err != nil {
			return err
		}
		scale, condition, again = largestResult(members), 1e6, body
	case store.KindValue:
		stored, err := store.Decode[store.Value](raw)
		if err == nil && stored.Value.Partner != nil {
			return c.partner(ctx, v, raw, stored.Value)
		}
		if err == nil && stored.Value.Basis == Conversion {
			from, rel, ok, err := converted(ctx, v, stored.Inputs)
			if err != nil || !ok {
				return err
			}
			body, err := againConvertedValue(ctx, v, from, rel)
			if err != nil {
				return err
			}
			scale, condition, again = math.Abs(body.StandardUncertainty), 1e6, body
			break
		}
		if err != nil || stored.Value.Basis != "assignment" || stored.Value.BackLoaded {
			return err
		}
		remake := againAssigned
		if stored.Value.Campaign != nil {
			remake = againCampaign
		}
		body, members, err := remake(ctx, v, stored)
		if err != nil {
			return err
		}
		scale, condition, again = largestResult(members), 1e6, body
	case store.KindFactor:
		stored, err := store.Decode[store.Factor](raw)
		if err != nil || stored.Value.Origin != FromPulses {
			return err
		}
		if again, err = againFactor(stored.Value); err != nil {
			return err
		}
		scale, condition = stored.Value.K, 1e6
	case store.KindReport:
		return c.report(ctx, v, raw)
	default:
		return nil
	}
	c.recomputed++
	canonical, err := ledger.Canonical(again)
	if err != nil {
		return err
	}
	if c.compared != nil {
		if err := c.compared.compare(raw.Kind, raw.Value, canonical); err != nil {
			return err
		}
	}
	if bytes.Equal(canonical, raw.Value) {
		c.equal++
		return nil
	}
	for _, d := range differences(raw.Value, canonical, tolerance(scale, condition)) {
		c.add(raw, d.path, d.stored, d.again+" (computed again)")
	}
	return nil
}

// largest is the largest |raw| or |assigned| of the fit, the S of the tolerance.
func (a *assembly) largest() float64 {
	s := 0.0
	for _, rd := range a.readings {
		s = max(s, math.Abs(rd.Raw))
	}
	for _, v := range a.anchors {
		if x, ok := new(complaints).number("", v.Value.Value); ok {
			s = max(s, math.Abs(x))
		}
	}
	return s
}

func largestResult(members []member) float64 {
	s := 0.0
	for _, m := range members {
		for _, r := range m.calibration.Value.Results {
			s = max(s, math.Abs(r.Value))
		}
	}
	return s
}

// tolerance is that of two computations of one stored number:
// |difference| ≤ 1e-12·max(κ, 1)·max(|a|, |b|, S), κ capped at 1e6.
func tolerance(scale, condition float64) func(a, b float64) bool {
	kappa := math.Min(math.Max(condition, 1), 1e6)
	return func(a, b float64) bool {
		return math.Abs(a-b) <= 1e-12*kappa*math.Max(scale, math.Max(math.Abs(a), math.Abs(b)))
	}
}

func membersOf(ctx context.Context, v source, inputs []store.Input, line func(i int, c store.Version[store.Calibration]) int) ([]member, error) {
	var members []member
	for i, in := range inputs {
		if in.Part != "member" {
			continue
		}
		c, err := decodeVersion[store.Calibration](ctx, v, in.Ref)
		if err != nil {
			return nil, err
		}
		m := member{calibration: c, line: line(i, c)}
		if m.line < 0 || m.line >= len(c.Value.Results) {
			return nil, fmt.Errorf("%s has no result %d", c.Ref, m.line)
		}
		if i+1 < len(inputs) && inputs[i+1].Part == "outcome" {
			m.outcome = inputs[i+1].Ref
		}
		members = append(members, m)
	}
	return members, nil
}

func againFinal(ctx context.Context, v source, f store.Version[store.Final]) (store.Final, []member, error) {
	members, err := membersOf(ctx, v, f.Inputs, func(i int, _ store.Version[store.Calibration]) int {
		for _, m := range f.Value.Members {
			if m.Input == i {
				return m.Line
			}
		}
		return -1
	})
	if err != nil {
		return store.Final{}, nil, err
	}
	body := store.Final{Sample: f.Value.Sample, Quantity: f.Value.Quantity, Scale: f.Value.Scale, Measurand: f.Value.Measurand, Rule: f.Value.Rule}
	return body, members, combineMembers(ctx, v, members, &body)
}

func againAssigned(ctx context.Context, v source, val store.Version[store.Value]) (store.Value, []member, error) {
	members, err := membersOf(ctx, v, val.Inputs, func(_ int, c store.Version[store.Calibration]) int {
		for i, r := range c.Value.Results {
			if r.Subject == val.Value.Material {
				return i
			}
		}
		return -1
	})
	if err != nil {
		return store.Value{}, nil, err
	}
	body := store.Value{Material: val.Value.Material, MaterialLaboratory: val.Value.MaterialLaboratory, Scale: val.Value.Scale,
		Measurand: val.Value.Measurand, Note: val.Value.Note}
	combined, groups, err := combineAssigned(ctx, v, members)
	if err != nil {
		return body, members, err
	}
	fillAssigned(&body, combined, groups, members)
	return body, members, nil
}

// report hashes every line of a report again from the final value it names.
func (c *recheck) report(ctx context.Context, v source, raw store.Raw) error {
	rep, err := store.Decode[store.Report](raw)
	if err != nil {
		return err
	}
	for i, line := range rep.Value.Lines {
		c.recomputed++
		if i >= len(rep.Inputs) || rep.Inputs[i].Part != "line" {
			return fmt.Errorf("line %d names no final value", i)
		}
		final, err := decodeVersion[store.Final](ctx, v, rep.Inputs[i].Ref)
		if err != nil {
			return err
		}
		hash, err := store.ReportLineHash(store.NewReportLine(line.Code, rep.Code, i, final))
		if err != nil {
			return err
		}
		if hash != line.Hash {
			c.add(raw, fmt.Sprintf("lines[%d]", i), line.Hash.String(), hash.String()+" (computed again)")
			continue
		}
		c.equal++
	}
	return nil
}

// A difference is one place where two JSON values are not the same.
type difference struct{ path, stored, again string }

// differences compares two JSON texts member by member; numbers may differ
// within the tolerance.
func differences(stored, again []byte, near func(a, b float64) bool) []difference {
	var a, b any
	if err := json.Unmarshal(stored, &a); err != nil {
		return []difference{{"", err.Error(), "JSON"}}
	}
	if err := json.Unmarshal(again, &b); err != nil {
		return []difference{{"", "JSON", err.Error()}}
	}
	var out []difference
	compareJSON("", a, b, near, &out)
	if len(out) > MaxComplaints {
		out = out[:MaxComplaints]
	}
	return out
}

func compareJSON(path string, a, b any, near func(a, b float64) bool, out *[]difference) {
	switch x := a.(type) {
	case map[string]any:
		y, ok := b.(map[string]any)
		if !ok {
			break
		}
		keys := map[string]bool{}
		for k := range x {
			keys[k] = true
		}
		for k := range y {
			keys[k] = true
		}
		sorted := make([]string, 0, len(keys))
		for k := range keys {
			sorted = append(sorted, k)
		}
		sort.Strings(sorted)
		for _, k := range sorted {
			compareJSON(strings.TrimPrefix(path+"."+k, "."), x[k], y[k], near, out)
		}
		return
	case []any:
		y, ok := b.([]any)
		if !ok || len(x) != len(y) {
			break
		}
		for i := range x {
			compareJSON(fmt.Sprintf("%s[%d]", path, i), x[i], y[i], near, out)
		}
		return
	case float64:
		if y, ok := b.(float64); ok && near(x, y) {
			return
		}
	default:
		if a == b {
			return
		}
	}
	*out = append(*out, difference{path, text(a), text(b)})
}

func text(v any) string {
	b, err := json.Marshal(v)
	if err != nil {
		return fmt.Sprint(v)
	}
	if len(b) > 200 {
		return string(b[:200]) + "…"
	}
	return string(b)
}
