package registry

import (
	"context"
	"errors"
	"fmt"

	"deltamoor/store"
)

// A ReportRequest issues final values to a client.
type ReportRequest struct {
	Client, Title string
	// Finals are the codes of approved final values, in the order of the report.
	Finals []string
	// Amends is the code of a report that this one replaces.
	Amends string
	Reason string
	Note   string
	// Conformity holds decision rules for a statement of conformity; none asks for none.
	Conformity []store.ConformityRule
}

// MaxLines bounds one report.
const MaxLines = 5000

// A Report is an issued report with its lines read back.
type Report struct {
	Item[store.Report]
	Lines []ReportedDelta
	// AmendedBy are the codes of reports that replace it, newest last.
	AmendedBy []string
	// Missing names what the completeness check misses; filled in when it is issued.
	Missing []string
}

// A ReportedDelta is one line of a report: the delta that a permanent code stands for.
type ReportedDelta struct {
	store.ReportLine
	Laboratory string
	Hash       store.Hash
	// Label is the client's own name of the sample, where the reader may see it.
	Client, Label string
	IssuedAt      store.Instant
	IssuedBy      string
	// Superseded names newer approved versions of the final value, if there are any.
	FinalState  store.State
	Flags       []string
	EffectiveDF *float64
	// Conformity is stated where the report holds a rule for the line.
	Conformity *ConformityStatement
	// Amends is the code of the report that its own amends; "" where it amends none.
	Amends string
}

// Issue makes a report of approved final values. Every line gets a permanent
// code that resolves for ever; issuing is the signature of the actor.
func (r *Registry) Issue(ctx context.Context, actor Actor, q ReportRequest) (Report, error) {
	var c complaints
	c.text("body.client", q.Client, 200)
	c.text("body.title", q.Title, 200)
	if len(q.Finals) == 0 || len(q.Finals) > MaxLines {
		c.add("body.finals", fmt.Sprintf("%d codes", len(q.Finals)), "1 to %d final values", MaxLines)
	}
	if q.Amends != "" && q.Reason == "" {
		c.add("body.reason", "nothing", "why the report is amended")
	}
	for i := range q.Conformity {
		q.Conformity[i].Measurand = nameOr(q.Conformity[i].Measurand, Total)
	}
	checkConformity(&c, q.Conformity)
	if err := Complain("this report cannot be issued", c); err != nil {
		return Report{}, err
	}
	var code string
	var missing []string
	err := r.write(ctx, actor, MayApprove, func(ctx context.Context, tx *store.Tx) error {
		var err error
		if code, err = r.draw(ctx, &tx.View, actor.Laboratory, 'R'); err != nil {
			return err
		}
		var inputs []store.Input
		body := store.Report{Client: q.Client, Title: q.Title, Amends: q.Amends, Note: q.Note, Conformity: q.Conformity}
		var c complaints
		seen := map[string]int{}
		for i, final := range q.Finals {
			place := fmt.Sprintf("body.finals[%d]", i)
			if before, ok := seen[final]; ok {
				c.add(place, quote(final), "each final value once; body.finals[%d] is the same", before)
				continue
			}
			seen[final] = i
			line, ref, complaint, err := r.reportLine(ctx, &tx.View, actor, q.Client, code, i, final)
			if err != nil {
				return err
			}
			if complaint != nil {
				complaint.Place = place
				c = append(c, *complaint)
				continue
			}
			hash, err := store.ReportLineHash(line)
			if err != nil {
				return err
			}
			inputs = append(inputs, store.Input{Part: "line", Ref: ref})
			body.Lines = append(body.Lines, store.ReportHash{Code: line.Code, Hash: hash})
		}
		if q.Amends != "" {
			old, err := tx.Newest(ctx, store.Key{Laboratory: actor.Laboratory, Kind: store.KindReport, Code: q.Amends})
			if ignoreNotFound(err) != nil {
				return err
			}
			if err != nil {
				c.add("body.amends", quote(q.Amends), "the code of a report of this laboratory")
			} else {
				inputs = append(inputs, store.Input{Part: "amends", Ref: old.Ref})
			}
		}
		if err := Complain("this report cannot be issued", c); err != nil {
			return err
		}
		facts, err := factsOf(ctx, &tx.View, lineFinals(inputs))
		if err != nil {
			return err
		}
		check := CheckCompleteness(facts)
		missing = check.MissingItems()
		if !check.Complete {
			for _, m := range facts.Methods {
				if m.Value.Final.Complete {
					return incomplete(m, check)
				}
			}
		}
		ref, err := tx.Append(ctx, store.Draft{Kind: store.KindReport, Code: code, By: actor.Person, Reason: q.Reason, Inputs: inputs, Value: body, After: first})
		if err != nil {
			return err
		}
		tx.Guard(func(ctx context.Context, v *store.View) error {
			return restsOnApproved(ctx, v, store.Raw{Ref: ref, Inputs: inputs})
		})
		_, err = decide(ctx, tx, actor, store.Raw{Ref: ref}, DecisionRequest{Act: "approved", Version: 1, Meaning: "issued"})
		return err
	})
	if err != nil {
		return Report{}, err
	}
	out, err := r.Report(ctx, actor, code)
	out.Missing = missing
	return out, err
}

