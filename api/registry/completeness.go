package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/store"
)

// Completeness is a report held against what a reported delta must carry: the
// four groups of the IUPAC technical report on minimum requirements for
// publishing hydrogen, carbon, nitrogen, oxygen and sulfur stable-isotope delta
// results (Skrzypek et al. 2022, doi 10.1515/pac-2021-1108).
type Completeness struct {
	Report   string
	Complete bool
	Items    []CompletenessItem
}

// A CompletenessItem is one thing that a report must say.
type CompletenessItem struct {
	ID    string // lasting name, such as traceability.anchors
	Group string // procedure traceability processing uncertainty
	Asks  string
	// State: satisfied, missing, not applicable.
	State string
	// Where says where it stands, or what is missing and where to say it.
	Where string
	// Recalled marks an item whose wording is from memory of the technical report and
	// general practice; the four groups themselves are from its abstract.
	Recalled bool
}

// The states of an item.
const (
	Satisfied     = "satisfied"
	Missing       = "missing"
	NotApplicable = "not applicable"
)

// MissingItems names what is missing.
func (c Completeness) MissingItems() []string {
	var out []string
	for _, it := range c.Items {
		if it.State == Missing {
			out = append(out, it.ID)
		}
	}
	return out
}

// Completeness checks an issued report.
func (r *Registry) Completeness(ctx context.Context, actor Actor, report string) (Completeness, error) {
	f, err := r.ReportFacts(ctx, actor, report)
	if err != nil {
		return Completeness{}, err
	}
	c := CheckCompleteness(f)
	c.Report = report
	return c, nil
}

// ReportFacts gathers what an issued report rests on.
func (r *Registry) ReportFacts(ctx context.Context, actor Actor, report string) (ReportFacts, error) {
	var f ReportFacts
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		it, err := newest[store.Report](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindReport, Code: report})
		if err != nil {
			return err
		}
		f, err = factsOf(ctx, v, lineFinals(it.Inputs))
		return err
	})
	return f, err
}

func lineFinals(inputs []store.Input) []store.Ref {
	var out []store.Ref
	for _, in := range inputs {
		if in.Part == "line" && !slices.Contains(out, in.Ref) {
			out = append(out, in.Ref)
		}
	}
	return out
}

