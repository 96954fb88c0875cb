package registry

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
)

// mediaBundle is how the chain of a partner's value is kept beside the value.
const mediaBundle = "application/json; form=bundle/1"

// Bundle collects the chain of one assigned value, for another laboratory: a
// pack that is about the value in place of a reported delta. Version 0 is the
// one in force. A bundle must be signed, so the registry needs a signing key.
func (r *Registry) Bundle(ctx context.Context, actor Actor, value string, version int) (Pack, error) {
	if r.key.Load() == nil {
		return Pack{}, Refuse(Conflict, "this registry has no signing key: what is handed on must be signed")
	}
	it, err := One[store.Value](ctx, r, actor, store.KindValue, value, version, store.Moment{})
	if err != nil {
		return Pack{}, err
	}
	switch {
	case it.Laboratory != actor.Laboratory:
		return Pack{}, Refuse(Conflict, "%s is a published value that every registry begins with: there is nothing to hand on", versionName(it.Ref))
	case it.State != store.Approved && it.State != store.Superseded:
		return Pack{}, Refuse(Conflict, "%s is %s: only approved values are handed on", versionName(it.Ref), it.State)
	}
	return r.collect(ctx, actor, Pack{Registry: r.name, Laboratory: actor.Laboratory, Value: &PackValue{it.Code, it.Ref.Version}}, false)
}

// An ImportBundleRequest brings a partner's value.
type ImportBundleRequest struct {
	Pack Pack
	// Verifier is the partner's public key, as it came another way than the bundle:
	// asked for at the first value of an origin, remembered after.
	Verifier string
	// Material is the own code of the material; "" is the partner's code. One that
	// does not exist yet is registered as the partner describes it.
	Material string
}

// An ImportedBundle is what became of a bundle.
type ImportedBundle struct {
	Value        Item[store.Value]
	Verification PackVerification
	// Existed: the same version was imported before; nothing was recorded.
	Existed bool
	// MaterialMade: the material was registered with it.
	MaterialMade bool
}

