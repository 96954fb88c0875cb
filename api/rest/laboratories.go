package rest

import (
	"context"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Laboratory is a version of a laboratory.
type Laboratory struct {
	Recorded
	Name         string   `json:"name"`
	Zone         string   `json:"zone,omitempty" doc:"IANA time zone, for local times in files."`
	SecondPerson []string `json:"second_person" doc:"Kinds of records whose approval needs another person than the author."`
}

func showLaboratory(it registry.Item[store.Laboratory]) Laboratory {
	l := it.Value
	return Laboratory{Recorded: recorded(it), Name: l.Name, Zone: l.Zone, SecondPerson: convert(l.SecondPerson, func(k store.Kind) string { return string(k) })}
}

var laboratoryKind = kindOfRecord[store.Laboratory, Laboratory]{kind: store.KindLaboratory, show: showLaboratory,
	csv: table[Laboratory]{columns("name", "zone"), func(l Laboratory) []string { return l.row(l.Name, l.Zone) }}}

// laboratories lists the laboratories that the asker is in: a token is of one.
func (f *face) laboratories(ctx context.Context, actor registry.Actor, in *ListParams) (*answer, error) {
	it, err := f.registry.Laboratory(ctx, actor)
	if err != nil {
		return nil, err
	}
	return answerList(ctx, f, in, wholeList([]registry.Item[store.Laboratory]{it}, nil), showLaboratory, laboratoryKind.csv)
}

func (f *face) laboratory(ctx context.Context, actor registry.Actor, in *struct{ CodeParam }) (*one[Laboratory], error) {
	if !strings.EqualFold(in.Code, actor.Laboratory) {
		return nil, registry.Refuse(registry.NotFound, "no laboratory %q", in.Code)
	}
	it, err := f.registry.Laboratory(ctx, actor)
	if err != nil {
		return nil, err
	}
	return &one[Laboratory]{ETag: quoteTag(it.Tag()), Body: showLaboratory(it)}, nil
}
