package rest

import (
	"context"
	"strconv"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// An InstrumentLine is the line that an instrument had in one session:
// raw = intercept + slope·true, at the session's reference time and size.
type InstrumentLine struct {
	Method      string     `json:"method"`
	Scale       string     `json:"scale"`
	Measurand   string     `json:"measurand"`
	Session     string     `json:"session"`
	At          *time.Time `json:"at" doc:"Start of the session."`
	Calibration string     `json:"calibration"`
	Version     int        `json:"version"`
	Approved    bool       `json:"approved" doc:"Whether this version is in force."`
	Slope       float64    `json:"slope"`
	USlope      float64    `json:"u_slope"`
	Intercept   float64    `json:"intercept" doc:"‰"`
	UIntercept  float64    `json:"u_intercept" doc:"‰"`
	Drift       *float64   `json:"drift" doc:"‰ an hour; null without a linear drift."`
	UDrift      *float64   `json:"u_drift" doc:"‰ an hour"`
	RecordedAt  time.Time  `json:"recorded_at"`
}

func showLine(r store.LineRow) InstrumentLine {
	return InstrumentLine{Method: r.Method, Scale: r.Scale, Measurand: r.Measurand, Session: store.FormatCode(r.Session), At: timePointer(r.At),
		Calibration: store.FormatCode(r.Calibration), Version: r.Version, Approved: r.Approved, Slope: r.Slope, USlope: r.USlope,
		Intercept: r.Intercept, UIntercept: r.UIntercept, Drift: r.Drift, UDrift: r.UDrift, RecordedAt: r.RecordedAt.Time()}
}

var lineTable = table[InstrumentLine]{[]string{"method", "scale", "measurand", "session", "at", "calibration", "version", "approved", "slope", "u_slope",
	"intercept", "u_intercept", "drift", "u_drift", "recorded_at"}, func(l InstrumentLine) []string {
	return []string{l.Method, l.Scale, l.Measurand, l.Session, clock(l.At), l.Calibration, strconv.Itoa(l.Version), strconv.FormatBool(l.Approved),
		number(l.Slope), number(l.USlope), number(l.Intercept), number(l.UIntercept), optional(l.Drift), optional(l.UDrift), clock(&l.RecordedAt)}
}}

// lines lists an instrument's lines, in the order of method, scale, measurand and time.
func (f *face) lines(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Method    string `query:"method" maxLength:"40" doc:"Of this method; left out: of all."`
	Scale     string `query:"scale" maxLength:"40" doc:"On this scale; left out: on all."`
	Measurand string `query:"measurand" maxLength:"60" doc:"Of this measurand; left out: of all."`
	All       bool   `query:"all" doc:"Versions that are not in force too."`
	ListParams
}) (*answer, error) {
	q := store.LineQuery{Instrument: in.Code, Method: in.Method, Scale: in.Scale, Measurand: in.Measurand, Approved: !in.All}
	read := func(ctx context.Context, page registry.Query) (registry.Page[store.LineRow], error) {
		return f.registry.Lines(ctx, actor, q, page)
	}
	return answerList(ctx, f, &in.ListParams, read, showLine, lineTable)
}