// ImportBundle verifies the signed chain of a partner's value in full, keeps it
// with its origin and identities, and drafts a value with the basis partner: it
// may be used once a person approves it. Tampering, an unsigned bundle, a key
// that is not the partner's, and a version older than one that is here already
// are refused, and leave nothing behind.
func (r *Registry) ImportBundle(ctx context.Context, actor Actor, q ImportBundleRequest) (ImportedBundle, error) {
	var out ImportedBundle
	if err := actor.need(MayManage); err != nil {
		return out, err
	}
	p := q.Pack
	if p.Value == nil {
		return out, Complain("this bundle cannot be imported", []Complaint{{Place: "body", Found: "the evidence pack of a reported delta", Expected: "a bundle, which holds the chain of an assigned value"}})
	}
	origin := p.Registry + "/" + p.Laboratory
	verifier := strings.TrimSpace(q.Verifier)
	known, err := r.partnerKey(ctx, actor, origin)
	if err != nil {
		return out, err
	}
	switch {
	case verifier == "" && known == "":
		return out, Complain("this bundle cannot be imported", []Complaint{{Place: "query.key", Expected: "the public key of " + origin + ", as its laboratory published it: nothing of it was imported before"}})
	case verifier == "":
		verifier = known
	case known != "" && verifier != known:
		return out, Refuse(Conflict, "values of %s were imported under the key %s; this is %s. A partner's new key has to be signed by the old one: import under the old one", origin, shortVerifier(known), shortVerifier(verifier))
	}
	out.Verification = VerifyPack(ctx, p, PackCheckRequest{Verifiers: []string{verifier}})
	var c complaints
	for _, f := range out.Verification.Findings {
		c.add(f.File, f.Found, "%s", f.Expected)
	}
	signed := slices.IndexFunc(out.Verification.Ledgers, func(l PackLedgerVerification) bool { return l.Origin == origin && l.Outside })
	if len(c) == 0 && signed < 0 {
		c.add("ledger "+origin, "no checkpoint by "+shortVerifier(verifier), "one that covers the chain")
	}
	if err := Complain("this bundle does not verify: nothing of it was taken", c); err != nil {
		return out, err
	}
	checker := packChecker{p: p, src: emptyPackSource()}
	checker.entries()
	checker.bodies()
	raw, _, err := checker.start()
	if err != nil {
		return out, err
	}
	foreign, err := store.Decode[store.Value](raw)
	if err != nil {
		return out, err
	}
	kept, err := keepBundle(p)
	if err != nil {
		return out, err
	}
	head := out.Verification.Ledgers[signed]
	partner := store.PartnerValue{Origin: origin, Code: raw.Code, Version: raw.Ref.Version, Hash: raw.Hash, Verifier: verifier, Size: head.Size, Root: head.Root}
	var code string
	var version int
	err = r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		out.Existed, out.MaterialMade = false, false
		material, err := r.partnerMaterial(ctx, tx, actor, q.Material, foreign, checker.src, origin, &out)
		if err != nil {
			return err
		}
		var inputs []store.Input
		var body store.Value
		if out.MaterialMade {
			scale, err := lookup(ctx, &tx.View, actor.Laboratory, store.KindScale, foreign.Value.Scale, 0, store.Moment{})
			if err != nil {
				return err
			}
			inputs = []store.Input{{Part: "material", Ref: material}, {Part: "scale", Ref: scale.Ref}}
			body = store.Value{Material: material.Code, MaterialLaboratory: material.Laboratory, Scale: foreign.Value.Scale, Measurand: foreign.Value.Measurand}
		} else if inputs, body, err = valueOf(ctx, &tx.View, actor.Laboratory, material.Code, foreign.Value.Scale, foreign.Value.Measurand); err != nil {
			return err
		}
		code = ValueCode(body.Material, body.Scale, body.Measurand)
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindValue, Code: code}
		after, same, err := placeOfPartner(ctx, &tx.View, key, partner)
		if err != nil {
			return err
		}
		if same > 0 {
			out.Existed, version = true, same
			return nil
		}
		hash, _, err := tx.PutUpload(ctx, strings.ReplaceAll(origin+" "+p.Name(), "/", " ")+".json", mediaBundle, kept)
		if err != nil {
			return err
		}
		body.Value, body.StandardUncertainty, body.DegreesOfFreedom, body.ExpiresAt = foreign.Value.Value, foreign.Value.StandardUncertainty, foreign.Value.DegreesOfFreedom, foreign.Value.ExpiresAt
		body.Rule = "u as the partner's version states it; its sources kept, under their origin"
		body.Basis, body.Partner, body.Document = "partner", &partner, &hash
		body.Evidence = fmt.Sprintf("%s: %s, SHA-256 %s", origin, p.Name(), raw.Hash)
		if err := foreignSources(ctx, &tx.View, origin, foreign.Value, checker.src, &body); err != nil {
			return err
		}
		version = after + 1
		e := Edit{After: after, Reason: fmt.Sprintf("version %d of %s from %s", raw.Ref.Version, raw.Code, origin), ValidFrom: raw.ValidFrom}
		_, err = appendVersion(ctx, tx, actor, key, e, inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	out.Value, err = One[store.Value](ctx, r, actor, store.KindValue, code, version, store.Moment{})
	return out, err
}

func emptyPackSource() packSource {
	return packSource{raws: map[wantedVersion]store.Raw{}, readings: map[string][]store.Reading{}, decisions: map[wantedVersion][]store.Version[store.Decision]{}}
}

// partnerKey is the public key under which values of an origin were imported; "" where none was.
func (r *Registry) partnerKey(ctx context.Context, actor Actor, origin string) (string, error) {
	found := ""
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		found = ""
		for after := ""; ; {
			held, next, err := v.List(ctx, store.ListQuery{Laboratory: actor.Laboratory, Kind: store.KindValue, After: after, Limit: MaxPage, Newest: true})
			if err != nil {
				return err
			}
			for _, raw := range held {
				if value, err := store.Decode[store.Value](raw.Raw); err == nil && value.Value.Partner != nil && value.Value.Partner.Origin == origin {
					found = value.Value.Partner.Verifier
					return nil
				}
			}
			if after = next; after == "" {
				return nil
			}
		}
	})
	return found, err
}

