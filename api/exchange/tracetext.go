package exchange

import (
	"cmp"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// WriteTrace writes a trace as indented text of at most 100 columns: every
// version once, under the first that rests on it, with who stated it, when and
// why, who decided on it, and the share of the variance that an anchor brings;
// where it is needed again it is named by its number.
func WriteTrace(w io.Writer, t registry.Trace) error {
	p := NewTextPage(w)
	tw := &traceText{TextPage: p, trace: t, children: make([][]registry.TraceEdge, len(t.Nodes)), shown: make([]bool, len(t.Nodes)), number: make([]int, len(t.Nodes))}
	for _, e := range t.Edges {
		tw.children[e.From] = append(tw.children[e.From], e)
	}
	for i := range tw.children {
		slices.SortStableFunc(tw.children[i], func(a, b registry.TraceEdge) int {
			return cmp.Or(rank(a.Part)-rank(b.Part), cmp.Compare(share(b), share(a))) // the anchor that brings most first
		})
	}
	if d := t.Reported; d != nil {
		n := Decimals(d.StandardUncertainty)
		p.Paragraph("", fmt.Sprintf("%s = %s ‰ on %s, u %s ‰, U %s ‰ (k %.2f, %g %%): sample %s, which %s calls %q.", store.FormatCode(d.Code), Fixed(d.Value, n), d.Scale,
			Fixed(d.StandardUncertainty, n), Fixed(d.Expanded, n), d.K, 100*d.Probability, store.FormatCode(d.Sample), d.Client, d.Label))
		p.Line("")
	}
	if len(t.Nodes) > 0 {
		tw.node(0, 0, registry.TraceEdge{})
	}
	p.Line("")
	for _, sentence := range ShareSentences(t) {
		p.Paragraph("", sentence)
	}
	p.Paragraph("", tw.ends())
	return p.Err()
}

func share(e registry.TraceEdge) float64 {
	if e.Share == nil {
		return 0
	}
	return *e.Share
}

type traceText struct {
	*TextPage
	trace    registry.Trace
	children [][]registry.TraceEdge
	shown    []bool
	number   []int
	last     int
}

// parts says how an input serves what stands above it, and in which order
// inputs are told: first what was done, then what it rests on.
var parts = []struct{ part, phrase string }{
	{"line", "rests on the"}, {"sample", "of"}, {"member", "from the"}, {"outcome", "given"}, {"exclusion", "without what was left out:"},
	{"session", "measured in"}, {"method", "by"}, {"instrument", "on"}, {"anchor", "anchored by the"}, {"control", "checked by the"}, {"unit", "out of"},
	{"material", "is a"}, {"scale", "on the"},
}

func rank(part string) int {
	for i, p := range parts {
		if p.part == part {
			return i
		}
	}
	return len(parts)
}

func phrase(part string) string {
	if i := rank(part); i < len(parts) {
		return parts[i].phrase + " "
	}
	if part == "" {
		return ""
	}
	return part + ": "
}

func (t *traceText) node(i, depth int, edge registry.TraceEdge) {
	n := t.trace.Nodes[i]
	t.shown[i] = true
	t.last++
	t.number[i] = t.last
	// Twelve levels and more do not move further to the right.
	lead := fmt.Sprintf("%s[%d] ", strings.Repeat("  ", min(depth, 12)), t.number[i])
	head := phrase(edge.Part) + n.Title
	if n.Value != nil && n.StandardUncertainty != nil {
		if u := *n.StandardUncertainty; u > 0 {
			head += fmt.Sprintf(" = %s ‰, u %s ‰", Fixed(*n.Value, Decimals(u)), Fixed(u, Decimals(u)))
		} else {
			head += fmt.Sprintf(" = %s ‰, exact", Fixed(*n.Value, 3))
		}
	}
	if edge.Share != nil {
		head += fmt.Sprintf("; brings %s of the variance", percent(*edge.Share))
	}
	t.Paragraph(lead, head)
	indent := strings.Repeat(" ", len(lead))
	if n.Detail != "" {
		t.Paragraph(indent, n.Detail)
	}
	t.Paragraph(indent, history(n))
	again := map[string][]string{}
	for _, e := range t.children[i] {
		if t.shown[e.To] {
			what := fmt.Sprintf("[%d]", t.number[e.To])
			if e.Share != nil {
				what += fmt.Sprintf(" (%s)", percent(*e.Share))
			}
			again[e.Part] = append(again[e.Part], what)
			continue
		}
		t.node(e.To, depth+1, e)
	}
	var list []string
	for _, p := range parts {
		if len(again[p.part]) > 0 {
			list = append(list, p.part+" "+strings.Join(again[p.part], ", "))
		}
	}
	if len(list) > 0 {
		t.Paragraph(strings.Repeat("  ", min(depth+1, 12)), "also, shown above: "+strings.Join(list, "; "))
	}
}

// history tells who stated a version, when and why, and what was decided.
func history(n registry.TraceNode) string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s.%d, recorded by %s %s", store.FormatCode(n.Code), n.Version, n.RecordedBy, textMoment(n.RecordedAt))
	if n.ValidFrom != nil {
		fmt.Fprintf(&b, ", holds from %s", n.ValidFrom.Time().Format("2006-01-02"))
	}
	if n.Reason != "" {
		fmt.Fprintf(&b, " (%s)", n.Reason)
	}
	for _, d := range n.Decisions {
		fmt.Fprintf(&b, "; %s by %s %s", d.Act, d.By, textMoment(d.At))
		if d.Reason != "" {
			fmt.Fprintf(&b, " (%s)", d.Reason)
		}
	}
	if n.Kind.Decided() && n.State != store.Approved {
		fmt.Fprintf(&b, "; now %s", n.State)
	}
	return b.String()
}

