package rest

import (
	"context"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A kindOfRecord is what the routes of versions need to know of a noun.
type kindOfRecord[S store.Body, T any] struct {
	kind store.Kind
	show func(registry.Item[S]) T
	csv  table[T]
	// made: the registry makes the codes of this kind.
	made bool
}

func (k kindOfRecord[S, T]) code(text string) (string, error) {
	if !k.made {
		return text, nil
	}
	return GeneratedParam{text}.parse(k.kind)
}

// CodeVersions are the parameters of a record's list of versions.
type CodeVersions struct {
	CodeParam
	ListParams
}

// CodeVersion names one version of a record.
type CodeVersion struct {
	CodeParam
	Number int `path:"version" minimum:"1" doc:"Number of the version." example:"1"`
}

func versionsOf[S store.Body, T any](f *face, k kindOfRecord[S, T]) func(context.Context, registry.Actor, *CodeVersions) (*answer, error) {
	return func(ctx context.Context, actor registry.Actor, in *CodeVersions) (*answer, error) {
		code, err := k.code(in.Code)
		if err != nil {
			return nil, err
		}
		return answerList(ctx, f, &in.ListParams, versionPages[S](f, actor, k.kind, code), k.show, k.csv)
	}
}

func versionOf[S store.Body, T any](f *face, k kindOfRecord[S, T]) func(context.Context, registry.Actor, *CodeVersion) (*one[T], error) {
	return func(ctx context.Context, actor registry.Actor, in *CodeVersion) (*one[T], error) {
		code, err := k.code(in.Code)
		if err != nil {
			return nil, err
		}
		return oneOf(ctx, f, actor, k, code, in.Number, store.Moment{})
	}
}

// RecordParams name a record at a moment.
type RecordParams struct {
	CodeParam
	MomentParams
}

func recordOf[S store.Body, T any](f *face, k kindOfRecord[S, T]) func(context.Context, registry.Actor, *RecordParams) (*one[T], error) {
	return func(ctx context.Context, actor registry.Actor, in *RecordParams) (*one[T], error) {
		code, err := k.code(in.Code)
		if err != nil {
			return nil, err
		}
		return oneOf(ctx, f, actor, k, code, 0, in.moment())
	}
}

func oneOf[S store.Body, T any](ctx context.Context, f *face, actor registry.Actor, k kindOfRecord[S, T], code string, number int, m store.Moment) (*one[T], error) {
	it, err := registry.One[S](ctx, f.registry, actor, k.kind, code, number, m)
	if err != nil {
		return nil, err
	}
	out := &one[T]{ETag: quoteTag(it.Tag()), Body: k.show(it)}
	if number > 0 { // a permanent address says what came after
		newest, err := f.registry.NewestNumber(ctx, actor, it.Key)
		if err != nil {
			return nil, err
		}
		out.Link = laterLink(it.Key, number, newest)
	}
	return out, nil
}

// recordsOf lists the records of a kind.
func recordsOf[S store.Body, T any](f *face, k kindOfRecord[S, T]) func(context.Context, registry.Actor, *ListParams) (*answer, error) {
	return func(ctx context.Context, actor registry.Actor, in *ListParams) (*answer, error) {
		read := func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[S]], error) {
			return registry.List[S](ctx, f.registry, actor, actor.Laboratory, k.kind, q)
		}
		return answerList(ctx, f, in, read, k.show, k.csv)
	}
}

// A NewDecision says something about a version.
type NewDecision struct {
	Decision string `json:"decision" enum:"submitted,approved,declined,withdrawn"`
	Reason   string `json:"reason,omitempty" maxLength:"4000" doc:"Asked for when declining or withdrawing."`
	Version  int    `json:"version,omitempty" minimum:"1" doc:"The version decided on; left out: the one that If-Match names."`
	EffectAt string `json:"effect_at,omitempty" format:"date-time" doc:"When a withdrawal takes effect; left out: now."`
	Meaning  string `json:"meaning,omitempty" maxLength:"100" doc:"What the signature stands for." example:"approved"`
}

// decide records a decision on the version that If-Match names.
func decide[S store.Body](ctx context.Context, f *face, actor registry.Actor, kind store.Kind, code string, match MatchParam, d NewDecision) (registry.Item[S], error) {
	it, err := seen[S](ctx, f, actor, kind, code, match)
	if err != nil {
		return it, err
	}
	if d.Version != 0 && d.Version != it.Ref.Version {
		return it, registry.Complain("this decision cannot be recorded", []registry.Complaint{{Place: "body.version",
			Found: whole(&d.Version), Expected: "the version that If-Match names, " + whole(&it.Ref.Version)}})
	}
	q := registry.DecisionRequest{Act: d.Decision, Reason: d.Reason, Version: it.Ref.Version, Seen: len(it.Decisions), Meaning: d.Meaning}
	if d.EffectAt != "" {
		var at store.Instant
		if err := at.UnmarshalText([]byte(d.EffectAt)); err != nil {
			return it, complain("this decision cannot be recorded", "body.effect_at", d.EffectAt, "a time after RFC 3339")
		}
		q.EffectAt = &at
	}
	if _, err := f.registry.Decide(ctx, actor, kind, code, q); err != nil {
		return it, err
	}
	return registry.One[S](ctx, f.registry, actor, kind, code, it.Ref.Version, store.Moment{})
}

// DecideParams are a decision on a record, and what its author saw of it.
type DecideParams struct {
	CodeParam
	MatchParam
	Body NewDecision
}

func decisionOn[S store.Body, T any](f *face, k kindOfRecord[S, T]) func(context.Context, registry.Actor, *DecideParams) (*one[T], error) {
	return func(ctx context.Context, actor registry.Actor, in *DecideParams) (*one[T], error) {
		code, err := k.code(in.Code)
		if err != nil {
			return nil, err
		}
		it, err := decide[S](ctx, f, actor, k.kind, code, in.MatchParam, in.Body)
		if err != nil {
			return nil, err
		}
		return &one[T]{ETag: quoteTag(it.Tag()), Body: k.show(it)}, nil
	}
}

// A VersionDecision is a decision with the version it is about.
type VersionDecision struct {
	Version int `json:"version"`
	Decision
}

var decisionTable = table[VersionDecision]{[]string{"version", "decision", "by", "at", "reason", "effect_at", "meaning"}, func(d VersionDecision) []string {
	return []string{whole(&d.Version), d.Decision.Decision, d.By, clock(&d.At), d.Reason, clock(d.EffectAt), d.Meaning}
}}

// decisionPages reads all decisions on a record's versions.
func decisionPages[S store.Body](f *face, actor registry.Actor, kind store.Kind, code string) pages[VersionDecision] {
	versions := versionPages[S](f, actor, kind, code)
	return func(ctx context.Context, q registry.Query) (registry.Page[VersionDecision], error) {
		page, err := versions(ctx, q)
		out := registry.Page[VersionDecision]{After: page.After}
		for _, it := range page.Items {
			for _, d := range it.Decisions {
				out.Items = append(out.Items, VersionDecision{it.Ref.Version, showDecision(d)})
			}
		}
		return out, err
	}
}

func same[T any](t T) T { return t }

func decisionsOn[S store.Body, T any](f *face, k kindOfRecord[S, T]) func(context.Context, registry.Actor, *CodeVersions) (*answer, error) {
	return func(ctx context.Context, actor registry.Actor, in *CodeVersions) (*answer, error) {
		code, err := k.code(in.Code)
		if err != nil {
			return nil, err
		}
		return answerList(ctx, f, &in.ListParams, decisionPages[S](f, actor, k.kind, code), same, decisionTable)
	}
}
