package demo

import (
	"context"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"deltamoor/api/exchange"
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
	p := &page{exchange.NewTextPage(w)}
	p.story(s)
	for _, r := range s.Reports {
		if slices.ContainsFunc(r.Lines, func(l registry.ReportedDelta) bool { return l.Code == s.Shown }) {
			p.report(s, r)
		}
	}
	p.Line("")
	p.heading("Where one of these numbers comes from")
	p.Paragraph("", "Read downwards: each line rests on those further to the right below it. Every version named here is kept for ever; none is overwritten. "+
		"An anchor is a material of known value that pins the line of a session; a control is measured beside it and never in the line. "+
		"\"Brings x % of the variance\" says how much of u² of the result that the trace follows comes from that anchor's value; the rest is the session's own. "+
		"\"Weights replicate\" means that the noise of a reading was estimated from repeated portions of the anchors. "+
		"What \"registry\" recorded are the published scales and values that every registry begins with. Times are UTC.")
	p.Line("")
	if p.Err() != nil {
		return p.Err()
	}
	if err := exchange.WriteTrace(w, trace); err != nil {
		return err
	}
	if err := p.support(ctx, reg, s, trace); err != nil {
		return err
	}
	p.Line("")
	p.heading("Caution")
	p.Paragraph("", "The laboratory is invented; the hazards of such work are not. Reactors run at 1000 to 1450 °C, and compressed gases, flammable hydrogen among them, "+
		"feed the instruments. Nothing above is an instruction: the safety data sheet, local rules and trained staff decide. Numbers that decide on health, food fraud or law "+
		"belong to accredited practice.")
	return p.Err()
}

// A page is a text page of the demo.
type page struct{ *exchange.TextPage }

func (p *page) heading(text string) {
	p.Line(text)
	p.Line(strings.Repeat("=", len([]rune(text))))
}

// story tells what happened, in the order it did.
func (p *page) story(s *Summary) {
	p.heading(s.Name + " (invented)")
	p.Paragraph("", fmt.Sprintf("People: %s is the analyst, %s the authorised signatory who approves what the analyst made, %s the manager, %s the administrator, %s the auditor.",
		s.Analyst.Person, s.Signatory.Person, s.Manager.Person, s.Administrator.Person, s.Auditor.Person))
	p.Paragraph("", "A delta (δ) compares the isotope ratio of a sample with that of an international scale, in parts per thousand (per mil, ‰). The laboratory's working standards "+
		"carry it from international reference materials to the samples; each session draws a line through them.")
	p.Line("")
	p.Paragraph("", "Sessions of 2025, from files as the instruments export them:")
	var rows [][]string
	for _, x := range s.Sessions {
		outcome := "accepted"
		if x.Rejected {
			outcome = "rejected (leak)"
		}
		rows = append(rows, []string{x.StartedAt.Format("01-02"), store.FormatCode(x.Code), x.Label, x.File, fmt.Sprint(x.Readings), outcome})
	}
	p.Tabulate("  ", []string{"started", "session", "what", "file", "readings", "outcome"}, []bool{false, false, false, false, true, false}, rows)
	p.Line("")
	p.Paragraph("", "What went wrong, and what was done about it:")
	p.Paragraph("  - ", fmt.Sprintf("In session %s the anchor %s disagreed with the rest. The registry flagged it: \"%s\" Without it, the line through the others misses it by %.1f times the standard uncertainty of that difference. The analyst looked, left %s of that jar out with cause and reason, "+
		"and drew the line again; the readings stay in the record.", store.FormatCode(s.Jar.Session), s.Jar.Label, said(s.Jar.Before["d13C"], "anchor_disagrees"), math.Abs(s.Jar.LeftOut["d13C"][s.Jar.Material]), exchange.Count(len(s.Jar.Readings), "reading", "readings")))
	p.Paragraph("  - ", fmt.Sprintf("One nitrogen peak of sample %s (reading %d) was spoiled by an incomplete combustion and left out; the carbon of the same analysis (reading %d) stayed.",
		store.FormatCode(s.Peak.Sample), s.Peak.Reading, s.Peak.CarbonReading))
	p.Paragraph("  - ", fmt.Sprintf("Two clients call a sample %q. A file that named them so was refused whole; by their codes (%s) they are two samples.",
		s.SameLabel.Label, strings.Join(codes(s.SameLabel.Samples), " and ")))
	p.Paragraph("  - ", fmt.Sprintf("Session %s leaked. The registry flagged it: \"%s\" It was rejected, its calibration declined, its samples measured again; it stays in the record.",
		store.FormatCode(s.Rejected.Session), said(s.Rejected.Flags, "slope_outside_limits")))
	p.Line("")
}