// incomplete refuses a report that says less than its method asks for.
func incomplete(m store.Version[store.Method], check Completeness) error {
	var c complaints
	for _, it := range check.Items {
		if it.State == Missing {
			c.add(it.ID, it.Where, "%s", it.Asks)
		}
	}
	return Complain(fmt.Sprintf("this report would be incomplete, and method %s.%d asks for complete ones", m.Code, m.Ref.Version), c)
}

// reportLine checks one final value and makes its line.
func (r *Registry) reportLine(ctx context.Context, v *store.View, actor Actor, client, report string, i int, final string) (store.ReportLine, store.Ref, *Complaint, error) {
	var line store.ReportLine
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindFinal, Code: final}
	raw, state, err := v.InForce(ctx, key, store.Moment{})
	if errors.Is(err, store.ErrNotFound) {
		return line, store.Ref{}, &Complaint{Found: quote(final), Expected: "the code of an approved final value of this laboratory"}, nil
	}
	if err != nil {
		return line, store.Ref{}, nil, err
	}
	if state != store.Approved {
		return line, store.Ref{}, &Complaint{Found: fmt.Sprintf("%s, which is %s", store.FormatCode(final), state), Expected: "an approved final value"}, nil
	}
	f, err := store.Decode[store.Final](raw)
	if err != nil {
		return line, store.Ref{}, nil, err
	}
	sample, err := newest[store.Sample](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindSample, Code: f.Value.Sample})
	if err != nil {
		return line, store.Ref{}, nil, err
	}
	if sample.Value.Client != client {
		return line, store.Ref{}, &Complaint{Found: fmt.Sprintf("%s, of a sample of %s", store.FormatCode(final), sample.Value.Client), Expected: "a sample of " + client}, nil
	}
	code, err := r.draw(ctx, v, actor.Laboratory, 'D')
	if err != nil {
		return line, store.Ref{}, nil, err
	}
	return store.NewReportLine(code, report, i, f), f.Ref, nil, nil
}

// Report reads a report with its lines.
func (r *Registry) Report(ctx context.Context, actor Actor, code string) (Report, error) {
	var out Report
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = Report{}
		var err error
		if out.Item, err = newest[store.Report](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindReport, Code: code}); err != nil {
			return err
		}
		if out.AmendedBy, err = amendments(ctx, v, out.Key); err != nil {
			return err
		}
		for _, line := range out.Value.Lines {
			d, err := reported(ctx, v, actor.Laboratory, line.Code)
			if err != nil {
				return err
			}
			out.Lines = append(out.Lines, d)
		}
		return nil
	})
	return out, err
}

// Reported answers a permanent code, as things stand now.
func (r *Registry) Reported(ctx context.Context, actor Actor, code string) (ReportedDelta, error) {
	if err := actor.need(MayRead); err != nil {
		return ReportedDelta{}, err
	}
	row, err := r.store.ReportedLine(ctx, actor.Laboratory, code)
	if errors.Is(err, store.ErrNotFound) {
		return ReportedDelta{}, Refuse(NotFound, "no reported delta %s", store.FormatCode(code))
	}
	if err != nil {
		return ReportedDelta{}, err
	}
	if row.FinalState == "" {
		return r.ReportedAt(ctx, actor, code, store.Moment{})
	}
	f := row.FinalValue
	out := ReportedDelta{ReportLine: store.NewReportLine(code, row.Report, row.Line, store.Version[store.Final]{Ref: row.Final, Value: f}),
		Laboratory: row.Laboratory, Hash: row.Hash, Client: row.Client, Label: row.Label, IssuedAt: row.IssuedAt, IssuedBy: row.IssuedBy,
		FinalState: row.FinalState, Flags: f.Flags, EffectiveDF: f.EffectiveDF}
	report, err := One[store.Report](ctx, r, actor, store.KindReport, row.Report, 0, store.Moment{})
	if err != nil {
		return ReportedDelta{}, err
	}
	out.Amends, out.Conformity = report.Value.Amends, conformity(report.Value.Conformity, out)
	r.lines.keep(actor.Laboratory+"/"+code, knownLine{out, row.SampleHash})
	return out, nil
}