func textMoment(i store.Instant) string { return i.Time().Format("2006-01-02 15:04") }

func percent(share float64) string {
	if share > 0 && share < 0.001 {
		return "under 0.1 %"
	}
	return fmt.Sprintf("%.1f %%", math.Abs(100*share))
}

// ends says in what the chain ends.
func (t *traceText) ends() string {
	kinds := map[string]int{}
	for i, n := range t.trace.Nodes {
		if n.Leaf != "" && n.Kind == store.KindValue {
			kinds["published value"]++
		} else if len(t.children[i]) == 0 {
			kinds[string(n.Kind)]++
		}
	}
	var list []string
	for _, k := range []struct{ kind, one, many string }{
		{"published value", "published value", "published values"}, {"scale", "scale definition", "scale definitions"}, {"material", "material", "materials"},
		{"sample", "sample", "samples"}, {"instrument", "instrument", "instruments"},
	} {
		if kinds[k.kind] > 0 {
			list = append(list, Count(kinds[k.kind], k.one, k.many))
			delete(kinds, k.kind)
		}
	}
	for kind, n := range kinds {
		list = append(list, Count(n, kind, kind+"s"))
	}
	text := fmt.Sprintf("The chain has %s and ends in %s.", Count(len(t.trace.Nodes), "version", "versions"), strings.Join(list, ", "))
	if t.trace.Cut > 0 {
		text += fmt.Sprintf(" %d further ones were not followed.", t.trace.Cut)
	}
	return text
}

// WriteAbove writes what rests on a version as text: one line for each version.
func WriteAbove(w io.Writer, t registry.Trace) error {
	p := NewTextPage(w)
	for _, n := range t.Nodes {
		text := n.Title
		if n.Value != nil && n.StandardUncertainty != nil {
			text += " = " + deltaText(n) + " ‰"
		}
		text += "; " + history(n)
		p.Paragraph(strings.Repeat("  ", min(n.Depth, 12)), text)
	}
	p.Line("")
	p.Paragraph("", Count(max(len(t.Nodes)-1, 0), "version rests", "versions rest")+" on it here.")
	return p.Err()
}
