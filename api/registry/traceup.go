package registry

import (
	"cmp"
	"context"
	"slices"

	"deltamoor/store"
)

// DefaultAbove is how many versions a page of an upward trace has unless it is said.
const DefaultAbove = 500

// An AboveRequest asks what rests on a version, or on the bytes of an upload.
type AboveRequest struct {
	// Kind "" means a reported delta's code: what rests on its report, an amended one.
	Kind    store.Kind
	Code    string // of an upload its SHA-256, with the kind document
	Version int    // 0: the one that held at the moment
	// After is the ledger position that the page before ended with; nil at the beginning.
	After *int64
	// Limit is at most MaxTrace; 0 is DefaultAbove.
	Limit int
	// Moment is what all pages belong to: what had been recorded by AsOf, as it
	// stood then.
	Moment store.Moment
}

// An AbovePage is one page of what rests on a version, in the order of the
// ledger: a version stands after all it rests on.
type AbovePage struct {
	// Trace holds the version asked for as its first node, and the page's versions
	// after it; its edges run within the page and to the first node.
	Trace Trace
	// Next is After of the next page; nil at the end.
	Next *int64
	// AsOf is the moment that the page belongs to.
	AsOf store.Instant
}

// TraceAbove gives a page of what rests on a version: everything of the actor's
// laboratory, through any part it plays, up to reports. Depth counts
// generations above it, on the shortest way.
func (r *Registry) TraceAbove(ctx context.Context, actor Actor, q AboveRequest) (AbovePage, error) {
	limit := q.Limit
	if limit <= 0 {
		limit = DefaultAbove
	}
	limit = min(limit, MaxTrace)
	var out AbovePage
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = AbovePage{}
		start, roots, d, err := aboveRoots(ctx, v, actor.Laboratory, q)
		if err != nil {
			return err
		}
		out.Trace.Reported = d
		m, _, err := v.Moment(ctx, actor.Laboratory, q.Moment)
		if err != nil {
			return err
		}
		out.AsOf = *m.AsOf
		above := store.AboveQuery{Laboratory: actor.Laboratory, Roots: roots, AsOf: m.AsOf, After: -1, Limit: limit + 1}
		if q.After != nil {
			above.After = *q.After
		}
		var found []store.VersionAbove
		if q.After == nil {
			for _, root := range roots { // what binds an upload rests on it
				if root.Bare() == start.Bare() {
					continue
				}
				raw, err := v.Version(ctx, root.Key, root.Version)
				if err != nil {
					return err
				}
				found = append(found, store.VersionAbove{Ref: raw.Ref, Position: -1, Depth: 1})
			}
		}
		further := 0
		if len(roots) > 1 || len(roots) == 1 && roots[0].Bare() != start.Bare() {
			further = 1 // roots are a generation above the upload
		}
		binding := len(found)
		err = v.Above(ctx, above, func(a store.VersionAbove) error {
			a.Depth += further
			found = append(found, a)
			return nil
		})
		if err != nil {
			return err
		}
		if len(found)-binding > limit {
			found = found[:binding+limit]
			out.Next = &found[len(found)-1].Position
		}
		return r.fillAbove(ctx, v, &out, m, start, found, binding)
	})
	return out, err
}

// fillAbove describes the versions of a page and finds the edges among them.
func (r *Registry) fillAbove(ctx context.Context, v *store.View, p *AbovePage, m store.Moment, start store.Ref, found []store.VersionAbove, binding int) error {
	t := r.tracer(v, &p.Trace, m)
	refs := make([]store.Ref, 0, len(found))
	for i, a := range append([]store.VersionAbove{{Ref: start}}, found...) {
		t.at[a.Bare()] = i
		p.Trace.Nodes = append(p.Trace.Nodes, TraceNode{Ref: a.Ref, Depth: a.Depth})
		if i > 0 {
			refs = append(refs, a.Ref)
		}
	}
	descriptions, err := t.describeAll(ctx, p.Trace.Nodes)
	if err != nil {
		return err
	}
	for i, d := range descriptions {
		d.fill(&p.Trace.Nodes[i])
	}
	if err := t.stand(ctx); err != nil {
		return err
	}
	for i := range binding {
		p.Trace.Edges = append(p.Trace.Edges, TraceEdge{From: i + 1, To: 0, Part: "file"})
	}
	return v.EdgesOf(ctx, refs, func(e store.Edge) error {
		if to, ok := t.at[e.To]; ok {
			p.Trace.Edges = append(p.Trace.Edges, TraceEdge{From: t.at[e.From], To: to, Part: e.Part})
		}
		return nil
	})
}