// ReportedClaimed answers a permanent code to someone known by a claim, where
// one statement confirms both the claim and what is remembered of the delta.
// False: it did not, or the delta replaces another or is replaced, and nothing is said.
func (r *Registry) ReportedClaimed(ctx context.Context, claim Claim, code string) (ReportedDelta, bool, error) {
	laboratory := claim.actor.Laboratory
	line, ok := r.lines.find(laboratory + "/" + code)
	if !ok || claim.actor.need(MayRead) != nil {
		return ReportedDelta{}, false, nil
	}
	now, err := r.store.LineNow(ctx, claim.holder, code)
	if errors.Is(err, store.ErrNotFound) {
		return ReportedDelta{}, false, nil
	}
	if err != nil || now.FinalState == "" || now.Hash != line.Hash || now.Sample != line.sample || now.Amended || line.Amends != "" { // what it replaces, or is replaced by, has to be looked up
		return ReportedDelta{}, false, err
	}
	line.FinalState = now.FinalState
	return line.ReportedDelta, true, nil
}

// A knownLine is a reported delta with the hash of the sample's version that
// gave the label. The hash of the line binds everything else but the state.
type knownLine struct {
	ReportedDelta
	sample store.Hash
}

// maxKnownLines bounds the memory of reported deltas.
const maxKnownLines = 2000

// ReportedAt answers a permanent code as things stood at a moment. The delta
// itself never changes; what had become of it does.
func (r *Registry) ReportedAt(ctx context.Context, actor Actor, code string, m store.Moment) (ReportedDelta, error) {
	var out ReportedDelta
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		out, err = reportedAt(ctx, v, actor.Laboratory, code, m)
		return err
	})
	return out, err
}

func reported(ctx context.Context, v *store.View, laboratory, code string) (ReportedDelta, error) {
	return reportedAt(ctx, v, laboratory, code, store.Moment{})
}

func reportedAt(ctx context.Context, v *store.View, laboratory, code string, m store.Moment) (ReportedDelta, error) {
	unknown := Refuse(NotFound, "no reported delta %s", store.FormatCode(code))
	row, err := v.Reported(ctx, code)
	if errors.Is(err, store.ErrNotFound) || err == nil && row.Laboratory != laboratory {
		return ReportedDelta{}, unknown
	}
	if err != nil {
		return ReportedDelta{}, err
	}
	raw, err := v.Version(ctx, store.Key{Laboratory: row.Laboratory, Kind: store.KindReport, Code: row.Report}, row.Version)
	if err != nil {
		return ReportedDelta{}, err
	}
	if m.AsOf != nil && raw.RecordedAt > *m.AsOf { // not issued yet
		return ReportedDelta{}, unknown
	}
	report, err := store.Decode[store.Report](raw)
	if err != nil {
		return ReportedDelta{}, err
	}
	if row.Line < 0 || row.Line >= len(report.Value.Lines) || row.Line >= len(report.Inputs) {
		return ReportedDelta{}, fmt.Errorf("%s has no line %d", report.Ref, row.Line)
	}
	final, err := decodeVersion[store.Final](ctx, v, report.Inputs[row.Line].Ref)
	if err != nil {
		return ReportedDelta{}, err
	}
	out := ReportedDelta{ReportLine: store.NewReportLine(code, row.Report, row.Line, final), Laboratory: row.Laboratory, Hash: report.Value.Lines[row.Line].Hash,
		IssuedAt: report.RecordedAt, IssuedBy: report.RecordedBy, Flags: final.Value.Flags, EffectiveDF: final.Value.EffectiveDF}
	if out.FinalState, _, err = v.State(ctx, final.Ref, m); err != nil {
		return out, err
	}
	sample, err := newest[store.Sample](ctx, v, store.Key{Laboratory: row.Laboratory, Kind: store.KindSample, Code: final.Value.Sample})
	if err != nil {
		return out, err
	}
	out.Client, out.Label = sample.Value.Client, sample.Value.Label
	out.Amends, out.Conformity = report.Value.Amends, conformity(report.Value.Conformity, out)
	return out, nil
}