// CheckCompleteness holds facts against the list; it needs no store.
func CheckCompleteness(f ReportFacts) Completeness {
	c := Completeness{Complete: true}
	add := func(group, name, asks string, recalled bool, missing []string, where string) {
		it := CompletenessItem{ID: group + "." + name, Group: group, Asks: asks, State: Satisfied, Where: where, Recalled: recalled}
		if len(missing) > 0 {
			it.State, it.Where = Missing, strings.Join(missing[:min(len(missing), 5)], "; ")
			if n := len(missing) - 5; n > 0 {
				it.Where += fmt.Sprintf("; and %d more", n)
			}
			c.Complete = false
		}
		c.Items = append(c.Items, it)
	}
	applies := func(id string) { // the last item does not apply
		c.Items[len(c.Items)-1].State, c.Items[len(c.Items)-1].Where = NotApplicable, id
	}
	var missing []string

	// Analytical procedure.
	for _, s := range f.Samples {
		if s.Value.Label == "" {
			missing = append(missing, "sample "+store.FormatCode(s.Code)+" has no label")
		}
	}
	add("procedure", "sample", "which sample it is", true, missing, fmt.Sprintf("%s by the client's label and a code of their own", countOf(len(f.Samples), "sample")))
	missing = nil
	for _, s := range f.Samples {
		if s.Value.Matrix == "" {
			missing = append(missing, "sample "+store.FormatCode(s.Code)+" has no matrix: state it on the list of samples")
		}
	}
	add("procedure", "matrix", "what was analysed: matrix, fraction or chemical form", true, missing, "the matrix of each sample")
	missing = nil
	for _, m := range f.Methods {
		if strings.TrimSpace(m.Value.Procedure) == "" {
			missing = append(missing, fmt.Sprintf("method %s.%d has no procedure: state preparation and conversion with temperatures there", m.Code, m.Ref.Version))
		}
	}
	add("procedure", "preparation", "preparation and conversion, with temperatures", true, missing, "the procedure of "+refList(f.Methods))
	missing = nil
	for _, i := range f.Instruments {
		if i.Value.Configuration == "" {
			missing = append(missing, fmt.Sprintf("instrument %s.%d has no configuration: state type and mode (dual inlet, continuous flow, laser) there", i.Code, i.Ref.Version))
		}
	}
	if len(f.Instruments) == 0 {
		missing = append(missing, "no calibration names its instrument")
	}
	add("procedure", "instrument", "instrument type and mode", true, missing, "the configuration of "+refList(f.Instruments))
	missing = nil
	for _, s := range f.Sessions {
		if !f.Sized[s.Code] {
			missing = append(missing, "session "+store.FormatCode(s.Code)+" has readings of samples without size or amount")
		}
	}
	add("procedure", "amount", "sample amount", true, missing, "size or amount of each reading")
	missing = nil
	for _, final := range f.Finals {
		if len(final.Value.Members) == 0 && len(f.Calibrations) == 0 {
			missing = append(missing, "final value "+store.FormatCode(final.Code)+" names no session")
		}
	}
	add("procedure", "replicates", "how many portions were measured", true, missing, "n of each result, sessions of each final value")
	hydrogen := false
	for _, final := range f.Finals {
		hydrogen = hydrogen || final.Value.Quantity == "d2H"
	}
	missing = nil
	for _, final := range f.Finals {
		if final.Value.Quantity == "d2H" && final.Value.Measurand == "" {
			missing = append(missing, "final value "+store.FormatCode(final.Code)+" does not say whether it is of total or non-exchangeable hydrogen")
		}
	}
	add("procedure", "exchange", "for hydrogen: total or non-exchangeable, and how exchange was handled", true, missing, "the measurand of each value; handling stands in the method's procedure")
	if !hydrogen {
		applies("no hydrogen")
	}

	// Traceability.
	missing = nil
	scales := map[string]bool{}
	for _, final := range f.Finals {
		if final.Value.Scale == "" {
			missing = append(missing, "final value "+store.FormatCode(final.Code)+" names no scale")
		}
		scales[final.Value.Scale] = true
	}
	add("traceability", "scale", "the scale by its full name; for carbon which realisation", false, missing, strings.Join(slices.Sorted(mapKeys(scales)), ", "))
	missing = nil
	if len(f.Calibrations) == 0 {
		missing = append(missing, "no calibration")
	}
	for _, cal := range f.Calibrations {
		if len(cal.Value.Anchors) == 0 {
			missing = append(missing, fmt.Sprintf("calibration %s.%d has no anchors", store.FormatCode(cal.Code), cal.Ref.Version))
		}
	}
	if len(f.Anchors) == 0 {
		missing = append(missing, "no anchor is named with its assigned value")
	}
	add("traceability", "anchors", "every anchor with the assigned value that was used, its uncertainty and its version", false, missing, anchorList(f.Anchors))
	missing = nil
	for _, cal := range f.Calibrations {
		if len(cal.Value.Anchors) < 2 {
			missing = append(missing, fmt.Sprintf("calibration %s.%d has %d anchors: scaling by two ends cannot be stated", store.FormatCode(cal.Code), cal.Ref.Version, len(cal.Value.Anchors)))
		}
	}
	add("traceability", "span", "that the scale is spanned by at least two anchors (for hydrogen and oxygen said explicitly)", false, missing, "two anchors or more in each calibration")
	missing = nil
	for _, a := range f.Anchors {
		if v := a.Value.Value; v.Evidence == "" && v.Document == nil && a.Campaign == "" && v.Basis != "definition" {
			missing = append(missing, fmt.Sprintf("value %s.%d names no source", a.Value.Code, a.Value.Ref.Version))
		}
	}
	add("traceability", "sources", "source of each assigned value", false, missing, "evidence, document or campaign of each value")
	missing = nil
	inHouse := 0
	for _, a := range f.Anchors {
		if a.Value.Value.Basis != "assignment" || a.Value.Value.BackLoaded {
			continue
		}
		inHouse++
		if len(a.Behind) == 0 {
			missing = append(missing, fmt.Sprintf("value %s.%d leads to no international material", a.Value.Code, a.Value.Ref.Version))
		}
	}
	add("traceability", "international", "for in-house anchors the international materials behind them", true, missing, "the trace of each value")
	if inHouse == 0 {
		applies("no anchor was assigned in the laboratory")
	}
	missing = nil
	controlled := map[string]bool{}
	for _, k := range f.Controls {
		if k.Accepted != nil {
			controlled[k.Scale] = true
		}
	}
	for _, scale := range slices.Sorted(mapKeys(scales)) {
		if !controlled[scale] {
			missing = append(missing, "no control with an accepted value on "+scale)
		}
	}
	add("traceability", "controls", "quality-control material: name, accepted value, value found, n", true, missing, fmt.Sprintf("%s in the table of controls", countOf(len(f.Controls), "control")))

	// Data processing.
	missing = nil
	for _, m := range f.Methods {
		if len(m.Value.Corrections) == 0 {
			missing = append(missing, fmt.Sprintf("method %s.%d says of no correction where it is made", m.Code, m.Ref.Version))
		}
		for _, k := range m.Value.Corrections {
			if k.State == "" || k.State == "not said" {
				missing = append(missing, fmt.Sprintf("method %s.%d does not say where the correction %s is made", m.Code, m.Ref.Version, k.Name))
			}
		}
	}
	add("processing", "corrections", "each correction and where it is made", true, missing, "the corrections of "+refList(f.Methods))
	missing = nil
	for _, m := range f.Methods {
		for _, k := range m.Value.Corrections {
			if k.State == "earlier" && k.By == "" {
				missing = append(missing, fmt.Sprintf("method %s.%d does not say by what the correction %s was made", m.Code, m.Ref.Version, k.Name))
			}
			if k.Name == "o17" && (k.State == "earlier" || k.State == "here") && k.Constants == "" {
				missing = append(missing, fmt.Sprintf("method %s.%d names no set of constants for the correction o17", m.Code, m.Ref.Version))
			}
		}
	}
	add("processing", "constants", "by what earlier corrections were made; for 17O the set of constants", true, missing, "the corrections of "+refList(f.Methods))
	missing = nil
	for _, cal := range f.Calibrations {
		if cal.Value.Line == nil && len(cal.Value.Parameters) == 0 {
			missing = append(missing, fmt.Sprintf("calibration %s.%d states no line", store.FormatCode(cal.Code), cal.Ref.Version))
		}
	}
	add("processing", "normalization", "kind of normalization: points, model, weighting; slope and intercept on request", true, missing, "model, weights and line of each calibration")
	missing = nil
	for _, x := range f.Exclusions {
		if x.Value.Cause == "" && x.Reason == "" {
			missing = append(missing, "an exclusion in session "+store.FormatCode(x.Code)+" has neither cause nor reason")
		}
	}
	add("processing", "exclusions", "rejected data and why", true, missing, fmt.Sprintf("%s with cause and reason", countOf(len(f.Exclusions), "act of exclusion")))

	// Uncertainty.
	missing = nil
	for _, final := range f.Finals {
		if !(final.Value.StandardUncertainty > 0) || final.Value.K == 0 {
			missing = append(missing, "final value "+store.FormatCode(final.Code)+" states no uncertainty")
		}
	}
	add("uncertainty", "value", "value and kind of the uncertainty: standard, expanded with k", true, missing, "u, k and U of each line")
	missing = nil
	for _, cal := range f.Calibrations {
		for _, res := range cal.Value.Results {
			if res.Role == calib.Sample && len(res.Sources) == 0 {
				missing = append(missing, fmt.Sprintf("a result of calibration %s.%d has no budget", store.FormatCode(cal.Code), cal.Ref.Version))
				break
			}
		}
	}
	add("uncertainty", "contents", "what it contains: repeatability, anchors, drift and the rest", true, missing, "the budget of each result, and the shares in the trace of each delta")
	missing = nil
	for _, final := range f.Finals {
		if final.Value.Probability == 0 {
			missing = append(missing, "final value "+store.FormatCode(final.Code)+" states no coverage probability")
		}
	}
	add("uncertainty", "coverage", "coverage probability and degrees of freedom", true, missing, "p and nu_eff of each line; nu_eff is empty where infinite")
	return c
}

func countOf(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	if strings.HasPrefix(what, "act ") {
		return fmt.Sprintf("%d acts%s", n, strings.TrimPrefix(what, "act"))
	}
	return fmt.Sprintf("%d %ss", n, what)
}

func refList[T any](list []store.Version[T]) string {
	var names []string
	for _, v := range list {
		names = append(names, fmt.Sprintf("%s.%d", v.Code, v.Ref.Version))
	}
	return short(names, 5)
}

func anchorList(list []AnchorFact) string {
	var names []string
	for _, a := range list {
		names = append(names, fmt.Sprintf("%s.%d", a.Value.Code, a.Value.Ref.Version))
	}
	return short(names, 6)
}
