package registry

import (
	"context"
	"fmt"

	"deltamoor/store"
)

// A Trace is what one number rests on, down to scale definitions and
// certificates: a closed graph whose nodes are versions.
type Trace struct {
	// Reported is the delta the trace was asked for, nil where it starts elsewhere.
	Reported *ReportedDelta
	Nodes    []TraceNode // the first is where the trace starts; generations in order
	Edges    []TraceEdge
	// Cut counts versions beyond MaxTrace that were not followed.
	Cut int
	// Shares say where the variance of the number comes from; nil where the trace
	// starts at something that has none.
	Shares []VarianceShare
}

// MaxTrace bounds the nodes of one trace.
const MaxTrace = 2000

// A TraceNode is one version in a trace, with who stated it, when, and who decided what.
type TraceNode struct {
	store.Ref
	// Origin names the ledger of another registry that the version stands in; ""
	// for versions of this one.
	Origin     string
	Depth      int
	Title      string
	RecordedAt store.Instant
	RecordedBy string
	ValidFrom  *store.Instant
	Reason     string
	State      store.State
	Decisions  []TraceDecision
	// Value and StandardUncertainty (‰) where the version states a delta.
	Value               *float64
	StandardUncertainty *float64
	// Detail is a few plain words on what matters of it: model, exclusions, evidence.
	Detail string
	// Leaf tells why the chain ends here; "" where it goes on.
	Leaf string
}

// A TraceDecision is one decision on a node's version.
type TraceDecision struct {
	Act, By, Reason string
	At              store.Instant
}

// A TraceEdge says that From rests on To, which plays a part in it. Share is the
// part of From's variance that To brings, where that is known.
type TraceEdge struct {
	From, To int
	Part     string
	Share    *float64
}

// A TraceQuery asks for the chain of one version.
type TraceQuery struct {
	// Kind "" means a reported delta's code; else it is a record's with this kind.
	Kind store.Kind
	Code string
	// Version 0 is the one that held at the moment.
	Version int
	// Moment chooses what is told of the versions: their states and the decisions
	// on them, as far as had been said by AsOf, at ValidAt. The chain itself is
	// pinned by hashes and does not change; what was not recorded by AsOf is not found.
	Moment store.Moment
}

// Trace follows a version down to where its chain ends, as things stand now.
// Code is a reported delta's, or any record's with its kind.
func (r *Registry) Trace(ctx context.Context, actor Actor, kind store.Kind, code string, version int) (Trace, error) {
	return r.TraceAt(ctx, actor, TraceQuery{Kind: kind, Code: code, Version: version})
}

// TraceAt follows a version down to where its chain ends.
func (r *Registry) TraceAt(ctx context.Context, actor Actor, q TraceQuery) (Trace, error) {
	var out Trace
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = Trace{}
		t := r.tracer(v, &out, q.Moment)
		var start store.Ref
		line := -1
		if q.Kind == "" { // a reported delta
			d, err := reportedAt(ctx, v, actor.Laboratory, q.Code, q.Moment)
			if err != nil {
				return err
			}
			out.Reported = &d
			number, err := reportVersion(ctx, v, d)
			if err != nil {
				return err
			}
			report, err := v.Version(ctx, store.Key{Laboratory: d.Laboratory, Kind: store.KindReport, Code: d.Report}, number)
			if err != nil {
				return err
			}
			start, line = report.Ref, d.Line
		} else {
			raw, err := startOfTrace(ctx, v, actor.Laboratory, q)
			if err != nil {
				return err
			}
			start = raw.Ref
		}
		if err := t.walk(ctx, start, line); err != nil {
			return err
		}
		var err error
		if out.Shares, err = sharesOf(ctx, v, out, line); err != nil {
			return err
		}
		return followPartners(ctx, v, &out)
	})
	return out, err
}

// startOfTrace finds where a trace begins: at a version that had been recorded.
func startOfTrace(ctx context.Context, v *store.View, laboratory string, q TraceQuery) (store.Raw, error) {
	raw, err := lookup(ctx, v, laboratory, q.Kind, q.Code, q.Version, q.Moment)
	if err == nil && q.Moment.AsOf != nil && raw.RecordedAt > *q.Moment.AsOf {
		return raw, missing(store.ErrNotFound, raw.Key)
	}
	return raw, err
}

// A traceSource gives what a trace reads: a view of the store, or a pack.
type traceSource interface {
	Version(ctx context.Context, key store.Key, version int) (store.Raw, error)
	State(ctx context.Context, ref store.Ref, m store.Moment) (store.State, []store.Version[store.Decision], error)
}

// A batchSource gives it many versions at a time.
type batchSource interface {
	VersionsOf(ctx context.Context, refs []store.Ref) (map[store.Ref]store.Raw, error)
	Standings(ctx context.Context, refs []store.Ref, m store.Moment) (map[store.Ref]store.Standing, error)
}

type tracer struct {
	v      traceSource
	trace  *Trace
	at     map[store.Ref]int
	moment store.Moment
	// through names, for each calibration, the subject whose result the trace came through.
	through map[store.Ref]string
	// told are descriptions by the hash of what they describe; nil remembers nothing.
	told *known[store.Hash, *description]
}

// maxTold bounds the memory of what bodies say in traces.
const maxTold = 2000

func (r *Registry) tracer(v *store.View, trace *Trace, m store.Moment) tracer {
	return tracer{v: v, trace: trace, at: map[store.Ref]int{}, through: map[store.Ref]string{}, moment: m, told: &r.told}
}

