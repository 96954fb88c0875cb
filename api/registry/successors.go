package registry

import (
	"context"
	"slices"

	"deltamoor/store"
)

// amendments are the codes of reports that amend one, in the order of the ledger.
func amendments(ctx context.Context, v *store.View, report store.Key) ([]string, error) {
	type amended struct {
		code     string
		position int64
	}
	var found []amended
	for after := ""; ; {
		edges, next, err := v.EdgesTo(ctx, store.EdgeQuery{To: report, FromKind: store.KindReport, After: after, Limit: MaxPage})
		if err != nil {
			return nil, err
		}
		for _, e := range edges {
			if e.Part != "amends" {
				continue
			}
			raw, err := v.Version(ctx, e.From.Key, e.From.Version)
			if err != nil {
				return nil, err
			}
			found = append(found, amended{e.From.Code, raw.Position})
		}
		if after = next; after == "" {
			break
		}
	}
	slices.SortFunc(found, func(a, b amended) int { return int(a.position - b.position) })
	return each(found, func(a amended) string { return a.code }), nil
}

// A Succession says what came after something that a permanent address names.
type Succession struct {
	// Successor is the code of the reported delta that replaces one, in an amended
	// report; "" where there is none. Amended is that report.
	Successor, Amended string
	// Replaces is the code of the delta that it replaces itself, of the report it amends.
	Replaces string
}

// Successors finds what replaces a reported delta, and what it replaces: the
// line of the same sample, scale and measurand in the newest amended report,
// and in the report that its own amends.
// Whoever was given the delta may know them.
func (r *Registry) Successors(ctx context.Context, d ReportedDelta) (Succession, error) {
	var out Succession
	err := r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		out = Succession{}
		key := store.Key{Laboratory: d.Laboratory, Kind: store.KindReport, Code: d.Report}
		list, err := amendments(ctx, v, key)
		if err != nil {
			return err
		}
		if len(list) > 0 {
			out.Amended = list[len(list)-1]
			if out.Successor, err = sameLine(ctx, v, store.Key{Laboratory: d.Laboratory, Kind: store.KindReport, Code: out.Amended}, d); err != nil {
				return err
			}
		}
		if d.Amends == "" {
			return nil
		}
		out.Replaces, err = sameLine(ctx, v, store.Key{Laboratory: d.Laboratory, Kind: store.KindReport, Code: d.Amends}, d)
		return err
	})
	return out, err
}

// sameLine is the code of a report's line of the same final value's record; ""
// where it has none. A final value's record is one for each sample, scale and measurand.
func sameLine(ctx context.Context, v *store.View, report store.Key, d ReportedDelta) (string, error) {
	it, err := newest[store.Report](ctx, v, report)
	if err != nil {
		return "", err
	}
	for i, in := range it.Inputs {
		if in.Part == "line" && in.Key == d.Final.Key && i < len(it.Value.Lines) {
			return it.Value.Lines[i].Code, nil
		}
	}
	return "", nil
}

// NewestNumber is the number of a record's newest version, drafts included.
func (r *Registry) NewestNumber(ctx context.Context, actor Actor, key store.Key) (int, error) {
	number := 0
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		raw, err := v.Newest(ctx, key)
		number = raw.Ref.Version
		return missing(err, key)
	})
	return number, err
}