// schemePartner is the scheme of a material's identifier in another registry.
const schemePartner = "deltamoor"

// partnerMaterial finds the own material that a partner's value is of, or
// registers it. An own material of the same code that is not said to be the
// partner's is another material: two records with one code are not guessed to be one.
func (r *Registry) partnerMaterial(ctx context.Context, tx *store.Tx, actor Actor, wanted string, foreign store.Version[store.Value], src packSource, origin string, out *ImportedBundle) (store.Ref, error) {
	identifier := store.Identifier{Scheme: schemePartner, Value: origin + "/" + foreign.Value.Material}
	if foreign.Value.MaterialLaboratory == store.Common {
		identifier.Value = store.Common + "/" + foreign.Value.Material
		wanted = nameOr(wanted, foreign.Value.Material)
	}
	name := nameOr(wanted, foreign.Value.Material)
	raw, err := tx.Newest(ctx, store.Key{Laboratory: actor.Laboratory, Kind: store.KindMaterial, Code: name})
	if ignoreNotFound(err) != nil {
		return store.Ref{}, err
	}
	if err != nil {
		if common, commonErr := tx.Newest(ctx, store.Key{Laboratory: store.Common, Kind: store.KindMaterial, Code: name}); commonErr == nil && foreign.Value.MaterialLaboratory == store.Common {
			return common.Ref, nil
		} else if commonErr == nil {
			return store.Ref{}, Complain("this bundle cannot be imported", []Complaint{{Place: "query.material", Found: quote(name), Expected: "another code: every registry has a published material of this one"}})
		}
	}
	if err == nil {
		m, err := store.Decode[store.Material](raw)
		if err != nil {
			return store.Ref{}, err
		}
		if wanted != "" || slices.Contains(m.Value.Identifiers, identifier) {
			return raw.Ref, nil
		}
		return store.Ref{}, Complain("this bundle cannot be imported", []Complaint{{Place: "query.material", Expected: fmt.Sprintf("which material it is: this laboratory has one with the code %s of its own, which is not said to be %s. "+
			"Name it to say that they are one, or name a new code", name, identifier.Value)}})
	}
	var c complaints
	c.code("query.material", name)
	if err := Complain("this bundle cannot be imported", c); err != nil {
		return store.Ref{}, err
	}
	var body store.Material
	for _, in := range foreign.Inputs {
		if in.Kind == store.KindMaterial {
			theirs, err := decodeVersion[store.Material](ctx, src, in.Ref)
			if err != nil {
				return store.Ref{}, err
			}
			body = theirs.Value
		}
	}
	body.Identifiers = append(slices.Clone(body.Identifiers), identifier)
	body.Document, body.Stock, body.Roles, body.Aliases = nil, nil, nil, nil // documents, stock, rules and nicknames are the partner's own
	out.MaterialMade = true
	return appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindMaterial, Code: name}, Edit{Reason: "from " + origin}, nil, body)
}

// placeOfPartner says after which version of the own record a partner's version
// comes: same is the number of the one that is it already. An older version
// after a newer one is refused.
func placeOfPartner(ctx context.Context, v *store.View, key store.Key, partner store.PartnerValue) (after, same int, err error) {
	for {
		raws, err := v.Versions(ctx, key, after, MaxPage)
		if err != nil {
			return 0, 0, err
		}
		for _, raw := range raws {
			after = raw.Ref.Version
			value, err := store.Decode[store.Value](raw)
			if err != nil {
				return 0, 0, err
			}
			have := value.Value.Partner
			if have == nil || have.Origin != partner.Origin || have.Code != partner.Code {
				continue
			}
			switch {
			case have.Version == partner.Version && have.Hash == partner.Hash:
				same = raw.Ref.Version
			case have.Version == partner.Version:
				return 0, 0, Refuse(Conflict, "version %d of %s from %s is here with SHA-256 %s, and this one has %s: one of the two was not recorded there", partner.Version, partner.Code, partner.Origin, have.Hash, partner.Hash)
			case have.Version > partner.Version:
				return 0, 0, Refuse(Conflict, "version %d of %s from %s is older than version %d, which is here already as %s: an older version is not proposed after a newer one",
					partner.Version, partner.Code, partner.Origin, have.Version, versionName(raw.Ref))
			}
		}
		if len(raws) < MaxPage {
			return after, same, nil
		}
	}
}

