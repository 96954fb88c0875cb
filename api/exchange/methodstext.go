package exchange

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// MethodsText is what a paper or a client asks of a report: how it was measured,
// in sentences, and the anchors and controls as tables.
type MethodsText struct {
	Paragraphs []string
	Anchors    []AnchorRow
	Controls   []ControlRow
}

// An AnchorRow is one anchor with the value that was used.
type AnchorRow struct {
	Material, Lot, Scale string
	Value, U             string // ‰, as the value's own digits have it
	Version              string
	Source               string
	Behind               string // the outside values behind a value assigned here
	Sessions             int
}

// A ControlRow is one control with what was accepted and what was found (‰).
type ControlRow struct {
	Material, Scale      string
	Accepted, AcceptedU  string
	Found, SD, Deviation string
	Sessions, Analyses   int
}

// DescribeMethods puts what a report rests on into words of its own.
func DescribeMethods(f registry.ReportFacts) MethodsText {
	var t MethodsText
	for _, a := range f.Anchors {
		v := a.Value.Value
		row := AnchorRow{Material: a.Material, Lot: a.Lot, Scale: v.Scale, Value: strings.Replace(string(v.Value), "-", "−", 1), U: uText(v), Version: fmt.Sprintf("%s.%d", a.Value.Code, a.Value.Ref.Version), Sessions: a.Sessions}
		switch {
		case a.Campaign != "":
			row.Source = "campaign " + store.FormatCode(a.Campaign) + ": " + v.Evidence
		case v.Basis == "assignment":
			row.Source = "assigned in the laboratory: " + v.Evidence
		default:
			row.Source = strings.Trim(v.Basis+": "+v.Evidence, ": ")
		}
		var behind []string
		for _, ref := range a.Behind {
			material, _, _ := strings.Cut(ref.Code, "/")
			behind = append(behind, fmt.Sprintf("%s (%s.%d)", material, ref.Code, ref.Version))
		}
		row.Behind = strings.Join(behind, ", ")
		if len(v.Value) > 0 && v.Basis == "assignment" {
			n, err := strconv.ParseFloat(string(v.Value), 64)
			if err == nil {
				row.Value = Fixed(n, Decimals(v.StandardUncertainty))
			}
		}
		t.Anchors = append(t.Anchors, row)
	}
	for _, c := range f.Controls {
		row := ControlRow{Material: c.Material, Scale: c.Scale, Sessions: len(c.Found), Analyses: c.Analyses}
		mean, sd := meanSD(c.Found)
		places := 2
		if c.AcceptedU != nil && *c.AcceptedU > 0 {
			places = Decimals(*c.AcceptedU)
			row.AcceptedU = Fixed(*c.AcceptedU, places)
		}
		row.Found = Fixed(mean, places)
		if len(c.Found) > 1 {
			row.SD = Fixed(sd, places)
		}
		if c.Accepted != nil {
			row.Accepted, row.Deviation = Fixed(*c.Accepted, places), Fixed(mean-*c.Accepted, places)
		}
		t.Controls = append(t.Controls, row)
	}
	t.paragraphs(f)
	return t
}

func uText(v store.Value) string {
	if !(v.StandardUncertainty > 0) {
		if v.Exact {
			return "exact"
		}
		return ""
	}
	return Fixed(v.StandardUncertainty, Decimals(v.StandardUncertainty))
}

