package rest

import (
	"context"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Unit is a version of one bottle, vial, ampoule or cylinder of a material.
// Its state is the unit's own.
type Unit struct {
	Recorded
	Material           string  `json:"material"`
	MaterialLaboratory string  `json:"material_laboratory"`
	Label              string  `json:"label"`
	State              string  `json:"state" enum:"sealed,open,in-use,suspect,quarantined,empty,disposed" doc:"State of the unit."`
	Content            *Amount `json:"content,omitempty" doc:"What is in it."`
	Location           string  `json:"location,omitempty"`
	// What became of it.
	FillingOrder int        `json:"filling_order,omitempty" doc:"Place in the order of filling."`
	Openings     int        `json:"openings,omitempty" doc:"How often it was opened."`
	OpenedAt     *time.Time `json:"opened_at,omitempty" doc:"When it was first opened."`
	SuspectSince *time.Time `json:"suspect_since,omitempty" doc:"The last moment at which it was known to be good."`
	Container    string     `json:"container,omitempty" enum:"bottle,vial,ampoule,cylinder" doc:"What it is."`
	// What this version says.
	At         *time.Time  `json:"at,omitempty" doc:"When what this version says happened, where that was before it was recorded."`
	Taken      *Amount     `json:"taken,omitempty" doc:"What was taken from it then."`
	Excursions []Excursion `json:"excursions,omitempty" doc:"When it was not stored as it should be."`
}

// An Excursion is a time at which a unit was not stored as it should be.
type Excursion struct {
	At   time.Time `json:"at"`
	What string    `json:"what"`
}

func showUnit(it registry.Item[store.Unit]) Unit {
	u := it.Value
	return Unit{Recorded: recorded(it), Material: u.Material, MaterialLaboratory: u.MaterialLaboratory, Label: u.Label, State: u.State, Content: showAmount(u.Content), Location: u.Location,
		FillingOrder: u.FillingOrder, Openings: u.Openings, OpenedAt: timePointer(u.OpenedAt), SuspectSince: timePointer(u.SuspectSince),
		Container: u.Container, At: timePointer(u.At), Taken: showAmount(u.Taken), Excursions: convertOrNil(u.Excursions, func(x store.Excursion) Excursion { return Excursion{x.At.Time(), x.What} })}
}

var unitKind = kindOfRecord[store.Unit, Unit]{kind: store.KindUnit, show: showUnit, made: true,
	csv: table[Unit]{[]string{"code", "version", "laboratory", "recorded_at", "recorded_by", "reason", "hash", "material", "label", "state", "content", "location"}, func(u Unit) []string {
		return []string{u.Code, whole(&u.Version), u.Laboratory, clock(u.RecordedAt), u.RecordedBy, u.Reason, u.Hash, u.Material, u.Label, u.State, u.Content.text(), u.Location}
	}}}

func (f *face) units(ctx context.Context, actor registry.Actor, in *ListParams) (*answer, error) {
	return f.answerUnits(ctx, actor, in, "")
}

func (f *face) materialUnits(ctx context.Context, actor registry.Actor, in *MaterialParams) (*answer, error) {
	return f.answerUnits(ctx, actor, &in.ListParams, in.Code)
}

func (f *face) answerUnits(ctx context.Context, actor registry.Actor, p *ListParams, material string) (*answer, error) {
	read := func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[store.Unit]], error) {
		return f.registry.Units(ctx, actor, material, q)
	}
	return answerList(ctx, f, p, read, showUnit, unitKind.csv)
}

// NewUnits registers units of a material, all alike.
type NewUnits struct {
	Label     string  `json:"label" maxLength:"100" doc:"What stands on it; several are numbered behind it." example:"bottle"`
	Count     int     `json:"count,omitempty" minimum:"1" maximum:"1000" doc:"How many; left out: one."`
	Container string  `json:"container,omitempty" enum:"bottle,vial,ampoule,cylinder"`
	State     string  `json:"state,omitempty" enum:"sealed,open,in-use,suspect,quarantined,empty,disposed" doc:"Left out: sealed."`
	Content   *Amount `json:"content,omitempty"`
	Location  string  `json:"location,omitempty" maxLength:"200"`
}

func (f *face) addUnits(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Body NewUnits
}) (*plain[List[Unit]], error) {
	b := in.Body
	if b.Count == 0 {
		b.Count = 1
	}
	items, err := f.registry.AddUnits(ctx, actor, store.Unit{Material: in.Code, Label: b.Label, Container: b.Container, State: b.State, Content: b.Content.body(), Location: b.Location}, b.Count)
	if err != nil {
		return nil, err
	}
	return &plain[List[Unit]]{List[Unit]{Items: convert(items, showUnit)}}, nil
}

// A UnitChange states a further version of a unit; what is left out stays.
type UnitChange struct {
	Reason    string     `json:"reason" minLength:"1" maxLength:"4000" doc:"Opened, moved, suspected: why."`
	State     string     `json:"state,omitempty" enum:"sealed,open,in-use,suspect,quarantined,empty,disposed"`
	Content   *Amount    `json:"content,omitempty" doc:"What is in it now."`
	Taken     *Amount    `json:"taken,omitempty" doc:"What was taken from it, outside sessions."`
	At        *time.Time `json:"at,omitempty" doc:"When it happened; left out: now."`
	Excursion string     `json:"excursion,omitempty" maxLength:"1000" doc:"How it was not stored as it should be: sessions that use it afterwards are warned."`
	Location  string     `json:"location,omitempty" maxLength:"200"`
}

func (f *face) changeUnit(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body UnitChange
}) (*one[Unit], error) {
	code, err := unitKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	before, err := seen[store.Unit](ctx, f, actor, store.KindUnit, code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	b := in.Body
	use := registry.UnitUse{State: b.State, Location: b.Location, Left: b.Content.body(), Taken: b.Taken.body(), At: instantPointer(b.At), Excursion: b.Excursion}
	it, err := f.registry.UseUnit(ctx, actor, code, use, registry.Edit{After: before.Ref.Version, Reason: b.Reason})
	if err != nil {
		return nil, err
	}
	return &one[Unit]{ETag: quoteTag(it.Tag()), Body: showUnit(it)}, nil
}
