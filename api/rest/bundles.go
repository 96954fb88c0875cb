package rest

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"mime"
	"net/http"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
)

// valueBundle answers with the signed chain of a value, for another laboratory.
func (f *face) valueBundle(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	VersionParam
}) (*answer, error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	pack, err := f.registry.Bundle(ctx, actor, code, in.Version)
	if err != nil {
		return nil, err
	}
	return &answer{Body: func(hc huma.Context) {
		hc.SetHeader("Content-Type", mediaZIP)
		hc.SetHeader("Content-Disposition", mime.FormatMediaType("attachment", map[string]string{"filename": in.Code + "-" + in.Scale + ".zip"}))
		hc.SetStatus(http.StatusOK)
		if err := exchange.WritePack(hc.Context(), hc.BodyWriter(), pack); err != nil {
			f.options.Log.ErrorContext(hc.Context(), "bundle broke off", "request_id", requestID(hc.Context()), "error", err.Error())
			panic(http.ErrAbortHandler) // an archive that ends early would not open
		}
	}}, nil
}

// An ImportedBundle is what became of a bundle.
type ImportedBundle struct {
	Origin       string   `json:"origin" doc:"The partner's ledger."`
	Code         string   `json:"code" doc:"The value's code there."`
	Version      int      `json:"version" doc:"Its version there."`
	Value        Value    `json:"value" doc:"The draft with the basis partner: usable once somebody approves it."`
	Existed      bool     `json:"existed" doc:"The same version was here already; nothing was recorded."`
	MaterialMade bool     `json:"material_made" doc:"The material was registered with it."`
	Versions     int      `json:"versions" doc:"Versions of the chain that were verified."`
	Recomputed   int      `json:"recomputed"`
	Equal        int      `json:"equal"`
	Notes        []string `json:"notes" doc:"What a clean verification does not show."`
}

// ShowImportedBundle is the public shape of what became of a bundle.
func ShowImportedBundle(b registry.ImportedBundle) ImportedBundle {
	out := ImportedBundle{Value: showValue(b.Value), Existed: b.Existed, MaterialMade: b.MaterialMade, Versions: b.Verification.Versions, Recomputed: b.Verification.Recomputed,
		Equal: b.Verification.Equal, Notes: append([]string{}, b.Verification.Notes...)}
	if p := b.Value.Value.Partner; p != nil {
		out.Origin, out.Code, out.Version = p.Origin, p.Code, p.Version
	}
	return out
}

func (f *face) importBundle(ctx context.Context, actor registry.Actor, in *struct {
	Key      string `query:"key" maxLength:"300" doc:"The partner's public key, as its laboratory published it: asked for at the first value of an origin."`
	Material string `query:"material" maxLength:"40" doc:"The own code of the material; left out: the partner's."`
	RawBody  []byte `contentType:"application/zip"`
}) (*answer, error) {
	if !actor.May(registry.MayManage) { // before the work of reading
		return nil, registry.Refuse(registry.Refused, "%s may not import values in laboratory %s", actor.Person, actor.Laboratory)
	}
	pack, err := exchange.ReadPack(bytes.NewReader(in.RawBody), int64(len(in.RawBody)))
	var fault *exchange.PackError
	if errors.As(err, &fault) {
		return nil, registry.Complain("this is no bundle", []registry.Complaint{{Place: nameOr(fault.File, "body"), Found: fault.Found, Expected: fault.Expected}})
	}
	if err != nil {
		return nil, fmt.Errorf("read bundle: %w", err)
	}
	b, err := f.registry.ImportBundle(ctx, actor, registry.ImportBundleRequest{Pack: pack, Verifier: in.Key, Material: in.Material})
	if err != nil {
		return nil, err
	}
	status := http.StatusCreated
	if b.Existed {
		status = http.StatusOK
	}
	return jsonAnswer(ShowImportedBundle(b), status, map[string]string{"ETag": quoteTag(b.Value.Tag()), "Location": recordAddress(b.Value.Key)})
}

// A PublicKey is the public half of the key that signs the laboratory's ledger.
type PublicKey struct {
	Origin string `json:"origin"`
	Key    string `json:"key" doc:"In the C2SP signed-note form; hand it to partners by another way than a bundle."`
}

func (f *face) publicKey(ctx context.Context, actor registry.Actor, _ *struct{}) (*plain[PublicKey], error) {
	key, err := f.registry.PublicKey(ctx, actor)
	if err != nil {
		return nil, err
	}
	return &plain[PublicKey]{PublicKey{f.registry.Origin(actor.Laboratory), key}}, nil
}
