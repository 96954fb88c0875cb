package registry

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strings"

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
}

// MaxTrace bounds the nodes of one trace.
const MaxTrace = 2000

// A TraceNode is one version in a trace, with who stated it, when, and who decided what.
type TraceNode struct {
	store.Ref
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

// Trace follows a version down to where its chain ends. Code is a reported
// delta's, or any record's with its kind.
func (r *Registry) Trace(ctx context.Context, actor Actor, kind store.Kind, code string, version int) (Trace, error) {
	var out Trace
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = Trace{}
		t := tracer{v: v, trace: &out, at: map[store.Ref]int{}, through: map[store.Ref]string{}}
		var start store.Ref
		line := -1
		if kind == "" { // a reported delta
			d, err := reported(ctx, v, actor.Laboratory, code)
			if err != nil {
				return err
			}
			out.Reported = &d
			report, err := v.Newest(ctx, store.Key{Laboratory: d.Laboratory, Kind: store.KindReport, Code: d.Report})
			if err != nil {
				return err
			}
			start, line = report.Ref, d.Line
		} else {
			raw, err := lookup(ctx, v, actor.Laboratory, kind, code, version, store.Moment{})
			if err != nil {
				return err
			}
			start = raw.Ref
		}
		return t.walk(ctx, start, line)
	})
	return out, err
}

// A traceSource gives what a trace reads: a view of the store, or a pack.
type traceSource interface {
	Version(ctx context.Context, key store.Key, version int) (store.Raw, error)
	State(ctx context.Context, ref store.Ref, m store.Moment) (store.State, []store.Version[store.Decision], error)
}

type tracer struct {
	v     traceSource
	trace *Trace
	at    map[store.Ref]int
	// through names, for each calibration, the subject whose result the trace came through.
	through map[store.Ref]string
}

// came notes which subject's result of a calibration the trace follows.
func (t *tracer) came(inputs []store.Input, subject string) {
	for _, in := range inputs {
		if _, ok := t.through[in.Ref]; !ok && in.Part == "member" {
			t.through[in.Ref] = subject
		}
	}
}

// walk goes breadth first, so that nodes stand by generation. Of a report only
// the wanted line is followed.
func (t *tracer) walk(ctx context.Context, start store.Ref, line int) error {
	queue := []store.Ref{start}
	t.at[start] = 0
	t.trace.Nodes = append(t.trace.Nodes, TraceNode{Ref: start})
	for i := 0; i < len(queue); i++ {
		raw, err := t.v.Version(ctx, queue[i].Key, queue[i].Version)
		if err != nil {
			return fmt.Errorf("trace %s: %w", queue[i], err)
		}
		if raw.Hash != queue[i].Hash {
			return fmt.Errorf("trace %s: named with hash %s, stored with %s", queue[i], queue[i].Hash, raw.Hash)
		}
		shares, err := t.describe(ctx, i, raw)
		if err != nil {
			return err
		}
		for j, in := range raw.Inputs {
			if raw.Kind == store.KindReport && line >= 0 && in.Part == "line" && j != line {
				continue
			}
			if in.Part == "amends" {
				continue
			}
			to, ok := t.at[in.Ref]
			if !ok {
				if len(queue) >= MaxTrace {
					t.trace.Cut++
					continue
				}
				to = len(queue)
				t.at[in.Ref] = to
				queue = append(queue, in.Ref)
				t.trace.Nodes = append(t.trace.Nodes, TraceNode{Ref: in.Ref, Depth: t.trace.Nodes[i].Depth + 1})
			}
			edge := TraceEdge{From: i, To: to, Part: in.Part}
			if share, ok := shares[j]; ok {
				edge.Share = &share
			}
			t.trace.Edges = append(t.trace.Edges, edge)
		}
	}
	return nil
}

