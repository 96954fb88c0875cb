package rest

import (
	"context"
	"net/url"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// An InstrumentBody is what is said of an instrument.
type InstrumentBody struct {
	Name          string `json:"name" maxLength:"200" example:"Elemental analyser, room 12"`
	Configuration string `json:"configuration,omitempty" maxLength:"1000"`
	Serial        string `json:"serial,omitempty" maxLength:"100"`
	Location      string `json:"location,omitempty" maxLength:"200"`
}

// An Instrument is a version of an instrument.
type Instrument struct {
	Recorded
	InstrumentBody
}

func showInstrument(it registry.Item[store.Instrument]) Instrument {
	return Instrument{recorded(it), InstrumentBody(it.Value)}
}

var instrumentKind = kindOfRecord[store.Instrument, Instrument]{kind: store.KindInstrument, show: showInstrument,
	csv: table[Instrument]{columns("name", "configuration", "serial", "location"), func(i Instrument) []string { return i.row(i.Name, i.Configuration, i.Serial, i.Location) }}}

// A NewInstrument registers an instrument.
type NewInstrument struct {
	Code string `json:"code" maxLength:"40" example:"EA1"`
	InstrumentBody
}

func (f *face) addInstrument(ctx context.Context, actor registry.Actor, in *struct{ Body NewInstrument }) (*one[Instrument], error) {
	it, err := f.registry.StateInstrument(ctx, actor, in.Body.Code, store.Instrument(in.Body.InstrumentBody), registry.Edit{})
	if err != nil {
		return nil, err
	}
	return &one[Instrument]{ETag: quoteTag(it.Tag()), Location: "/v1/instruments/" + url.PathEscape(it.Code), Body: showInstrument(it)}, nil
}

// An InstrumentChange states a further version of an instrument, whole.
type InstrumentChange struct {
	Reason string `json:"reason" minLength:"1" maxLength:"4000"`
	InstrumentBody
}

func (f *face) changeInstrument(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body InstrumentChange
}) (*one[Instrument], error) {
	before, err := seen[store.Instrument](ctx, f, actor, store.KindInstrument, in.Code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	it, err := f.registry.StateInstrument(ctx, actor, before.Code, store.Instrument(in.Body.InstrumentBody), registry.Edit{After: before.Ref.Version, Reason: in.Body.Reason})
	if err != nil {
		return nil, err
	}
	return &one[Instrument]{ETag: quoteTag(it.Tag()), Body: showInstrument(it)}, nil
}