// foreignSources keeps the decomposition of a partner's value. Its sources
// and variance groups get their origin into their names, so that equal codes of
// two registries stay two; published values that this registry holds in the very
// same version keep theirs, so that what is shared through them cancels.
func foreignSources(ctx context.Context, v *store.View, origin string, foreign store.Value, src packSource, body *store.Value) error {
	if foreign.Sources == nil {
		return nil
	}
	rename := func(id string) (string, error) {
		if id == "" {
			return "", nil
		}
		if ref, ok := anchorRef(id); ok && ref.Laboratory == store.Common {
			theirs, err := src.Version(ctx, ref.Key, ref.Version)
			if err == nil {
				ours, err := v.Version(ctx, ref.Key, ref.Version)
				if ignoreNotFound(err) != nil {
					return "", err
				}
				if err == nil && ours.Hash == theirs.Hash {
					return id, nil
				}
			}
		}
		kind, rest, _ := strings.Cut(id, ":")
		return kind + "@" + origin + ":" + rest, nil
	}
	var err error
	for _, s := range foreign.Sources {
		if s.ID, err = rename(s.ID); err != nil {
			return err
		}
		if s.Group, err = rename(s.Group); err != nil {
			return err
		}
		s.Shares = slices.Clone(s.Shares)
		for i := range s.Shares {
			if s.Shares[i].Group, err = rename(s.Shares[i].Group); err != nil {
				return err
			}
		}
		body.Sources = append(body.Sources, s)
	}
	slices.SortFunc(body.Sources, func(a, b store.Source) int { return strings.Compare(a.ID, b.ID) })
	for _, g := range foreign.Groups {
		if g.ID, err = rename(g.ID); err != nil {
			return err
		}
		body.Groups = append(body.Groups, g)
	}
	if b := foreign.UBetweenUnits; b != nil {
		own := *b
		if own.Group, err = rename(b.Group); err != nil {
			return err
		}
		body.UBetweenUnits = &own
	}
	return nil
}

// A keptBundle is a bundle as it is kept: its parts, which the ZIP file can be
// written from again, and the signed notes by file.
type keptBundle struct {
	Pack  Pack              `json:"pack"`
	Notes map[string][]byte `json:"notes"`
}

func keepBundle(p Pack) ([]byte, error) {
	kept := keptBundle{p, map[string][]byte{}}
	for _, l := range p.Ledgers {
		for _, c := range l.Checkpoints {
			kept.Notes[c.File] = c.Note
		}
	}
	return json.Marshal(kept)
}

// partnerPack reads the kept chain of a partner's value.
func partnerPack(ctx context.Context, v *store.View, laboratory string, value store.Value) (Pack, error) {
	var p Pack
	if value.Document == nil {
		return p, fmt.Errorf("value of %s names no bundle", value.Material)
	}
	var b bytes.Buffer
	if _, err := v.Upload(ctx, laboratory, *value.Document, &b); err != nil {
		return p, err
	}
	var kept keptBundle
	if err := json.Unmarshal(b.Bytes(), &kept); err != nil {
		return p, fmt.Errorf("bundle %s: %w", value.Document, err)
	}
	p = kept.Pack
	for i := range p.Ledgers {
		for j := range p.Ledgers[i].Checkpoints {
			p.Ledgers[i].Checkpoints[j].Note = kept.Notes[p.Ledgers[i].Checkpoints[j].File]
		}
	}
	return p, nil
}