// describe fills in a node, and gives the variance shares of its inputs by index.
func (t *tracer) describe(ctx context.Context, i int, raw store.Raw) (map[int]float64, error) {
	n := &t.trace.Nodes[i]
	n.Ref, n.Title = raw.Ref, versionName(raw.Ref)
	n.RecordedAt, n.RecordedBy, n.ValidFrom, n.Reason = raw.RecordedAt, raw.RecordedBy, raw.ValidFrom, raw.Reason
	state, decisions, err := t.v.State(ctx, raw.Ref, store.Moment{})
	if err != nil {
		return nil, err
	}
	n.State = state
	for _, d := range decisions {
		n.Decisions = append(n.Decisions, TraceDecision{Act: d.Value.Act, By: d.RecordedBy, Reason: d.Reason, At: d.RecordedAt})
	}
	switch raw.Kind {
	case store.KindFinal:
		f, err := store.Decode[store.Final](raw)
		if err != nil {
			return nil, err
		}
		n.Value, n.StandardUncertainty = &f.Value.Value, &f.Value.StandardUncertainty
		n.Title = fmt.Sprintf("final value of sample %s on %s", store.FormatCode(f.Value.Sample), f.Value.Scale)
		n.Detail = f.Value.Rule
		t.came(raw.Inputs, f.Value.Sample)
		return nil, nil
	case store.KindCalibration:
		c, err := store.Decode[store.Calibration](raw)
		if err != nil {
			return nil, err
		}
		n.Title = fmt.Sprintf("calibration of %s in session %s on %s", c.Value.Quantity, store.FormatCode(c.Value.Session), c.Value.Scale)
		n.Detail = calibrationDetail(c.Value)
		return t.anchorShares(c), nil
	case store.KindValue:
		return nil, t.describeValue(i, raw)
	case store.KindScale:
		s, err := store.Decode[store.Scale](raw)
		if err != nil {
			return nil, err
		}
		var points []string
		for _, a := range s.Value.Anchors {
			points = append(points, fmt.Sprintf("%s %s ‰ (%s)", a.Material, a.Value, a.Uncertainty))
		}
		n.Title, n.Leaf = "scale "+raw.Code, "defines the scale"
		n.Detail = strings.Join(points, "; ")
	case store.KindMaterial:
		m, err := store.Decode[store.Material](raw)
		if err != nil {
			return nil, err
		}
		n.Title, n.Leaf = "material "+raw.Code, "a material"
		n.Detail = strings.Trim(strings.Join([]string{m.Value.Name, m.Value.Substance, m.Value.Status}, "; "), "; ")
	case store.KindSession:
		s, err := store.Decode[store.Session](raw)
		if err != nil {
			return nil, err
		}
		n.Detail = fmt.Sprintf("%d readings on %s by %s", s.Value.Readings, s.Value.Instrument, s.Value.Operator)
		if s.Value.Upload != nil {
			n.Detail += fmt.Sprintf(", from %s, SHA-256 %s", nameOr(s.Value.UploadName, "a request"), s.Value.Upload)
		}
	case store.KindMethod:
		m, err := store.Decode[store.Method](raw)
		if err != nil {
			return nil, err
		}
		n.Detail = m.Value.Title
	case store.KindFactor:
		f, err := store.Decode[store.Factor](raw)
		if err != nil {
			return nil, err
		}
		n.Title = fmt.Sprintf("H3 factor of %s, determined %s", f.Code, f.Value.DeterminedAt.Time().Format("2006-01-02 15:04"))
		n.Detail = factorDetail(f.Value)
	case store.KindRelation:
		rel, err := store.Decode[store.Relation](raw)
		if err != nil {
			return nil, err
		}
		n.Title, n.Leaf = "relation "+raw.Code, "published or stated"
		n.Detail = strings.Trim(strings.Join([]string{relationText(rel.Value), rel.Value.Evidence}, "; "), "; ")
	case store.KindReport:
		rep, err := store.Decode[store.Report](raw)
		if err != nil {
			return nil, err
		}
		n.Detail = rep.Value.Title
	case store.KindAssignment:
		p, err := store.Decode[store.Assignment](raw)
		if err != nil {
			return nil, err
		}
		n.Title, n.Detail = "campaign "+store.FormatCode(raw.Code), p.Value.Title
	case store.KindExclusion:
		x, err := store.Decode[store.Exclusion](raw)
		if err != nil {
			return nil, err
		}
		n.Title = "exclusions in session " + store.FormatCode(raw.Code)
		n.Detail = fmt.Sprintf("%s readings %s: %s", x.Value.Act, intsText(x.Value.Readings), x.Value.Cause)
	case store.KindOutcome:
		o, err := store.Decode[store.Outcome](raw)
		if err != nil {
			return nil, err
		}
		n.Title = fmt.Sprintf("outcome of session %s for %s", store.FormatCode(o.Value.Session), o.Value.Quantity)
		n.Detail = o.Value.Outcome
	case store.KindUnit:
		u, err := store.Decode[store.Unit](raw)
		if err != nil {
			return nil, err
		}
		n.Detail = fmt.Sprintf("%s, %s, %s", u.Value.Material, u.Value.Label, u.Value.State)
	}
	return nil, nil
}

func (t *tracer) describeValue(i int, raw store.Raw) error {
	n := &t.trace.Nodes[i]
	val, err := store.Decode[store.Value](raw)
	if err != nil {
		return err
	}
	number, _, err := numberOf(val)
	if err != nil {
		return err
	}
	u := val.Value.StandardUncertainty
	n.Value, n.StandardUncertainty = &number.Value, &u
	n.Title = fmt.Sprintf("value of %s on %s", val.Value.Material, val.Value.Scale)
	if val.Value.Measurand != Total {
		n.Title += " (" + val.Value.Measurand + ")"
	}
	n.Detail = strings.Trim(val.Value.Basis+": "+val.Value.Evidence, ": ")
	if val.Value.BackLoaded {
		n.Detail = BackLoadReason + "; " + n.Detail
	}
	if val.Value.Sources == nil {
		n.Leaf = val.Value.Basis
	}
	t.came(raw.Inputs, val.Value.Material)
	return nil
}