func (t *MethodsText) paragraphs(f registry.ReportFacts) {
	for _, m := range f.Methods {
		text := "Measured by the method “" + m.Value.Title + "” (" + fmt.Sprintf("%s, version %d", m.Code, m.Ref.Version) + ")."
		if p := strings.TrimSpace(m.Value.Procedure); p != "" {
			text += " " + strings.TrimSuffix(p, ".") + "."
		}
		var corrections []string
		for _, c := range m.Value.Corrections {
			what := c.Name
			if c.Quantity != "" {
				what += " of " + c.Quantity
			}
			switch c.State {
			case "earlier":
				what += " by " + orElse(c.By, "the instrument's software") + constantsText(c.Constants)
			case "here":
				what += " in the fit" + constantsText(c.Constants)
			case "not applicable":
				what += " (does not apply)"
			}
			corrections = append(corrections, what)
		}
		if len(corrections) > 0 {
			text += " Corrections: " + strings.Join(corrections, "; ") + "."
		}
		t.Paragraphs = append(t.Paragraphs, text)
	}
	for _, i := range f.Instruments {
		text := "Instrument: " + i.Value.Name
		if i.Value.Configuration != "" {
			text += ", " + i.Value.Configuration
		}
		t.Paragraphs = append(t.Paragraphs, text+".")
	}
	byScale := map[string][]store.Version[store.Calibration]{}
	var scales []string
	for _, c := range f.Calibrations {
		if byScale[c.Value.Scale] == nil {
			scales = append(scales, c.Value.Scale)
		}
		byScale[c.Value.Scale] = append(byScale[c.Value.Scale], c)
	}
	slices.Sort(scales)
	for _, scale := range scales {
		list := byScale[scale]
		var words []string
		anchors := map[int]bool{}
		slopes := []float64{}
		excluded := 0
		for _, c := range list {
			anchors[len(c.Value.Anchors)] = true
			if w := modelWords(c.Value.Model); !slices.Contains(words, w) {
				words = append(words, w)
			}
			if c.Value.Line != nil && c.Value.Line.Slope != 0 {
				slopes = append(slopes, 1/c.Value.Line.Slope)
			}
			excluded += len(c.Value.Excluded)
		}
		var counts []int
		for n := range anchors {
			counts = append(counts, n)
		}
		slices.Sort(counts)
		number := fmt.Sprint(counts[0])
		if len(counts) > 1 {
			number += " to " + fmt.Sprint(counts[len(counts)-1])
		}
		text := fmt.Sprintf("Deltas are given on the scale %s. %s normalized by a line through %s anchors (%s); the values that were used for them stand in the table.", scale,
			Count(len(list), "session was", "sessions were"), number, strings.Join(words, "; "))
		if len(slopes) > 0 {
			text += fmt.Sprintf(" Slope (raw per true) %s.", rangeText(slopes, 4))
		}
		if excluded > 0 {
			text += fmt.Sprintf(" %s left out, each with cause and reason on record.", Count(excluded, "reading was", "readings were"))
		} else {
			text += " No reading was left out."
		}
		t.Paragraphs = append(t.Paragraphs, text)
	}
	us := map[string][]float64{}
	for _, v := range f.Finals {
		us[v.Value.Scale] = append(us[v.Value.Scale], v.Value.StandardUncertainty)
	}
	for _, scale := range scales {
		if len(us[scale]) > 0 {
			t.Paragraphs = append(t.Paragraphs, fmt.Sprintf("The standard uncertainty u of %s on %s is %s ‰. It combines the noise of sample and anchors, the uncertainty of the anchors' assigned values and the difference between sessions; u is not the standard deviation of replicates.",
				Count(len(us[scale]), "result", "results"), scale, rangeText(us[scale], 2)))
		}
	}
}

func constantsText(c string) string {
	if c == "" {
		return ""
	}
	return " (" + c + ")"
}

func modelWords(m calib.Model) string {
	words := []string{"intercept and slope"}
	for _, x := range []struct{ value, name string }{{string(m.Drift), "drift"}, {string(m.Size), "size"}, {string(m.Memory), "memory"}} {
		if x.value != "" && x.value != "none" {
			words = append(words, x.value+" "+x.name)
		}
	}
	weights := string(m.Weights)
	if weights == "" {
		weights = "declared"
	}
	return strings.Join(words, ", ") + ", weights " + weights
}

func rangeText(xs []float64, digits int) string {
	low, high := slices.Min(xs), slices.Max(xs)
	a, b := strconv.FormatFloat(low, 'g', digits, 64), strconv.FormatFloat(high, 'g', digits, 64)
	if a == b {
		return a
	}
	return a + " to " + b
}

// Text is the whole as plain text of at most 100 columns.
func (t MethodsText) Text() string {
	var b strings.Builder
	p := NewTextPage(&b)
	for _, text := range t.Paragraphs {
		p.Paragraph("", text)
		p.Line("")
	}
	p.Line("Anchors")
	var rows [][]string
	for _, a := range t.Anchors {
		rows = append(rows, []string{a.Material, a.Scale, a.Value, a.U, strconv.Itoa(a.Sessions), a.Version})
	}
	p.Tabulate("", []string{"material", "scale", "‰", "u ‰", "n", "version of the value"}, []bool{false, false, true, true, true, false}, rows)
	p.Line("")
	for _, a := range t.Anchors {
		text := a.Material + ": " + a.Source
		if a.Behind != "" {
			text += "; rests on " + a.Behind
		}
		p.Paragraph("", text+".")
	}
	if len(t.Controls) > 0 {
		p.Line("")
		p.Line("Controls")
		rows = nil
		for _, c := range t.Controls {
			rows = append(rows, []string{c.Material, c.Scale, c.Accepted, c.AcceptedU, c.Found, c.Deviation, strconv.Itoa(c.Analyses), strconv.Itoa(c.Sessions)})
		}
		p.Tabulate("", []string{"material", "scale", "accepted ‰", "u ‰", "found ‰", "difference ‰", "n", "sessions"}, []bool{false, false, true, true, true, true, true, true}, rows)
	}
	return b.String()
}

func orElse(text, other string) string {
	if text == "" {
		return other
	}
	return text
}

// meanSD is the mean and the standard deviation of a sample (n − 1).
func meanSD(xs []float64) (mean, sd float64) {
	for _, x := range xs {
		mean += x / float64(len(xs))
	}
	for _, x := range xs {
		sd += (x - mean) * (x - mean)
	}
	if len(xs) < 2 {
		return mean, 0
	}
	return mean, math.Sqrt(sd / float64(len(xs)-1))
}
