package rest

import (
	"context"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// A SampleBody is an entry of the list of samples.
type SampleBody struct {
	Client string   `json:"client" maxLength:"100"`
	Label  string   `json:"label" maxLength:"100" doc:"The client's own name of it; it may repeat."`
	Wanted []Wanted `json:"wanted" minItems:"1" maxItems:"20"`
	Matrix string   `json:"matrix,omitempty" maxLength:"200"`
	Note   string   `json:"note,omitempty" maxLength:"2000"`
}

func (b SampleBody) body() store.Sample {
	return store.Sample{Client: b.Client, Label: b.Label, Wanted: convert(b.Wanted, func(w Wanted) store.Wanted { return store.Wanted(w) }), Matrix: b.Matrix, Note: b.Note}
}

// A Sample is a version of an entry of the list of samples.
type Sample struct {
	Recorded
	SampleBody
}

func showSample(it registry.Item[store.Sample]) Sample {
	s := it.Value
	return Sample{recorded(it), SampleBody{s.Client, s.Label, convert(s.Wanted, func(w store.Wanted) Wanted { return Wanted(w) }), s.Matrix, s.Note}}
}

var sampleKind = kindOfRecord[store.Sample, Sample]{kind: store.KindSample, show: showSample, made: true,
	csv: table[Sample]{columns("client", "label", "wanted", "matrix", "note"), func(s Sample) []string {
		return s.row(s.Client, s.Label, spaced(convert(s.Wanted, func(w Wanted) string { return w.Scale })), s.Matrix, s.Note)
	}}}

// NewSamples put samples on the list.
type NewSamples struct {
	Samples []SampleBody `json:"samples" minItems:"1" maxItems:"10000"`
}

// addSamples takes the list as JSON or as a table with the headings client,
// label, wanted, matrix, note.
func (f *face) addSamples(ctx context.Context, actor registry.Actor, in *struct{ FileParams }) (*plain[List[Sample]], error) {
	media, err := in.media()
	if err != nil {
		return nil, err
	}
	var samples []store.Sample
	if media == mediaJSON {
		body, err := decode[NewSamples](f, in.RawBody)
		if err != nil {
			return nil, err
		}
		samples = convert(body.Samples, SampleBody.body)
	} else {
		rows, err := exchange.ReadSamples(in.Name, in.RawBody)
		if err != nil {
			return nil, err
		}
		samples = convert(rows, func(r exchange.SampleRow) store.Sample {
			return store.Sample{Client: r.Client, Label: r.Label, Wanted: convert(r.Wanted, func(s string) store.Wanted { return store.Wanted{Scale: s} }), Matrix: r.Matrix, Note: r.Note}
		})
	}
	items, err := f.registry.AddSamples(ctx, actor, samples)
	if err != nil {
		return nil, err
	}
	return &plain[List[Sample]]{List[Sample]{Items: convert(items, showSample)}}, nil
}

// A Standing says where one wanted quantity of a sample is.
type Standing struct {
	Wanted
	Stage    string   `json:"stage" enum:"waiting,measured,final,reported"`
	Final    string   `json:"final,omitempty" doc:"Code of the final value."`
	Reported []string `json:"reported" doc:"Codes under which it was reported."`
}

// A SampleStanding is a sample and where everything wanted of it stands.
type SampleStanding struct {
	Sample
	Standing []Standing `json:"standing"`
}

func (f *face) sample(ctx context.Context, actor registry.Actor, in *struct{ CodeParam }) (*one[SampleStanding], error) {
	code, err := sampleKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	it, standing, err := f.registry.SampleStanding(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	out := SampleStanding{showSample(it), convert(standing, func(s registry.Standing) Standing {
		return Standing{Wanted(s.Wanted), s.State, showCode(store.KindFinal, s.Final), convert(s.Reported, store.FormatCode)}
	})}
	return &one[SampleStanding]{ETag: quoteTag(it.Tag()), Body: out}, nil
}