func calibrationDetail(c store.Calibration) string {
	words := []string{"intercept", "slope"}
	if c.Model.Drift != "" && c.Model.Drift != "none" {
		words = append(words, string(c.Model.Drift)+" drift")
	}
	if c.Model.Size != "" && c.Model.Size != "none" {
		words = append(words, string(c.Model.Size)+" size term")
	}
	text := strings.Join(words, ", ") + fmt.Sprintf("; weights %s; engine %s", nameOr(string(c.Model.Weights), "declared"), c.Engine)
	var before []string
	for _, k := range c.Corrections {
		before = append(before, fmt.Sprintf("%s %.4g", k.Name, k.Value))
	}
	if len(before) > 0 {
		text += "; before the fit: " + strings.Join(before, ", ")
	}
	if n := len(c.SetAside); n > 0 {
		text += fmt.Sprintf("; %d readings set aside by the method's rule", n)
	}
	if n := len(c.Means); n > 0 {
		text += fmt.Sprintf("; the rest as %d means", n)
	}
	if len(c.Excluded) > 0 {
		text += "; readings left out: " + intsText(c.Excluded)
	}
	return text
}

func intsText(numbers []int) string {
	words := make([]string, len(numbers))
	for i, n := range numbers {
		words[i] = fmt.Sprint(n)
	}
	return short(words, 20)
}

// anchorShares gives, for the result that the trace came through, the share of
// its variance that each anchor's value brings: (gᵀ·∂θ/∂y_k)²·u²(y_k)/u². Where
// anchors are correlated these do not sum to the anchors' whole part; the
// budget of the result has that.
func (t *tracer) anchorShares(c store.Version[store.Calibration]) map[int]float64 {
	through, ok := t.through[c.Ref]
	if !ok {
		return nil
	}
	line := slices.IndexFunc(c.Value.Results, func(r store.Result) bool { return r.Subject == through })
	if line < 0 {
		return nil
	}
	res := c.Value.Results[line]
	u2 := res.StandardUncertainty * res.StandardUncertainty
	if u2 == 0 {
		return nil
	}
	shares := map[int]float64{}
	k := 0
	for j, in := range c.Inputs {
		if in.Kind == store.KindFactor {
			for _, s := range res.Sources {
				if s.ID == factorSource(in.Ref) {
					shares[j] = s.VarianceShare
				}
			}
		}
		if in.Part != "anchor" {
			continue
		}
		coefficient := 0.0
		for p, g := range res.Gradient {
			if p < len(c.Value.AnchorSensitivities) && k < len(c.Value.AnchorSensitivities[p]) {
				coefficient += g * c.Value.AnchorSensitivities[p][k]
			}
		}
		if k < len(c.Value.Anchors) {
			part := coefficient * c.Value.Anchors[k].StandardUncertainty
			if share := part * part / u2; !math.IsNaN(share) {
				shares[j] = share
			}
		}
		k++
	}
	return shares
}

// TraceUp follows what rests on a version: generation by generation upwards,
// to reports. At most MaxTrace nodes are listed; Cut counts versions beyond.
func (r *Registry) TraceUp(ctx context.Context, actor Actor, kind store.Kind, code string, version int) (Trace, error) {
	var out Trace
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = Trace{}
		raw, err := lookup(ctx, v, actor.Laboratory, kind, code, version, store.Moment{})
		if err != nil {
			return err
		}
		t := tracer{v: v, trace: &out, at: map[store.Ref]int{raw.Ref: 0}, through: map[store.Ref]string{}}
		out.Nodes = append(out.Nodes, TraceNode{Ref: raw.Ref})
		for i := 0; i < len(out.Nodes); i++ {
			if err := t.climb(ctx, v, actor.Laboratory, i); err != nil {
				return err
			}
		}
		return nil
	})
	return out, err
}

// climb describes node i and adds what rests on it. Decisions about it are
// part of its description, not of the graph.
func (t *tracer) climb(ctx context.Context, v *store.View, laboratory string, i int) error {
	ref := t.trace.Nodes[i].Ref
	raw, err := t.v.Version(ctx, ref.Key, ref.Version)
	if err != nil {
		return fmt.Errorf("trace %s: %w", ref, err)
	}
	if _, err := t.describe(ctx, i, raw); err != nil {
		return err
	}
	for after := ""; ; {
		edges, next, err := v.EdgesTo(ctx, store.EdgeQuery{Laboratory: laboratory, To: ref.Key, Version: ref.Version, After: after, Limit: MaxPage})
		if err != nil {
			return err
		}
		for _, e := range edges {
			if e.From.Kind == store.KindDecision {
				continue
			}
			from, ok := t.at[e.From]
			if !ok {
				if len(t.trace.Nodes) >= MaxTrace {
					t.trace.Cut++
					continue
				}
				from = len(t.trace.Nodes)
				t.at[e.From] = from
				t.trace.Nodes = append(t.trace.Nodes, TraceNode{Ref: e.From, Depth: t.trace.Nodes[i].Depth + 1})
			}
			t.trace.Edges = append(t.trace.Edges, TraceEdge{From: from, To: i, Part: e.Part})
		}
		if after = next; after == "" {
			return nil
		}
	}
}
