package figure

import (
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// MaxTraceNodes is how many boxes a trace picture has at most; larger traces
// are drawn with versions of one kind and generation gathered in one box.
const MaxTraceNodes = 200

// A TraceStyle says how a trace is drawn.
type TraceStyle struct {
	// Link gives the address of a version; nil, or "", draws a box without a link.
	Link func(store.Ref) string
}

// Sizes of the trace picture, in CSS pixels.
const (
	boxWidth, boxHeight = 220.0, 66.0
	columnGap, rowGap   = 80.0, 14.0
	laneHeight          = 8.0
	traceMargin         = 16.0
)

// A box is one node of the picture, or a place where an edge passes a column.
type box struct {
	lane    bool
	column  int
	y       float64 // centre
	height  float64
	members []int // nodes of the trace
	before  []int // boxes one column to the left
	after   []int
}

// A link is one edge of the picture as the boxes it runs through.
type link struct {
	path  []int
	parts []string
	share float64 // NaN where it is not known
	count int
}

// Trace draws what a number rests on: one column for each generation, the
// number at the left; the width of a line grows with the share of the variance
// that it brings. What the columns hold is in order of who rests on whom, so
// that few lines cross.
func Trace(w io.Writer, t registry.Trace, style TraceStyle) error {
	if len(t.Nodes) == 0 {
		return fmt.Errorf("draw a trace: found no nodes")
	}
	for _, e := range t.Edges {
		if e.From < 0 || e.From >= len(t.Nodes) || e.To < 0 || e.To >= len(t.Nodes) {
			return fmt.Errorf("draw a trace: found an edge from %d to %d, expected nodes below %d", e.From, e.To, len(t.Nodes))
		}
	}
	l := layout{trace: t}
	l.place()
	l.order()
	l.settle()
	return l.draw(w, style)
}

type layout struct {
	trace   registry.Trace
	boxes   []box
	links   []link
	columns [][]int
}

// generations gives every node the length of its longest way from the start,
// so that every edge goes to the right.
func generations(t registry.Trace) []int {
	depth := make([]int, len(t.Nodes))
	// Longest ways in a graph without circles settle in as many rounds as it is
	// deep; the bound keeps a graph that has one from going on for ever.
	for range t.Nodes {
		changed := false
		for _, e := range t.Edges {
			if d := depth[e.From] + 1; d > depth[e.To] && d < len(t.Nodes) {
				depth[e.To] = d
				changed = true
			}
		}
		if !changed {
			break
		}
	}
	return depth
}

// place makes boxes and lanes.
func (l *layout) place() {
	depth := generations(l.trace)
	type group struct {
		depth int
		kind  store.Kind
	}
	sizes := map[group]int{}
	for i, n := range l.trace.Nodes {
		sizes[group{depth[i], n.Kind}]++
	}
	// The largest groups are gathered first, until there are few enough boxes.
	gather := math.MaxInt
	for {
		boxes := 0
		largest := 0
		for _, n := range sizes {
			if n >= gather {
				boxes++
				continue
			}
			boxes += n
			largest = max(largest, n)
		}
		if boxes <= MaxTraceNodes || largest < 2 {
			break
		}
		gather = largest
	}
	boxOf := make([]int, len(l.trace.Nodes))
	gathered := map[group]int{}
	for i, n := range l.trace.Nodes {
		g := group{depth[i], n.Kind}
		if k, ok := gathered[g]; ok {
			l.boxes[k].members = append(l.boxes[k].members, i)
			boxOf[i] = k
			continue
		}
		boxOf[i] = len(l.boxes)
		if sizes[g] >= gather {
			gathered[g] = len(l.boxes)
		}
		l.boxes = append(l.boxes, box{column: depth[i], height: boxHeight, members: []int{i}})
	}
	at := map[[2]int]int{}
	for _, e := range l.trace.Edges {
		from, to := boxOf[e.From], boxOf[e.To]
		if l.boxes[from].column >= l.boxes[to].column {
			continue // a circle, which no registry has, would have no way to the right
		}
		k, ok := at[[2]int{from, to}]
		if !ok {
			k = len(l.links)
			at[[2]int{from, to}] = k
			l.links = append(l.links, link{path: []int{from, to}, share: math.NaN()})
		}
		li := &l.links[k]
		li.count++
		if !slices.Contains(li.parts, e.Part) {
			li.parts = append(li.parts, e.Part)
		}
		// The share of one edge is that of the line; of several from different
		// numbers there is no common one.
		switch {
		case li.count == 1 && e.Share != nil:
			li.share = *e.Share
		case li.count > 1:
			li.share = math.NaN()
		}
	}
	for k := range l.links {
		from, to := l.links[k].path[0], l.links[k].path[1]
		path := []int{from}
		for column := l.boxes[from].column + 1; column < l.boxes[to].column; column++ {
			path = append(path, len(l.boxes))
			l.boxes = append(l.boxes, box{lane: true, column: column, height: laneHeight})
		}
		path = append(path, to)
		for i := 1; i < len(path); i++ {
			a, b := path[i-1], path[i]
			l.boxes[a].after = append(l.boxes[a].after, b)
			l.boxes[b].before = append(l.boxes[b].before, a)
		}
		l.links[k].path = path
	}
	for i, b := range l.boxes {
		for len(l.columns) <= b.column {
			l.columns = append(l.columns, nil)
		}
		l.columns[b.column] = append(l.columns[b.column], i)
	}
}

// order sorts every column by the mean place of the neighbours, to and fro.
func (l *layout) order() {
	place := make([]float64, len(l.boxes))
	number := func(column []int) {
		for i, b := range column {
			place[b] = float64(i) / float64(len(column))
		}
	}
	for _, column := range l.columns {
		number(column)
	}
	mean := func(b int, neighbours []int) float64 {
		if len(neighbours) == 0 {
			return place[b]
		}
		sum := 0.0
		for _, n := range neighbours {
			sum += place[n]
		}
		return sum / float64(len(neighbours))
	}
	sweep := func(column []int, neighbours func(int) []int) {
		key := map[int]float64{}
		for _, b := range column {
			key[b] = mean(b, neighbours(b))
		}
		slices.SortStableFunc(column, func(a, b int) int {
			switch {
			case key[a] < key[b]:
				return -1
			case key[a] > key[b]:
				return 1
			}
			return 0
		})
		number(column)
	}
	for range 12 {
		for _, column := range l.columns {
			sweep(column, func(b int) []int { return l.boxes[b].before })
		}
		for i := len(l.columns) - 1; i >= 0; i-- {
			sweep(l.columns[i], func(b int) []int { return l.boxes[b].after })
		}
	}
	for _, column := range l.columns {
		sweep(column, func(b int) []int { return l.boxes[b].before })
	}
}

// settle gives boxes their heights: near the middle of their neighbours, in
// order and without touching.
func (l *layout) settle() {
	for _, column := range l.columns {
		y := 0.0
		for _, b := range column {
			l.boxes[b].y = y + l.boxes[b].height/2
			y += l.boxes[b].height + rowGap
		}
		for _, b := range column {
			l.boxes[b].y -= y / 2
		}
	}
	for round := range 16 {
		for i := range l.columns {
			column := l.columns[i]
			if round%2 == 1 {
				column = l.columns[len(l.columns)-1-i]
			}
			wanted := make([]float64, len(column))
			for k, b := range column {
				wanted[k] = l.boxes[b].y
				neighbours := slices.Concat(l.boxes[b].before, l.boxes[b].after)
				if len(neighbours) > 0 {
					sum := 0.0
					for _, n := range neighbours {
						sum += l.boxes[n].y
					}
					wanted[k] = sum / float64(len(neighbours))
				}
			}
			l.spread(column, wanted)
		}
	}
}

// spread places a column as near to the wanted heights as its order and gaps
// allow: runs that would touch share one mean (isotonic regression).
func (l *layout) spread(column []int, wanted []float64) {
	type run struct {
		sum, weight float64
		first       int
	}
	offset := make([]float64, len(column))
	for k := 1; k < len(column); k++ {
		offset[k] = offset[k-1] + (l.boxes[column[k-1]].height+l.boxes[column[k]].height)/2 + rowGap
	}
	var runs []run
	for k := range column {
		runs = append(runs, run{wanted[k] - offset[k], 1, k})
		for len(runs) > 1 {
			a, b := runs[len(runs)-2], runs[len(runs)-1]
			if a.sum/a.weight <= b.sum/b.weight {
				break
			}
			runs = append(runs[:len(runs)-2], run{a.sum + b.sum, a.weight + b.weight, a.first})
		}
	}
	for i, r := range runs {
		end := len(column)
		if i+1 < len(runs) {
			end = runs[i+1].first
		}
		for k := r.first; k < end; k++ {
			l.boxes[column[k]].y = r.sum/r.weight + offset[k]
		}
	}
}

func (l *layout) draw(w io.Writer, style TraceStyle) error {
	top, bottom := math.Inf(1), math.Inf(-1)
	for _, b := range l.boxes {
		top, bottom = math.Min(top, b.y-b.height/2), math.Max(bottom, b.y+b.height/2)
	}
	const header = 26.0
	shift := traceMargin + header - top
	x := func(column int) float64 { return traceMargin + float64(column)*(boxWidth+columnGap) }
	width := x(len(l.columns)-1) + boxWidth + traceMargin
	height := bottom - top + 2*traceMargin + header + 22
	start := l.trace.Nodes[0]
	title := "What " + start.Title + " rests on"
	if r := l.trace.Reported; r != nil {
		title = "What the reported delta " + store.FormatCode(r.Code) + " rests on"
	}
	var d drawing
	d.open(width, height, title, fmt.Sprintf("%d versions in %d generations, the number at the left and what it rests on to the right; the wider a line, the larger the share of the variance.", len(l.trace.Nodes), len(l.columns)))
	for c := range l.columns {
		d.text(x(c), traceMargin+8, "start", quiet, 11, "generation "+strconv.Itoa(c))
	}
	for _, li := range l.links {
		l.drawLink(&d, li, x, shift)
	}
	for _, b := range l.boxes {
		if !b.lane {
			l.drawBox(&d, b, x(b.column), b.y+shift-b.height/2, style)
		}
	}
	note := "Lines in colour: shares of the variance that are known, as wide as they are large."
	if l.trace.Cut > 0 {
		note += fmt.Sprintf(" %d further versions were not followed.", l.trace.Cut)
	}
	d.text(traceMargin, height-10, "start", quiet, 11, note)
	return d.writeTo(w)
}

func (l *layout) drawLink(d *drawing, li link, x func(int) float64, shift float64) {
	stroke, thick, opacity := rule, 1.2, "0.75"
	if !math.IsNaN(li.share) {
		stroke, thick, opacity = accent, 1.5+9*math.Sqrt(math.Min(math.Max(li.share, 0), 1)), "0.55"
	}
	var path strings.Builder
	for i, k := range li.path {
		b := l.boxes[k]
		left, right, y := px(x(b.column)), px(x(b.column)+boxWidth), px(b.y+shift)
		switch {
		case i == 0:
			fmt.Fprintf(&path, "M%s %s", right, y)
			continue
		default:
			before := l.boxes[li.path[i-1]]
			from := x(before.column) + boxWidth
			middle := px((from + x(b.column)) / 2)
			fmt.Fprintf(&path, "C%s %s %s %s %s %s", middle, px(before.y+shift), middle, y, left, y)
		}
		if b.lane {
			fmt.Fprintf(&path, "L%s %s", right, y)
		}
	}
	from, to := l.boxes[li.path[0]], l.boxes[li.path[len(li.path)-1]]
	title := l.name(from) + " rests on " + l.name(to) + " (" + strings.Join(li.parts, ", ")
	if !math.IsNaN(li.share) {
		title += ", " + signed(100*li.share, 1) + " % of the variance"
	}
	if li.count > 1 {
		title += fmt.Sprintf(", %d times", li.count)
	}
	d.printf(`<path d="%s" fill="none" stroke="%s" stroke-width="%s" stroke-opacity="%s"><title>%s)</title></path>`+"\n", path.String(), stroke, px(thick), opacity, escape(title))
}

func (l *layout) name(b box) string {
	if len(b.members) > 1 {
		return fmt.Sprintf("%d of kind %s", len(b.members), l.trace.Nodes[b.members[0]].Kind)
	}
	return l.trace.Nodes[b.members[0]].Title
}

// drawBox draws one version: kind and state, title, value.
func (l *layout) drawBox(d *drawing, b box, x, y float64, style TraceStyle) {
	n := l.trace.Nodes[b.members[0]]
	if len(b.members) > 1 {
		d.printf("<g><title>%s, gathered in one box</title>\n", escape(l.name(b)))
		d.printf(`<rect x="%s" y="%s" width="%s" height="%s" fill="%s" stroke="%s" stroke-dasharray="4 3"/>`+"\n", px(x), px(y), px(boxWidth), px(boxHeight), tint, quiet)
		d.text(x+12, y+24, "start", ink, 13, fmt.Sprintf("%d × %s", len(b.members), n.Kind), ` font-weight="600"`)
		d.text(x+12, y+42, "start", quiet, 11, "gathered: the table lists each")
		d.printf("</g>\n")
		return
	}
	title := fmt.Sprintf("%s; %s, version %d, %s; stated by %s on %s", n.Title, n.Code, n.Version, n.State, n.RecordedBy, n.RecordedAt.Time().Format("2006-01-02"))
	for _, decision := range n.Decisions {
		title += fmt.Sprintf("; %s by %s on %s", decision.Act, decision.By, decision.At.Time().Format("2006-01-02"))
	}
	if n.Detail != "" {
		title += "; " + fit(n.Detail, 300)
	}
	href := ""
	if style.Link != nil {
		href = style.Link(n.Ref)
	}
	if href != "" {
		d.printf(`<a href="%s">`, escape(href))
	}
	d.printf("<g><title>%s</title>\n", escape(title))
	fill, stroke, head := paper, rule, string(n.Kind)
	if n.Leaf != "" {
		fill = tint // where the chain ends
	}
	if n.State == store.Withdrawn || n.State == store.Superseded || n.State == store.Drafted {
		stroke = warn
		head += " · " + string(n.State)
	}
	d.printf(`<rect x="%s" y="%s" width="%s" height="%s" fill="%s" stroke="%s"/>`+"\n", px(x), px(y), px(boxWidth), px(boxHeight), fill, stroke)
	mark := quiet
	if n.Value != nil {
		mark = accent
	}
	if l.trace.Reported != nil && b.members[0] == 0 {
		mark = ink
	}
	d.printf(`<rect x="%s" y="%s" width="4" height="%s" fill="%s"/>`+"\n", px(x), px(y), px(boxHeight), mark)
	d.text(x+12, y+15, "start", quiet, 10, head)
	value := ""
	if n.Value != nil {
		decimals := 2
		if n.StandardUncertainty != nil {
			decimals = decimalsOf(*n.StandardUncertainty)
		}
		value = signed(*n.Value, decimals) + " ‰"
		if n.StandardUncertainty != nil {
			value += ", u " + signed(*n.StandardUncertainty, decimals)
		}
		d.text(x+boxWidth-8, y+15, "end", ink, 11, value, ` font-weight="600"`)
	}
	for i, line := range wrap(n.Title, 11.5, boxWidth-18, 3) {
		d.text(x+12, y+31+14*float64(i), "start", ink, 11.5, line)
	}
	d.printf("</g>")
	if href != "" {
		d.printf("</a>")
	}
	d.printf("\n")
}
