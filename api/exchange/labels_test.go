package exchange

import (
	"bytes"
	"encoding/xml"
	"errors"
	"fmt"
	"image"
	"image/color"
	"regexp"
	"strconv"
	"strings"
	"testing"

	qr "github.com/piglig/go-qr"

	"deltamoor/api/registry"
)

func unitLabels(n int) []registry.UnitLabel {
	var out []registry.UnitLabel
	for i := range n {
		out = append(out, registry.UnitLabel{Code: fmt.Sprintf("B%08dX", i), Label: fmt.Sprint("jar ", i+1), Material: "PEAT-LO", Lot: "2026-1", Hazards: []string{"H319"}, Storage: "dry <& dark>"})
	}
	return out
}

var (
	labelPath = regexp.MustCompile(`<path fill="#000"[^>]* d="([^"]*)"`)
	labelMove = regexp.MustCompile(`M(\d+) (\d+)h1v1h-1z`)
)

// scan draws the modules of a QR code as they stand in the SVG and reads them
// with the library's reader, which does not see our drawing's source.
func scan(t *testing.T, path string) string {
	t.Helper()
	const scale, quiet = 6, 4
	size := 0
	var dark [][2]int
	for _, m := range labelMove.FindAllStringSubmatch(path, -1) {
		x, _ := strconv.Atoi(m[1])
		y, _ := strconv.Atoi(m[2])
		dark = append(dark, [2]int{x, y})
		size = max(size, x+1, y+1)
	}
	side := (size + 2*quiet) * scale
	img := image.NewGray(image.Rect(0, 0, side, side))
	for i := range img.Pix {
		img.Pix[i] = 255
	}
	for _, d := range dark {
		for dx := range scale {
			for dy := range scale {
				img.SetGray((d[0]+quiet)*scale+dx, (d[1]+quiet)*scale+dy, color.Gray{})
			}
		}
	}
	text, err := qr.Decode(img)
	if err != nil {
		t.Fatalf("the code cannot be read: %v", err)
	}
	return text
}

func TestEveryLabelCarriesTheAddressOfItsUnit(t *testing.T) {
	labels := unitLabels(30)
	for _, o := range []LabelOptions{{}, {Address: "https://registry.example/"}, {Page: 2}} {
		var sheet bytes.Buffer
		if err := WriteLabels(&sheet, labels, o); err != nil {
			t.Fatal(err)
		}
		found := labelPath.FindAllStringSubmatch(sheet.String(), -1)
		first, want := 0, 24
		if o.Page == 2 {
			first, want = 24, 6
		}
		if len(found) != want {
			t.Fatalf("%d codes on the sheet, want %d", len(found), want)
		}
		for _, i := range []int{0, want - 1} {
			if got, want := scan(t, found[i][1]), LabelAddress(labels[first+i], o); got != want {
				t.Errorf("label %d reads %q, want %q", i, got, want)
			}
		}
		if err := xml.Unmarshal(sheet.Bytes(), new(struct{})); err != nil {
			t.Errorf("the sheet is not well-formed: %v", err)
		}
		for _, want := range []string{`width="210mm"`, "PEAT-LO", "lot 2026-1", "H319", "dry &lt;&amp; dark&gt;"} {
			if !strings.Contains(sheet.String(), want) {
				t.Errorf("the sheet lacks %q", want)
			}
		}
	}
	if n := LabelPages(30, LabelOptions{}); n != 2 {
		t.Errorf("%d sheets for 30 labels, want 2", n)
	}
}

func TestSheetsThatCannotBeAreRefused(t *testing.T) {
	for _, o := range []LabelOptions{{Page: 3}, {Columns: 50, Rows: 2}, {Columns: 20, Rows: 50}, {Width: 5000, Height: 100}} {
		var refusal *LabelError
		if err := WriteLabels(&bytes.Buffer{}, unitLabels(30), o); !errors.As(err, &refusal) {
			t.Errorf("%+v: %v", o, err)
		}
	}
	if err := WriteLabels(&bytes.Buffer{}, nil, LabelOptions{}); err == nil {
		t.Error("a sheet without labels is made")
	}
}
