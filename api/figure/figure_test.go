package figure

import (
	"bytes"
	"encoding/json"
	"encoding/xml"
	"flag"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
)

var update = flag.Bool("update", false, "write the golden figures anew; look at them before keeping them")

// What testdata holds was read from a registry with one invented chain of three
// calibrations: simulated readings, published materials.
func fixture[T any](t testing.TB, name string) T {
	t.Helper()
	var v T
	text, err := os.ReadFile(filepath.Join("testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(text, &v); err != nil {
		t.Fatal(err)
	}
	return v
}

func figures(t testing.TB) map[string]func(io.Writer) error {
	trace := fixture[registry.Trace](t, "trace.json")
	calibration := fixture[store.Version[store.Calibration]](t, "calibration.json")
	readings := fixture[[]store.Reading](t, "readings.json")
	link := TraceStyle{Link: func(ref store.Ref) string { return "/records/" + string(ref.Kind) + "/" + ref.Code + "?a=1&b=2" }}
	return map[string]func(io.Writer) error{
		"trace":     func(w io.Writer) error { return Trace(w, trace, link) },
		"line":      func(w io.Writer) error { return Line(w, calibration, readings) },
		"residuals": func(w io.Writer) error { return Residuals(w, calibration, readings) },
	}
}

func TestFiguresAreTheOnesThatWereLookedAt(t *testing.T) {
	for name, draw := range figures(t) {
		var b, again bytes.Buffer
		if err := draw(&b); err != nil {
			t.Fatal(err)
		}
		if err := draw(&again); err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(b.Bytes(), again.Bytes()) {
			t.Errorf("%s: drawn twice, other bytes", name)
		}
		path := filepath.Join("testdata", name+".svg")
		if *update {
			if err := os.WriteFile(path, b.Bytes(), 0o600); err != nil {
				t.Fatal(err)
			}
		}
		want, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(b.Bytes(), want) {
			t.Errorf("%s differs from testdata/%s.svg; draw with -update and look at it", name, name)
		}
	}
}

// elements counts the elements of an SVG and gathers its titles; it fails on what is no XML.
func elements(t testing.TB, svg []byte) (map[string]int, []string) {
	t.Helper()
	count := map[string]int{}
	var titles []string
	inTitle := false
	for d := xml.NewDecoder(bytes.NewReader(svg)); ; {
		token, err := d.Token()
		if err == io.EOF {
			return count, titles
		}
		if err != nil {
			t.Fatalf("not XML: %v", err)
		}
		switch token := token.(type) {
		case xml.StartElement:
			count[token.Name.Local]++
			inTitle = token.Name.Local == "title"
			for _, a := range token.Attr {
				if strings.HasPrefix(a.Name.Local, "on") || a.Name.Local == "style" {
					t.Errorf("<%s> has the attribute %s", token.Name.Local, a.Name.Local)
				}
				if strings.Contains(a.Value, "NaN") || strings.Contains(a.Value, "Inf") {
					t.Errorf("<%s> has %s=%q", token.Name.Local, a.Name.Local, a.Value)
				}
			}
		case xml.CharData:
			if inTitle {
				titles = append(titles, string(token))
			}
		case xml.EndElement:
			inTitle = false
		}
	}
}

func TestTracePictureHoldsEveryVersionAndEdge(t *testing.T) {
	trace := fixture[registry.Trace](t, "trace.json")
	var b bytes.Buffer
	if err := figures(t)["trace"](&b); err != nil {
		t.Fatal(err)
	}
	count, titles := elements(t, b.Bytes())
	if count["script"] != 0 || count["style"] != 0 {
		t.Errorf("scripts or style sheets in the picture: %v", count)
	}
	if count["a"] != len(trace.Nodes) {
		t.Errorf("%d links, want one for each of %d versions", count["a"], len(trace.Nodes))
	}
	for _, n := range trace.Nodes {
		if !slices.ContainsFunc(titles, func(s string) bool { return strings.HasPrefix(s, n.Title+"; ") }) {
			t.Errorf("no box is titled %q", n.Title)
		}
	}
	for _, e := range trace.Edges {
		want := trace.Nodes[e.From].Title + " rests on " + trace.Nodes[e.To].Title + " ("
		if !slices.ContainsFunc(titles, func(s string) bool { return strings.HasPrefix(s, want) && strings.Contains(s, e.Part) }) {
			t.Errorf("no line says %q … %s", want, e.Part)
		}
		if e.Share != nil && !slices.ContainsFunc(titles, func(s string) bool { return strings.HasPrefix(s, want) && strings.Contains(s, "% of the variance") }) {
			t.Errorf("the line %q says no share", want)
		}
	}
}

// A random graph without circles is drawn with every box in its column, none on
// another, and every line to the right; beyond 200 boxes it is gathered.
func TestTraceLayoutKeepsBoxesApart(t *testing.T) {
	random := rand.New(rand.NewPCG(5, 6))
	kinds := []store.Kind{store.KindCalibration, store.KindValue, store.KindSession, store.KindMaterial}
	for _, n := range []int{1, 2, 10, 60, 199, 260, 1500} {
		var trace registry.Trace
		for i := range n {
			trace.Nodes = append(trace.Nodes, registry.TraceNode{Ref: store.Ref{Key: store.Key{Laboratory: "FJO", Kind: kinds[i%4], Code: fmt.Sprint("N", i)}, Version: 1}, Title: fmt.Sprint("node ", i)})
			if i > 0 {
				for range 1 + random.IntN(2) {
					trace.Edges = append(trace.Edges, registry.TraceEdge{From: random.IntN(i), To: i, Part: "member"})
				}
			}
		}
		l := layout{trace: trace}
		l.place()
		l.order()
		l.settle()
		boxes, members := 0, 0
		for _, b := range l.boxes {
			if !b.lane {
				boxes++
				members += len(b.members)
			}
		}
		if members != n || boxes > MaxTraceNodes {
			t.Errorf("%d nodes: %d boxes hold %d of them, want at most %d and all", n, boxes, members, MaxTraceNodes)
		}
		for _, column := range l.columns {
			for k := 1; k < len(column); k++ {
				a, b := l.boxes[column[k-1]], l.boxes[column[k]]
				if b.y-b.height/2 < a.y+a.height/2+rowGap-1e-6 {
					t.Errorf("%d nodes: boxes %d and %d of column %d touch", n, k-1, k, a.column)
				}
			}
		}
		for _, li := range l.links {
			for k := 1; k < len(li.path); k++ {
				if l.boxes[li.path[k]].column != l.boxes[li.path[k-1]].column+1 {
					t.Errorf("%d nodes: a line jumps or turns back", n)
				}
			}
		}
		var b bytes.Buffer
		if err := Trace(&b, trace, TraceStyle{}); err != nil {
			t.Fatal(err)
		}
		elements(t, b.Bytes())
	}
}

func TestFiguresEscapeWhatPeopleTyped(t *testing.T) {
	trace := fixture[registry.Trace](t, "trace.json")
	trace.Nodes[0].Title = `<script>alert("x")</script> & \x00 ` + "\x01\xff"
	var b bytes.Buffer
	if err := Trace(&b, trace, TraceStyle{Link: func(store.Ref) string { return `/"><script>` }}); err != nil {
		t.Fatal(err)
	}
	if count, _ := elements(t, b.Bytes()); count["script"] != 0 {
		t.Error("text became an element")
	}
}

func TestLineMarksEveryAnchorAndReading(t *testing.T) {
	c := fixture[store.Version[store.Calibration]](t, "calibration.json")
	readings := fixture[[]store.Reading](t, "readings.json")
	byNumber := map[int]string{}
	for _, r := range readings {
		byNumber[r.Number] = r.Material
	}
	for name, draw := range figures(t) {
		if name == "trace" {
			continue
		}
		var b bytes.Buffer
		if err := draw(&b); err != nil {
			t.Fatal(err)
		}
		_, titles := elements(t, b.Bytes())
		for _, d := range c.Value.Readings {
			want := fmt.Sprintf("reading %d", d.Number)
			if d.Residual != nil && !slices.ContainsFunc(titles, func(s string) bool { return strings.HasPrefix(s, want) && strings.Contains(s, byNumber[d.Number]) }) {
				t.Errorf("%s: no mark for %s", name, want)
			}
		}
		for _, a := range c.Value.Anchors {
			if name == "line" && !slices.ContainsFunc(titles, func(s string) bool { return strings.HasPrefix(s, a.Material+", assigned") }) {
				t.Errorf("no mark for the anchor %s", a.Material)
			}
		}
	}
}

func TestFiguresRefuseWhatTheyCannotDraw(t *testing.T) {
	none := store.Version[store.Calibration]{}
	for name, err := range map[string]error{
		"trace":     Trace(io.Discard, registry.Trace{}, TraceStyle{}),
		"edge":      Trace(io.Discard, registry.Trace{Nodes: make([]registry.TraceNode, 1), Edges: []registry.TraceEdge{{To: 3}}}, TraceStyle{}),
		"line":      Line(io.Discard, none, nil),
		"residuals": Residuals(io.Discard, none, nil),
	} {
		if err == nil {
			t.Errorf("%s: drawn from nothing", name)
		}
	}
}

func BenchmarkTraceOf200Versions(b *testing.B) {
	var trace registry.Trace
	for i := range 200 {
		trace.Nodes = append(trace.Nodes, registry.TraceNode{Title: "node"})
		if i > 0 {
			trace.Edges = append(trace.Edges, registry.TraceEdge{From: i / 3, To: i, Part: "member"})
		}
	}
	for b.Loop() {
		if err := Trace(io.Discard, trace, TraceStyle{}); err != nil {
			b.Fatal(err)
		}
	}
}