// EachAbove calls row for everything that rests on a version, streamed in the
// order of the ledger; nothing is kept.
func (r *Registry) EachAbove(ctx context.Context, actor Actor, q AboveRequest, row func(store.VersionAbove) error) error {
	return r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		_, roots, _, err := aboveRoots(ctx, v, actor.Laboratory, q)
		if err != nil {
			return err
		}
		return v.Above(ctx, store.AboveQuery{Laboratory: actor.Laboratory, Roots: roots, AsOf: q.Moment.AsOf, After: -1}, row)
	})
}

// aboveRoots finds where an upward trace begins. An upload is bound by hash and
// not named as an input: of it the roots are the versions that bind it.
func aboveRoots(ctx context.Context, v *store.View, laboratory string, q AboveRequest) (start store.Ref, roots []store.Ref, d *ReportedDelta, err error) {
	t := TraceQuery{Kind: q.Kind, Code: q.Code, Version: q.Version, Moment: q.Moment}
	if q.Kind == "" {
		line, err := reportedAt(ctx, v, laboratory, q.Code, q.Moment)
		if err != nil {
			return start, nil, nil, err
		}
		d = &line
		t.Kind, t.Code = store.KindReport, line.Report
		if t.Version, err = reportVersion(ctx, v, line); err != nil {
			return start, nil, nil, err
		}
	}
	raw, err := startOfTrace(ctx, v, laboratory, t)
	if err != nil {
		return start, nil, nil, err
	}
	if q.Kind != store.KindDocument {
		return raw.Ref, []store.Ref{raw.Ref}, d, nil
	}
	roots, err = binders(ctx, v, laboratory, q.Code)
	return raw.Ref, append(roots, raw.Ref), nil, err
}

// binders are the versions that bind the bytes of an upload: sessions are found
// by its hash; values and materials, of which there are few, by looking.
func binders(ctx context.Context, v *store.View, laboratory, hash string) ([]store.Ref, error) {
	var out []store.Ref
	add := func(key store.Key) error {
		for after := 0; ; {
			raws, err := v.Versions(ctx, key, after, MaxPage)
			if err != nil {
				return err
			}
			for _, raw := range raws {
				if bound := boundUpload(raw); bound != nil && bound.String() == hash {
					out = append(out, raw.Ref)
				}
				after = raw.Ref.Version
			}
			if len(raws) < MaxPage {
				return nil
			}
		}
	}
	keys, err := v.Resolve(ctx, laboratory, store.KindSession, hash)
	if err != nil {
		return nil, err
	}
	for _, key := range keys {
		if err := add(key); err != nil {
			return nil, err
		}
	}
	for _, kind := range []store.Kind{store.KindMaterial, store.KindValue} {
		for after := ""; ; {
			held, next, err := v.List(ctx, store.ListQuery{Laboratory: laboratory, Kind: kind, After: after, Limit: MaxPage, Newest: true})
			if err != nil {
				return nil, err
			}
			for _, raw := range held {
				if bound := boundUpload(raw.Raw); bound != nil || raw.Ref.Version > 1 {
					if err := add(raw.Key); err != nil {
						return nil, err
					}
				}
			}
			if after = next; after == "" {
				break
			}
		}
	}
	slices.SortFunc(out, func(a, b store.Ref) int {
		return cmp.Or(cmp.Compare(a.Key.String(), b.Key.String()), cmp.Compare(a.Version, b.Version))
	})
	return slices.Compact(out), nil
}
