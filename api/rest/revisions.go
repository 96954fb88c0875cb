package rest

import (
	"context"
	"fmt"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A NewRevision says what may have been wrong: any number of values, bottles, H3 factors,
// method versions and readings, all in one revision.
type NewRevision struct {
	Reason     string              `json:"reason,omitempty" maxLength:"3000" doc:"Asked for unless preview=true; it stands on everything drawn up again."`
	Values     []RevisedValue      `json:"values,omitempty" maxItems:"500"`
	Units      []SuspectUnit       `json:"units,omitempty" maxItems:"500"`
	Methods    []RevisedMethod     `json:"methods,omitempty" maxItems:"500"`
	Factors    []RevisedFactor     `json:"factors,omitempty" maxItems:"500"`
	Exclusions []RevisionExclusion `json:"exclusions,omitempty" maxItems:"500"`
}

// A RevisedValue is one assigned value that changes or falls away. Exactly one
// of value, use and withdrawn is given.
type RevisedValue struct {
	Laboratory string     `json:"laboratory,omitempty" maxLength:"8" doc:"Left out: the own one where it has such a value, else common."`
	Material   string     `json:"material" maxLength:"40"`
	Scale      string     `json:"scale" maxLength:"40" example:"d13C-VPDB-LSVEC"`
	Measurand  string     `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
	Version    int        `json:"version,omitempty" minimum:"1" doc:"The version no longer to be used; left out: the one in force."`
	Use        int        `json:"use,omitempty" minimum:"1" doc:"Number of a recorded version to use in its place."`
	Value      *Decimal   `json:"value,omitempty" doc:"‰; a version that the revision drafts."`
	U          *Decimal   `json:"u,omitempty" doc:"Standard uncertainty of value, k = 1 (‰): short for stated with the kind standard."`
	Stated     *Stated    `json:"stated,omitempty" doc:"The uncertainty of value as its source printed it."`
	Basis      string     `json:"basis,omitempty" enum:"certificate,literature,partner,provisional" doc:"Of value; left out: literature."`
	Evidence   string     `json:"evidence,omitempty" maxLength:"2000"`
	Withdrawn  bool       `json:"withdrawn,omitempty" doc:"Sessions are fitted without it."`
	From       *time.Time `json:"from,omitempty" doc:"For sessions that started then or later; left out: all."`
}

// A SuspectUnit is a bottle whose readings do not count since a date.
type SuspectUnit struct {
	Unit  string     `json:"unit" maxLength:"40" doc:"Code of the unit."`
	Since *time.Time `json:"since,omitempty" doc:"In sessions that started then or later; left out: since when the unit is recorded as suspect, else all."`
}

// A RevisedFactor says which determination of an instrument's H3 factor should
// have been used.
type RevisedFactor struct {
	Instrument string `json:"instrument" maxLength:"40"`
	Version    int    `json:"version" minimum:"1" doc:"The wrong one."`
	Use        int    `json:"use" minimum:"1" doc:"The right one; deltas that a program formed with the wrong one have it undone first."`
}

// A RevisedMethod says which version of a method should have been used.
type RevisedMethod struct {
	Method  string `json:"method" maxLength:"40"`
	Version int    `json:"version" minimum:"1" doc:"The wrong one."`
	Use     int    `json:"use" minimum:"1" doc:"The right one."`
}

// A RevisionExclusion names readings that should have been left out.
type RevisionExclusion struct {
	Session  string `json:"session" maxLength:"40"`
	Readings []int  `json:"readings" minItems:"1" maxItems:"10000"`
}

func (n NewRevision) proposal() (registry.Proposal, error) {
	p := registry.Proposal{Reason: n.Reason}
	for i, v := range n.Values {
		q := registry.ProposedValue{Laboratory: v.Laboratory, Material: v.Material, Scale: v.Scale, Measurand: v.Measurand, Version: v.Version, Use: v.Use,
			Basis: v.Basis, Evidence: v.Evidence, Withdrawn: v.Withdrawn, From: instantPointer(v.From)}
		if v.Value != nil {
			q.Value = store.Decimal(*v.Value)
		}
		switch {
		case v.U != nil && v.Stated != nil:
			return p, complain("this revision cannot be evaluated", fmt.Sprintf("body.values[%d].u", i), string(*v.U)+", beside stated", "one of the two")
		case v.U != nil:
			q.Stated = store.Stated{Text: string(*v.U), Kind: "standard"}
		case v.Stated != nil:
			q.Stated = store.Stated(*v.Stated)
		}
		p.Values = append(p.Values, q)
	}
	for i, u := range n.Units {
		code, err := parseCode(fmt.Sprintf("body.units[%d].unit", i), u.Unit, store.KindUnit)
		if err != nil {
			return p, err
		}
		p.Units = append(p.Units, store.SuspectUnit{Unit: code, Since: instantPointer(u.Since)})
	}
	for _, m := range n.Methods {
		p.Methods = append(p.Methods, registry.ProposedMethod(m))
	}
	for _, x := range n.Factors {
		p.Factors = append(p.Factors, registry.ProposedFactor(x))
	}
	for i, x := range n.Exclusions {
		code, err := parseCode(fmt.Sprintf("body.exclusions[%d].session", i), x.Session, store.KindSession)
		if err != nil {
			return p, err
		}
		p.Exclusions = append(p.Exclusions, store.RevisionExclusion{Session: code, Readings: x.Readings})
	}
	return p, nil
}

// A RevisionMade is a recorded revision and the job that draws everything up again.
type RevisionMade struct {
	Revision Revision `json:"revision"`
	Job      Job      `json:"job"`
}

// RevisionParams are those of a proposal.
type RevisionParams struct {
	PreviewParam
	Full      bool    `query:"full" doc:"With preview=true: also draw up again, for at most 2000 versions."`
	Drafts    bool    `query:"drafts" doc:"With preview=true: drafts too."`
	Threshold float64 `query:"threshold" minimum:"0" doc:"With preview=true: list only what moves by this part of its u or more."`
	Top       int     `query:"top" minimum:"1" maximum:"1000" doc:"With preview=true: how many are ranked; left out: 50."`
	Limit     int     `query:"limit" minimum:"1" maximum:"5000" doc:"With preview=true: how many are listed; left out: 100."`
}

func (f *face) addRevision(ctx context.Context, actor registry.Actor, in *struct {
	RevisionParams
	Body NewRevision
}) (*answer, error) {
	p, err := in.Body.proposal()
	if err != nil {
		return nil, err
	}
	if in.Preview {
		return f.previewRevision(ctx, actor, p, in.RevisionParams)
	}
	it, job, err := f.registry.ProposeRevision(ctx, actor, p)
	if err != nil {
		return nil, err
	}
	out := RevisionMade{showRevision(it), showJob(job)}
	return jsonAnswer(out, 202, map[string]string{"ETag": quoteTag(it.Tag()), "Location": "/v1/revisions/" + out.Revision.Code})
}

// A Revision is a recorded revision.
type Revision struct {
	Recorded
	Phase      string              `json:"phase" enum:"proposed,drafted" doc:"proposed until its job has drawn everything up again."`
	Values     []RevisedVersion    `json:"values"`
	Units      []SuspectUnit       `json:"units"`
	Methods    []RevisedMethod     `json:"methods"`
	Factors    []RevisedFactor     `json:"factors"`
	Exclusions []RevisionExclusion `json:"exclusions"`
	FrozenAt   time.Time           `json:"frozen_at" doc:"Nothing recorded later belongs to the affected set."`
	Frozen     int64               `json:"frozen_position" doc:"Size of the ledger then."`
	Drafted    *DraftedSet         `json:"drafted" doc:"null while proposed."`
}

// A RevisedVersion is a value that a revision replaces or withdraws.
type RevisedVersion struct {
	Old       Input      `json:"old"`
	New       *Input     `json:"new,omitempty" doc:"A recorded version used in its place."`
	Value     *Decimal   `json:"value,omitempty" doc:"Of the version that the revision drafts (‰)."`
	U         *float64   `json:"u,omitempty" doc:"Its standard uncertainty (‰)."`
	Withdrawn bool       `json:"withdrawn,omitempty"`
	From      *time.Time `json:"from,omitempty"`
}

// A DraftedSet is what a revision drew up.
type DraftedSet struct {
	Calibrations int64           `json:"calibrations"`
	Values       int64           `json:"values"`
	Finals       int64           `json:"finals"`
	Hash         string          `json:"hash" doc:"SHA-256 over the drafts' body hashes, sorted: an approval binds it."`
	Untold       []UntoldVersion `json:"untold" doc:"What could not be drawn up again."`
}

// An UntoldVersion is a version whose new value cannot be told, and why.
type UntoldVersion struct {
	Kind    string `json:"kind"`
	Code    string `json:"code"`
	Version int    `json:"version"`
	Why     string `json:"why"`
}

func showVersionRef(part string, ref store.Ref) Input {
	return Input{Part: part, Laboratory: ref.Laboratory, Kind: string(ref.Kind), Code: showCode(ref.Kind, ref.Code), Version: ref.Version, Hash: ref.Hash.String()}
}

func showRevision(it registry.Item[store.Revision]) Revision {
	v := it.Value
	out := Revision{Recorded: recorded(it), Phase: v.Phase, FrozenAt: v.FrozenAt.Time(), Frozen: v.Position,
		Values: convert(v.Values, func(r store.RevisedValue) RevisedVersion {
			x := RevisedVersion{Old: showVersionRef("old", r.Old), Withdrawn: r.Withdrawn, From: timePointer(r.From)}
			if r.New != nil {
				now := showVersionRef("new", *r.New)
				x.New = &now
			} else if !r.Withdrawn {
				value := Decimal(r.Value)
				x.Value, x.U = &value, &r.StandardUncertainty
			}
			return x
		}),
		Units: convert(v.Units, func(u store.SuspectUnit) SuspectUnit {
			return SuspectUnit{store.FormatCode(u.Unit), timePointer(u.Since)}
		}),
		Factors: convert(v.Factors, func(x store.ReplacedFactor) RevisedFactor {
			return RevisedFactor{x.Old.Code, x.Old.Version, x.New.Version}
		}),
		Methods: convert(v.Methods, func(m store.ReplacedMethod) RevisedMethod {
			return RevisedMethod{m.Old.Code, m.Old.Version, m.New.Version}
		}),
		Exclusions: convert(v.Exclusions, func(x store.RevisionExclusion) RevisionExclusion {
			return RevisionExclusion{store.FormatCode(x.Session), append([]int{}, x.Readings...)}
		})}
	if d := v.Drafted; d != nil {
		out.Drafted = &DraftedSet{d.Calibrations, d.Values, d.Finals, d.Hash.String(), convert(d.Untold, func(u store.UntoldVersion) UntoldVersion {
			return UntoldVersion{string(u.Ref.Kind), showCode(u.Ref.Kind, u.Ref.Code), u.Ref.Version, u.Why}
		})}
	}
	return out
}

var revisionKind = kindOfRecord[store.Revision, Revision]{kind: store.KindRevision, show: showRevision, made: true,
	csv: table[Revision]{columns("phase", "calibrations", "values", "finals", "set"), func(r Revision) []string {
		d := r.Drafted
		if d == nil {
			d = &DraftedSet{}
		}
		return r.row(r.Phase, fmt.Sprint(d.Calibrations), fmt.Sprint(d.Values), fmt.Sprint(d.Finals), d.Hash)
	}}}

// A RevisionDecision is a decision on a revision; an approval names the hash of the set.
type RevisionDecision struct {
	NewDecision
	Set string `json:"set,omitempty" maxLength:"64" doc:"With approved: the hash of the drafted set that its author saw."`
}

// decideRevision records a decision. An approval starts the job that carries it
// to the members of the set.
func (f *face) decideRevision(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body RevisionDecision
}) (*one[Revision], error) {
	code, err := revisionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	if in.Body.Decision != "approved" {
		it, err := decide[store.Revision](ctx, f, actor, store.KindRevision, code, in.MatchParam, in.Body.NewDecision)
		if err != nil {
			return nil, err
		}
		return &one[Revision]{ETag: quoteTag(it.Tag()), Body: showRevision(it)}, nil
	}
	if !actor.May(registry.MayApprove) { // before anything of the record is told
		return nil, registry.Refuse(registry.Refused, "%s may not approve in laboratory %s", actor.Person, actor.Laboratory)
	}
	it, err := seen[store.Revision](ctx, f, actor, store.KindRevision, code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	hash, err := parseHash("body.set", in.Body.Set)
	if err != nil {
		return nil, err
	}
	if hash == nil {
		return nil, complain("this revision cannot be approved", "body.set", "", "the hash of the drafted set, as the revision shows it")
	}
	if _, err := f.registry.ApproveRevision(ctx, actor, code, *hash, registry.DecisionRequest{Version: it.Ref.Version, Seen: len(it.Decisions), Reason: in.Body.Reason}); err != nil {
		return nil, err
	}
	it, err = registry.One[store.Revision](ctx, f.registry, actor, store.KindRevision, code, it.Ref.Version, store.Moment{})
	if err != nil {
		return nil, err
	}
	return &one[Revision]{ETag: quoteTag(it.Tag()), Body: showRevision(it)}, nil
}