// came notes which subject's result of a calibration the trace follows.
func (t *tracer) came(inputs []store.Input, subject string) {
	for _, in := range inputs {
		if _, ok := t.through[in.Ref]; !ok && in.Part == "member" {
			t.through[in.Ref] = subject
		}
	}
}

// walk goes breadth first, so that nodes stand by generation; each generation is
// read together. Of a report only the wanted line is followed.
func (t *tracer) walk(ctx context.Context, start store.Ref, line int) error {
	t.at[start] = 0
	t.trace.Nodes = append(t.trace.Nodes, TraceNode{Ref: start})
	for from := 0; from < len(t.trace.Nodes); {
		to := len(t.trace.Nodes)
		descriptions, err := t.describeAll(ctx, t.trace.Nodes[from:to])
		if err != nil {
			return err
		}
		for i := from; i < to; i++ {
			t.follow(i, descriptions[i-from], line)
		}
		from = to
	}
	return t.stand(ctx)
}

// follow fills in a node and adds what it rests on.
func (t *tracer) follow(i int, d *description, line int) {
	n := &t.trace.Nodes[i]
	d.fill(n)
	kind := n.Kind
	if d.subject != "" {
		t.came(d.inputs, d.subject)
	}
	var shares map[int]float64
	if through, ok := t.through[n.Ref]; ok {
		shares = d.shares[through]
	}
	for j, in := range d.inputs {
		if kind == store.KindReport && line >= 0 && in.Part == "line" && j != line {
			continue
		}
		if in.Part == "amends" {
			continue
		}
		to, ok := t.at[in.Ref]
		if !ok {
			if len(t.trace.Nodes) >= MaxTrace {
				t.trace.Cut++
				continue
			}
			to = len(t.trace.Nodes)
			t.at[in.Ref] = to
			t.trace.Nodes = append(t.trace.Nodes, TraceNode{Ref: in.Ref, Depth: t.trace.Nodes[i].Depth + 1})
		}
		edge := TraceEdge{From: i, To: to, Part: in.Part}
		if share, ok := shares[j]; ok {
			edge.Share = &share
		}
		t.trace.Edges = append(t.trace.Edges, edge)
	}
}

// versionsPerStatement bounds the bodies of one read.
const versionsPerStatement = 50

// describeAll describes the versions of some nodes, in order.
func (t *tracer) describeAll(ctx context.Context, nodes []TraceNode) ([]*description, error) {
	all := make([]*description, len(nodes))
	var ask []int
	for i, n := range nodes {
		if t.told != nil {
			if d, ok := t.told.find(n.Hash); ok && d.key == n.Key && d.version == n.Ref.Version {
				all[i] = d
				continue
			}
		}
		ask = append(ask, i)
	}
	batch, batched := t.v.(batchSource)
	for len(ask) > 0 {
		n := min(len(ask), versionsPerStatement)
		var raws map[store.Ref]store.Raw
		if batched {
			refs := make([]store.Ref, n)
			for k, i := range ask[:n] {
				refs[k] = nodes[i].Ref
			}
			var err error
			if raws, err = batch.VersionsOf(ctx, refs); err != nil {
				return nil, fmt.Errorf("trace: %w", err)
			}
		}
		for _, i := range ask[:n] {
			ref := nodes[i].Ref
			raw, ok := raws[ref.Bare()]
			if !ok { // one by one, or to say what is missing
				var err error
				if raw, err = t.v.Version(ctx, ref.Key, ref.Version); err != nil {
					return nil, fmt.Errorf("trace %s: %w", ref, err)
				}
			}
			if ref.Hash != (store.Hash{}) && raw.Hash != ref.Hash {
				return nil, fmt.Errorf("trace %s: named with hash %s, stored with %s", ref, ref.Hash, raw.Hash)
			}
			d, err := describeVersion(raw)
			if err != nil {
				return nil, err
			}
			all[i] = d
			if t.told != nil {
				t.told.keep(raw.Hash, d)
			}
		}
		ask = ask[n:]
	}
	return all, nil
}

// stand adds what had been said of the nodes by the moment.
func (t *tracer) stand(ctx context.Context) error {
	batch, ok := t.v.(batchSource)
	if !ok {
		for i := range t.trace.Nodes {
			n := &t.trace.Nodes[i]
			state, decisions, err := t.v.State(ctx, n.Ref, t.moment)
			if err != nil {
				return err
			}
			n.State = state
			n.decided(decisions)
		}
		return nil
	}
	refs := make([]store.Ref, len(t.trace.Nodes))
	for i, n := range t.trace.Nodes {
		refs[i] = n.Ref.Bare()
	}
	standings, err := batch.Standings(ctx, refs, t.moment)
	if err != nil {
		return fmt.Errorf("trace: %w", err)
	}
	for i, ref := range refs {
		n := &t.trace.Nodes[i]
		s, ok := standings[ref]
		if !ok {
			return fmt.Errorf("trace %s: %w", n.Ref, store.ErrNotFound)
		}
		n.State, n.RecordedAt = s.State, s.RecordedAt
		n.decided(s.Decisions)
	}
	return nil
}

func (n *TraceNode) decided(decisions []store.Version[store.Decision]) {
	for _, d := range decisions {
		n.Decisions = append(n.Decisions, TraceDecision{Act: d.Value.Act, By: d.RecordedBy, Reason: d.Reason, At: d.RecordedAt})
	}
}

// reportVersion is the version of a report that states a line.
func reportVersion(ctx context.Context, v *store.View, d ReportedDelta) (int, error) {
	row, err := v.Reported(ctx, d.Code)
	return row.Version, err
}
