package rest

import (
	"bytes"
	"context"
	"fmt"
	"mime"
	"net/http"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

var reportForms = map[string]string{mediaCSV: "csv", mediaXLSX: "xlsx", mediaHTML: "html", mediaZIP: "package"}

// ReportForm chooses the form of a report.
type ReportForm struct {
	Format string `query:"format" enum:"json,csv,xlsx,html,package" doc:"html is a page for printing, package a Data Package with the data dictionary; the header Accept does the same."`
	format string
}

// Resolve settles the form.
func (p *ReportForm) Resolve(ctx huma.Context) []error {
	if p.format = p.Format; p.format == "" {
		p.format = reportForms[accepted(ctx.Header("Accept"), "application/json", mediaHTML, mediaCSV, mediaXLSX, mediaZIP)]
	}
	return nil
}

// reporting describes the forms of a report.
func reporting(f *face, op *huma.Operation) {
	long(f, op)
	answers[Report](f, op)
	for media, text := range map[string]string{mediaCSV: "The lines.", mediaXLSX: "The lines and the data dictionary as a workbook.", mediaHTML: "A page for printing.",
		mediaZIP: "A Data Package: the lines as CSV, and the data dictionary."} {
		also(media, text)(f, op)
	}
}

func (f *face) report(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	ReportForm
}) (*answer, error) {
	code, err := reportKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	r, err := f.registry.Report(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	var b bytes.Buffer
	name := store.FormatCode(code)
	switch in.format {
	case "csv":
		return csvAnswer(f, convert(r.Lines, showReported), reportedTable), nil
	case "xlsx":
		if err := exchange.WriteReportXLSX(&b, r); err != nil {
			return nil, err
		}
		return fileAnswer(mediaXLSX, name+".xlsx", b.Bytes()), nil
	case "package":
		if err := exchange.WriteReportPackage(&b, r, ""); err != nil {
			return nil, err
		}
		return fileAnswer(mediaZIP, name+".zip", b.Bytes()), nil
	case "html":
		facts, err := f.registry.ReportFacts(ctx, actor, code)
		if err != nil {
			return nil, err
		}
		page := exchange.ReportPage{Report: r, Facts: facts, Completeness: registry.CheckCompleteness(facts),
			Link:       func(code string) string { return "/v1/reported/" + store.FormatCode(code) + "/trace?format=html" },
			ReportLink: func(code string) string { return "/v1/reports/" + store.FormatCode(code) + "?format=html" }}
		if err := exchange.WriteReportPage(&b, page); err != nil {
			return nil, err
		}
		return shownAnswer(mediaHTML, "", b.Bytes()), nil
	}
	return jsonAnswer(reportAnswer(r).Body, 200, map[string]string{"ETag": quoteTag(r.Tag())})
}

// fileAnswer answers with a file to keep.
func fileAnswer(media, name string, body []byte) *answer {
	return &answer{Body: func(hc huma.Context) {
		hc.SetHeader("Content-Type", media)
		hc.SetHeader("Content-Disposition", mime.FormatMediaType("attachment", map[string]string{"filename": name}))
		hc.SetStatus(http.StatusOK)
		_, _ = hc.BodyWriter().Write(body) // who has gone needs no answer
	}}
}

// A Completeness is a report held against what a reported delta must carry.
type Completeness struct {
	Report   string             `json:"report"`
	Complete bool               `json:"complete"`
	Basis    string             `json:"basis"`
	Items    []CompletenessItem `json:"items"`
}

// A CompletenessItem is one thing that a report must say.
type CompletenessItem struct {
	ID       string `json:"id" example:"traceability.anchors"`
	Group    string `json:"group" enum:"procedure,traceability,processing,uncertainty"`
	Asks     string `json:"asks"`
	State    string `json:"state" enum:"satisfied,missing,not applicable"`
	Where    string `json:"where" doc:"Where it stands; or what is missing, and where to say it."`
	Recalled bool   `json:"recalled" doc:"The item's wording is from memory of the technical report and general practice; the four groups are from its abstract."`
}

func (f *face) completeness(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[Completeness], error) {
	code, err := reportKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	c, err := f.registry.Completeness(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	return &plain[Completeness]{Completeness{store.FormatCode(c.Report), c.Complete,
		"minimum requirements for publishing isotope deltas, Skrzypek et al. 2022, doi 10.1515/pac-2021-1108",
		convert(c.Items, func(it registry.CompletenessItem) CompletenessItem { return CompletenessItem(it) })}}, nil
}

// A MethodsText says how the deltas of a report were measured.
type MethodsText struct {
	Paragraphs []string         `json:"paragraphs"`
	Anchors    []MethodsAnchor  `json:"anchors"`
	Controls   []MethodsControl `json:"controls"`
}

// A MethodsAnchor is one anchor with the value that was used; texts as printed (‰).
type MethodsAnchor struct {
	Material string `json:"material"`
	Lot      string `json:"lot,omitempty"`
	Scale    string `json:"scale"`
	Value    string `json:"value"`
	U        string `json:"u"`
	Version  string `json:"version"`
	Source   string `json:"source"`
	Behind   string `json:"behind,omitempty" doc:"The outside values behind a value assigned in the laboratory."`
	Sessions int    `json:"sessions"`
}

// A MethodsControl is one control; texts as printed (‰).
type MethodsControl struct {
	Material  string `json:"material"`
	Scale     string `json:"scale"`
	Accepted  string `json:"accepted"`
	AcceptedU string `json:"accepted_u"`
	Found     string `json:"found"`
	SD        string `json:"sd" doc:"Between sessions; empty for one."`
	Deviation string `json:"difference"`
	Sessions  int    `json:"sessions"`
	Analyses  int    `json:"n"`
}

// PageForm chooses between JSON, page and text.
type PageForm struct {
	Format string `query:"format" enum:"json,html,text" doc:"The header Accept does the same."`
	format string
}

// Resolve settles the form.
func (p *PageForm) Resolve(ctx huma.Context) []error {
	if p.format = p.Format; p.format == "" {
		p.format = traceForms[accepted(ctx.Header("Accept"), "application/json", mediaHTML, mediaText)]
	}
	return nil
}

func (f *face) methodsText(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	PageForm
}) (*answer, error) {
	code, err := reportKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	facts, err := f.registry.ReportFacts(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	t := exchange.DescribeMethods(facts)
	switch in.format {
	case "html":
		var b bytes.Buffer
		if err := exchange.WriteMethodsPage(&b, "How report "+store.FormatCode(code)+" was measured", t); err != nil {
			return nil, err
		}
		return shownAnswer(mediaHTML, "", b.Bytes()), nil
	case "text":
		return shownAnswer(mediaText, "", []byte(t.Text())), nil
	}
	return jsonAnswer(MethodsText{append([]string{}, t.Paragraphs...),
		convert(t.Anchors, func(a exchange.AnchorRow) MethodsAnchor {
			return MethodsAnchor{a.Material, a.Lot, a.Scale, a.Value, a.U, a.Version, a.Source, a.Behind, a.Sessions}
		}),
		convert(t.Controls, func(c exchange.ControlRow) MethodsControl {
			return MethodsControl{c.Material, c.Scale, c.Accepted, c.AcceptedU, c.Found, c.SD, c.Deviation, c.Sessions, c.Analyses}
		})}, 200, nil)
}

// CalibrationChanges sets two versions of a calibration against each other.
type CalibrationChanges struct {
	Code       string              `json:"code"`
	From       int                 `json:"from"`
	To         int                 `json:"to"`
	Reason     string              `json:"reason,omitempty" doc:"Why the later version was made."`
	Changes    []CalibrationChange `json:"changes" doc:"What they were made of that differs."`
	Parameters []ParameterShift    `json:"parameters"`
	Shifts     []ResultShift       `json:"shifts" doc:"What that moved, sample by sample."`
}

// A CalibrationChange is one thing that differs.
type CalibrationChange struct {
	What   string `json:"what" example:"anchor"`
	Name   string `json:"name,omitempty"`
	Before string `json:"before,omitempty"`
	After  string `json:"after,omitempty"`
	Text   string `json:"text" doc:"The same as a sentence."`
	Reason string `json:"reason,omitempty"`
}

// A ParameterShift is a parameter of the fit before and after.
type ParameterShift struct {
	Name   string   `json:"name"`
	Before *float64 `json:"before" doc:"null where that version has none of it."`
	After  *float64 `json:"after"`
}

// A ResultShift is a result before and after (‰).
type ResultShift struct {
	Subject string   `json:"subject"`
	Role    string   `json:"role"`
	Before  *float64 `json:"before" doc:"null where that version has none."`
	After   *float64 `json:"after"`
	BeforeU *float64 `json:"before_u"`
	AfterU  *float64 `json:"after_u"`
	Shift   *float64 `json:"shift" doc:"After less before."`
	Ratio   *float64 `json:"ratio" doc:"|shift|/u before."`
}

func (f *face) calibrationChanges(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	From int `query:"from" minimum:"1" doc:"Number of the earlier version; left out: the one before to."`
	To   int `query:"to" minimum:"1" doc:"Number of the later version; left out: the newest."`
}) (*plain[CalibrationChanges], error) {
	code, err := calibrationKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	c, err := f.registry.CalibrationChanges(ctx, actor, code, in.From, in.To)
	if err != nil {
		return nil, err
	}
	return &plain[CalibrationChanges]{CalibrationChanges{store.FormatCode(code), c.From.Ref.Version, c.To.Ref.Version, c.To.Reason,
		convert(c.Changes, func(x registry.CalibrationChange) CalibrationChange { return CalibrationChange(x) }),
		convert(c.Parameters, func(p registry.ParameterShift) ParameterShift {
			return ParameterShift{p.Name, finiteOrNil(p.Before), finiteOrNil(p.After)}
		}),
		convert(c.Shifts, func(s registry.ResultShift) ResultShift {
			return ResultShift{showSubject(s.Subject), s.Role, s.Before, s.After, s.BeforeU, s.AfterU, s.Shift, s.OverU}
		})}}, nil
}

// laterLink names, of a version that is not the newest, the one after it and
// where its record is read (RFC 5829).
func laterLink(key store.Key, number, newest int) string {
	record := recordAddress(key)
	if record == "" {
		return ""
	}
	link := fmt.Sprintf(`<%s>; rel="latest-version"`, record)
	if number < newest {
		link = fmt.Sprintf(`<%s>; rel="successor-version", `, address(store.Ref{Key: key, Version: number + 1})) + link
	}
	return link
}