// support says what the readings behind the traced delta say of every term of
// the model of their session.
func (p *page) support(ctx context.Context, reg *registry.Registry, s *Summary, trace registry.Trace) error {
	i := slices.IndexFunc(trace.Nodes, func(n registry.TraceNode) bool { return n.Kind == store.KindCalibration })
	if i < 0 {
		return fmt.Errorf("the trace of %s has no calibration", s.Shown)
	}
	c, err := registry.One[store.Calibration](ctx, reg, s.Auditor, store.KindCalibration, trace.Nodes[i].Code, trace.Nodes[i].Ref.Version, store.Moment{})
	if err != nil {
		return err
	}
	p.Line("")
	p.heading("What the readings of that session support")
	p.Paragraph("", "Each term of the model, and each that it could have, is tested against the readings; the method decides, the test informs.")
	for _, n := range c.Value.Needs {
		p.Paragraph("  - ", calib.TermNeed(n).Sentence())
	}
	return p.Err()
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
var quantityNames = map[string]string{scaleC: "carbon, δ13C", scaleN: "nitrogen, δ15N", scaleH: "hydrogen, δ2H", scaleO: "oxygen, δ18O"}

// report prints one report: a table for each scale, with one number of
// decimals from two digits of the median u of the column.
func (p *page) report(s *Summary, r registry.Report) {
	p.heading(fmt.Sprintf("Report %s", store.FormatCode(r.Code)))
	p.Paragraph("", fmt.Sprintf("To: %s. %s. Issued by %s, %s UTC.", r.Value.Client, r.Value.Title, r.RecordedBy, moment(r.RecordedAt)))
	p.Paragraph("", r.Value.Note)
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
		d := exchange.Decimals(us[len(us)/2])
		p.Line("")
		p.Paragraph("", fmt.Sprintf("%s, on the scale %s, in ‰", nameOf(scale), scale))
		var rows [][]string
		for _, l := range r.Lines {
			if l.Scale == scale {
				rows = append(rows, []string{l.Label, store.FormatCode(l.Sample), exchange.Fixed(l.Value, d), exchange.Fixed(l.StandardUncertainty, d), exchange.Fixed(l.Expanded, d), fmt.Sprintf("%.2f", l.K), store.FormatCode(l.Code), remarks(l.Flags)})
			}
		}
		headings, right := []string{"your label", "our sample", "delta", "u", "U", "k", "permanent code", "remarks"}, []bool{false, false, true, true, true, true, false, false}
		if !slices.ContainsFunc(rows, func(row []string) bool { return row[7] != "" }) { // nothing to remark
			headings, right = headings[:7], right[:7]
			for i := range rows {
				rows[i] = rows[i][:7]
			}
		}
		p.Tabulate("  ", headings, right, rows)
	}
	p.Line("")
	p.Paragraph("", "u is the standard uncertainty; U = k·u covers the value with a probability of 95 %. The permanent code can be typed from paper years later and resolves to the "+
		"value, its whole chain and everything decided since.")
	for _, other := range s.Reports {
		if other.Code != r.Code {
			p.Paragraph("", fmt.Sprintf("(Report %s to %s, %s, is not printed here.)", store.FormatCode(other.Code), other.Value.Client, exchange.Count(len(other.Lines), "value", "values")))
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

func moment(i store.Instant) string { return i.Time().Format("2006-01-02 15:04") }
