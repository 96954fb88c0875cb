package demo

import (
	"context"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// Print writes what Build made for people who have read nothing else: what
// happened in the laboratory, one report, and the trace of one of its deltas.
// Lines have at most 100 columns.
func Print(ctx context.Context, w io.Writer, reg *registry.Registry, s *Summary) error {
	trace, err := reg.Trace(ctx, s.Auditor, "", s.Shown, 0)
	if err != nil {
		return fmt.Errorf("trace %s: %w", store.FormatCode(s.Shown), err)
	}
	p := &page{w: w}
	p.story(s)
	for _, r := range s.Reports {
		if slices.ContainsFunc(r.Lines, func(l registry.ReportedDelta) bool { return l.Code == s.Shown }) {
			p.report(s, r)
		}
	}
	p.line("")
	p.heading("Where one of these numbers comes from")
	p.paragraph("", "Read downwards: each line rests on those further to the right below it. Every version named here is kept for ever; none is overwritten. "+
		"An anchor is a material of known value that pins the line of a session; a control is measured beside it and never in the line. "+
		"\"Brings x % of the variance\" says how much of u² of the result that the trace follows comes from that anchor's value; the rest is the session's own. "+
		"\"Weights replicate\" means that the noise of a reading was estimated from repeated portions of the anchors. "+
		"What \"registry\" recorded are the published scales and values that every registry begins with. Times are UTC.")
	p.line("")
	if p.err != nil {
		return p.err
	}
	if err := WriteTrace(w, trace); err != nil {
		return err
	}
	p.line("")
	p.heading("Caution")
	p.paragraph("", "The laboratory is invented; the hazards of such work are not. Reactors run at 1000 to 1450 °C, and compressed gases, flammable hydrogen among them, "+
		"feed the instruments. Nothing above is an instruction: the safety data sheet, local rules and trained staff decide. Numbers that decide on health, food fraud or law "+
		"belong to accredited practice.")
	return p.err
}

func (p *page) heading(text string) {
	p.line(text)
	p.line(strings.Repeat("=", len([]rune(text))))
}

// story tells what happened, in the order it did.
func (p *page) story(s *Summary) {
	p.heading(s.Name + " (invented)")
	p.paragraph("", fmt.Sprintf("People: %s is the analyst, %s the authorised signatory who approves what the analyst made, %s the manager, %s the administrator, %s the auditor.",
		s.Analyst.Person, s.Signatory.Person, s.Manager.Person, s.Administrator.Person, s.Auditor.Person))
	p.paragraph("", "A delta (δ) compares the isotope ratio of a sample with that of an international scale, in parts per thousand (per mil, ‰). The laboratory's working standards "+
		"carry it from international reference materials to the samples; each session draws a line through them.")
	p.line("")
	p.paragraph("", "Sessions of 2025, from files as the instruments export them:")
	var rows [][]string
	for _, x := range s.Sessions {
		outcome := "accepted"
		if x.Rejected {
			outcome = "rejected (leak)"
		}
		rows = append(rows, []string{x.StartedAt.Format("01-02"), store.FormatCode(x.Code), x.Label, x.File, fmt.Sprint(x.Readings), outcome})
	}
	p.tabulate("  ", []string{"started", "session", "what", "file", "readings", "outcome"}, []bool{false, false, false, false, true, false}, rows)
	p.line("")
	p.paragraph("", "What went wrong, and what was done about it:")
	p.paragraph("  - ", fmt.Sprintf("In session %s the anchor %s disagreed with the rest. The registry flagged it: \"%s\" Without it, the line through the others misses it by %.1f times the standard uncertainty of that difference. The analyst looked, left %s of that jar out with cause and reason, "+
		"and drew the line again; the readings stay in the record.", store.FormatCode(s.Jar.Session), s.Jar.Label, said(s.Jar.Before["d13C"], "anchor_disagrees"), math.Abs(s.Jar.LeftOut["d13C"][s.Jar.Material]), count(len(s.Jar.Readings), "reading", "readings")))
	p.paragraph("  - ", fmt.Sprintf("One nitrogen peak of sample %s (reading %d) was spoiled by an incomplete combustion and left out; the carbon of the same analysis (reading %d) stayed.",
		store.FormatCode(s.Peak.Sample), s.Peak.Reading, s.Peak.CarbonReading))
	p.paragraph("  - ", fmt.Sprintf("Two clients call a sample %q. A file that named them so was refused whole; by their codes (%s) they are two samples.",
		s.SameLabel.Label, strings.Join(codes(s.SameLabel.Samples), " and ")))
	p.paragraph("  - ", fmt.Sprintf("Session %s leaked. The registry flagged it: \"%s\" It was rejected, its calibration declined, its samples measured again; it stays in the record.",
		store.FormatCode(s.Rejected.Session), said(s.Rejected.Flags, "slope_outside_limits")))
	p.line("")
}

func codes(list []string) []string {
	var out []string
	for _, c := range list {
		out = append(out, store.FormatCode(c))
	}
	return out
}

// said gives the words of the flags of one code.
func said(flags []calib.Flag, code string) string {
	var words []string
	for _, f := range flags {
		if f.Code == code {
			words = append(words, f.Message)
		}
	}
	return strings.Join(words, " ")
}

// quantities are told to people with a delta.
var quantityNames = map[string]string{scaleC: "carbon, δ13C", scaleN: "nitrogen, δ15N", scaleH: "hydrogen, δ2H"}

// report prints one report: a table for each scale, with one number of
// decimals from two digits of the median u of the column.
func (p *page) report(s *Summary, r registry.Report) {
	p.heading(fmt.Sprintf("Report %s", store.FormatCode(r.Code)))
	p.paragraph("", fmt.Sprintf("To: %s. %s. Issued by %s, %s UTC.", r.Value.Client, r.Value.Title, r.RecordedBy, moment(r.RecordedAt)))
	p.paragraph("", r.Value.Note)
	var scales []string
	for _, l := range r.Lines {
		if !slices.Contains(scales, l.Scale) {
			scales = append(scales, l.Scale)
		}
	}
	slices.Sort(scales)
	for _, scale := range scales {
		var us []float64
		for _, l := range r.Lines {
			if l.Scale == scale {
				us = append(us, l.StandardUncertainty)
			}
		}
		slices.Sort(us)
		d := decimals(us[len(us)/2])
		p.line("")
		p.paragraph("", fmt.Sprintf("%s, on the scale %s, in ‰", nameOf(scale), scale))
		var rows [][]string
		for _, l := range r.Lines {
			if l.Scale == scale {
				rows = append(rows, []string{l.Label, store.FormatCode(l.Sample), fixed(l.Value, d), fixed(l.StandardUncertainty, d), fixed(l.Expanded, d), fmt.Sprintf("%.2f", l.K), store.FormatCode(l.Code), remarks(l.Flags)})
			}
		}
		headings, right := []string{"your label", "our sample", "delta", "u", "U", "k", "permanent code", "remarks"}, []bool{false, false, true, true, true, true, false, false}
		if !slices.ContainsFunc(rows, func(row []string) bool { return row[7] != "" }) { // nothing to remark
			headings, right = headings[:7], right[:7]
			for i := range rows {
				rows[i] = rows[i][:7]
			}
		}
		p.tabulate("  ", headings, right, rows)
	}
	p.line("")
	p.paragraph("", "u is the standard uncertainty; U = k·u covers the value with a probability of 95 %. The permanent code can be typed from paper years later and resolves to the "+
		"value, its whole chain and everything decided since.")
	for _, other := range s.Reports {
		if other.Code != r.Code {
			p.paragraph("", fmt.Sprintf("(Report %s to %s, %s, is not printed here.)", store.FormatCode(other.Code), other.Value.Client, count(len(other.Lines), "value", "values")))
		}
	}
}

func nameOf(scale string) string {
	if name, ok := quantityNames[scale]; ok {
		return name
	}
	return scale
}

func remarks(flags []string) string {
	var out []string
	for _, f := range flags {
		f = strings.ReplaceAll(f, "_", " ")
		if !slices.Contains(out, f) {
			out = append(out, f)
		}
	}
	return strings.Join(out, ", ")
}