// followPartners continues a trace, at every value of a partner, with the chain
// that came with it: versions of another ledger, under their origin.
func followPartners(ctx context.Context, v *store.View, t *Trace) error {
	for i := range len(t.Nodes) {
		if t.Nodes[i].Kind != store.KindValue || t.Nodes[i].Origin != "" {
			continue
		}
		value, err := decodeVersion[store.Value](ctx, v, t.Nodes[i].Ref)
		if err != nil {
			return err
		}
		if value.Value.Partner == nil {
			continue
		}
		p, err := partnerPack(ctx, v, t.Nodes[i].Laboratory, value.Value)
		if err != nil {
			return err
		}
		theirs, err := PackTrace(ctx, p)
		if err != nil {
			return fmt.Errorf("chain of %s: %w", value.Ref, err)
		}
		base := len(t.Nodes)
		if base+len(theirs.Nodes) > MaxTrace {
			t.Cut += len(theirs.Nodes)
			continue
		}
		for _, n := range theirs.Nodes {
			n.Origin, n.Depth = p.Registry+"/"+n.Laboratory, n.Depth+t.Nodes[i].Depth+1
			t.Nodes = append(t.Nodes, n)
		}
		t.Edges = append(t.Edges, TraceEdge{From: i, To: base, Part: "partner"})
		for _, e := range theirs.Edges {
			t.Edges = append(t.Edges, TraceEdge{From: e.From + base, To: e.To + base, Part: e.Part, Share: e.Share})
		}
		t.Nodes[i].Leaf = ""
	}
	return nil
}

// partner verifies the kept chain of a partner's value again, and that the own
// value says what it does.
func (c *recheck) partner(ctx context.Context, v source, raw store.Raw, value store.Value) error {
	reader, ok := v.(*store.View)
	if !ok {
		return nil // a pack holds the bundle as a file, bound by its hash
	}
	c.recomputed++
	before := len(c.findings)
	p, err := partnerPack(ctx, reader, raw.Laboratory, value)
	if err != nil {
		c.add(raw, "document", err.Error(), "the bundle of "+value.Partner.Origin)
		return nil
	}
	for _, f := range VerifyPack(ctx, p, PackCheckRequest{Verifiers: []string{value.Partner.Verifier}}).Findings {
		c.add(raw, "bundle "+f.File, f.Found, f.Expected)
	}
	checker := packChecker{p: p, src: emptyPackSource()}
	checker.entries()
	checker.bodies()
	theirs, _, err := checker.start()
	if err != nil {
		c.add(raw, "bundle", err.Error(), "the version of "+value.Partner.Origin)
		return nil
	}
	foreign, err := store.Decode[store.Value](theirs)
	switch {
	case err != nil:
		c.add(raw, "bundle", err.Error(), "a value")
	case theirs.Hash != value.Partner.Hash:
		c.add(raw, "partner.hash", value.Partner.Hash.String(), theirs.Hash.String())
	case foreign.Value.Value != value.Value || foreign.Value.StandardUncertainty != value.StandardUncertainty:
		c.add(raw, "value", fmt.Sprintf("%s, u %v", value.Value, value.StandardUncertainty), fmt.Sprintf("%s, u %v as in the bundle", foreign.Value.Value, foreign.Value.StandardUncertainty))
	}
	if len(c.findings) == before {
		c.equal++
	}
	return nil
}

// PublicKey is the public half of the key that signs the ledger of the actor's
// laboratory: what partners are given by another way than a bundle.
func (r *Registry) PublicKey(ctx context.Context, actor Actor) (string, error) {
	if err := actor.need(MayRead); err != nil {
		return "", err
	}
	key := r.key.Load()
	if key == nil {
		return "", Refuse(Conflict, "this registry has no signing key")
	}
	verifier, err := key.Verifier(r.Origin(actor.Laboratory))
	if err != nil {
		return "", err
	}
	return verifier, nil
}
