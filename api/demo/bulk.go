package demo

import (
	"context"
	"fmt"
	"io"
	"slices"
	"time"

	"deltamoor/store"
)

// A BulkSize is how much Bulk writes.
type BulkSize struct {
	// Calibrations, each with a session and a report of its own.
	Calibrations int
	// Deltas reported of each calibration; 0 means 50.
	Deltas int
	// Progress is called now and then; nil is silent.
	Progress func(done, total int)
}

// Bulk copies one reported chain of a laboratory that Build made: calibrations
// that rest on the same assigned values, each with final values and an issued
// report, straight into the store. Volume measures every number from readings and
// takes hours at the volume of a large laboratory; this is for measuring how
// reads, traces and dry runs grow. Values are spread at random. The copies keep
// what the ledger, the edges and the derived rows need, but have no readings, so
// a recomputation of them would differ.
func Bulk(ctx context.Context, p *Place, s *Summary, size BulkSize, seed uint64) error {
	if size.Deltas == 0 {
		size.Deltas = 50
	}
	if size.Calibrations < 0 || size.Deltas < 0 || len(s.Reports) == 0 || len(s.Reports[0].Lines) == 0 {
		return fmt.Errorf("bulk of %d calibrations with %d deltas: expected 0 or more, and a laboratory with a report", size.Calibrations, size.Deltas)
	}
	b := &bulk{lab: s.Laboratory, by: s.Analyst.Person, size: size, place: p, codes: stream(seed, "bulk codes")}
	if err := p.Store.Read(ctx, func(ctx context.Context, v *store.View) error { return b.load(ctx, v, s) }); err != nil {
		return fmt.Errorf("bulk: %w", err)
	}
	random := newBuilder(p.Registry, p.Clock, seed)
	draw := random.draw("bulk")
	for i := range size.Calibrations {
		values := make([]float64, size.Deltas)
		for k := range values {
			values[k] = 8 * (draw.Float64() - 0.5)
		}
		p.Clock.Advance(time.Hour)
		if err := b.chain(ctx, values); err != nil {
			return fmt.Errorf("bulk: chain %d of %d: %w", i+1, size.Calibrations, err)
		}
		if size.Progress != nil && i%100 == 99 {
			size.Progress(i+1, size.Calibrations)
		}
	}
	return nil
}

type bulk struct {
	lab, by string
	size    BulkSize
	place   *Place
	codes   io.Reader

	session     store.Version[store.Session]
	calibration store.Version[store.Calibration]
	final       store.Version[store.Final]
	sample      store.Input
	result      store.Result
}

// load reads the chain that is copied.
func (b *bulk) load(ctx context.Context, v *store.View, s *Summary) error {
	raw, err := v.Version(ctx, s.Reports[0].Lines[0].Final.Key, s.Reports[0].Lines[0].Final.Version)
	if err != nil {
		return err
	}
	if b.final, err = store.Decode[store.Final](raw); err != nil {
		return err
	}
	for _, in := range b.final.Inputs {
		if in.Part == "sample" {
			b.sample = in
		}
	}
	member := b.final.Inputs[b.final.Value.Members[0].Input]
	if raw, err = v.Version(ctx, member.Key, member.Ref.Version); err != nil {
		return err
	}
	if b.calibration, err = store.Decode[store.Calibration](raw); err != nil {
		return err
	}
	b.result = b.calibration.Value.Results[b.final.Value.Members[0].Line]
	b.result.Sources = b.result.Sources[:min(12, len(b.result.Sources))]
	for _, in := range b.calibration.Inputs {
		if in.Part == "session" {
			if raw, err = v.Version(ctx, in.Key, in.Ref.Version); err != nil {
				return err
			}
		}
	}
	b.session, err = store.Decode[store.Session](raw)
	return err
}

// chain writes one act: session, calibration, final values, report, and their approvals.
func (b *bulk) chain(ctx context.Context, shifts []float64) error {
	codes := make([]string, 0, 3+2*len(shifts))
	letters := []byte{store.LetterSession, store.LetterCalibration, store.LetterReport}
	for range shifts {
		letters = append(letters, store.LetterFinal, store.LetterReported)
	}
	for _, letter := range letters {
		code, err := store.NewCode(letter, b.codes)
		if err != nil {
			return err
		}
		codes = append(codes, code)
	}
	started := store.InstantOf(b.place.Clock.Now())
	_, err := b.place.Store.Write(ctx, b.lab, func(ctx context.Context, tx *store.Tx) error {
		approve := func(ref store.Ref) error {
			_, err := tx.Append(ctx, store.Draft{Kind: store.KindDecision, Code: store.DecisionCode(ref), By: b.by,
				Inputs: []store.Input{{Part: "subject", Ref: ref}}, Value: store.Decision{Act: store.ActApproved}})
			return err
		}
		session := b.session.Value
		session.StartedAt, session.EndedAt, session.Upload, session.Readings, session.Blocks = &started, &started, nil, 0, nil
		sessionRef, err := tx.Append(ctx, store.Draft{Kind: store.KindSession, Code: codes[0], By: b.by, Inputs: b.session.Inputs, Value: session})
		if err != nil {
			return err
		}
		c := b.calibration.Value
		c.Session, c.StartedAt, c.Readings, c.Flags = codes[0], &started, c.Readings[:min(30, len(c.Readings))], nil
		c.Results = make([]store.Result, len(shifts))
		for i, shift := range shifts {
			c.Results[i] = b.result
			c.Results[i].Value += shift
		}
		inputs := slices.Clone(b.calibration.Inputs)
		inputs = slices.DeleteFunc(inputs, func(in store.Input) bool { return in.Part == "exclusion" })
		for i := range inputs {
			if inputs[i].Part == "session" {
				inputs[i].Ref = sessionRef
			}
		}
		calibration, err := tx.Append(ctx, store.Draft{Kind: store.KindCalibration, Code: codes[1], By: b.by, Inputs: inputs, Value: c})
		if err != nil {
			return err
		}
		if err := approve(calibration); err != nil {
			return err
		}
		report := store.Report{Client: "client 01", Title: "Stable isotopes"}
		var lines []store.Input
		for i, shift := range shifts {
			f := b.final.Value
			f.Value += shift
			f.Members = []store.FinalMember{{Input: 1, Line: i, Weight: 1}}
			in := []store.Input{b.sample, {Part: "member", Ref: calibration}}
			ref, err := tx.Append(ctx, store.Draft{Kind: store.KindFinal, Code: codes[3+2*i], By: b.by, Inputs: in, Value: f})
			if err != nil {
				return err
			}
			if err := approve(ref); err != nil {
				return err
			}
			line := store.NewReportLine(codes[4+2*i], codes[2], i, store.Version[store.Final]{Ref: ref, Value: f})
			hash, err := store.ReportLineHash(line)
			if err != nil {
				return err
			}
			lines = append(lines, store.Input{Part: "line", Ref: ref})
			report.Lines = append(report.Lines, store.ReportHash{Code: line.Code, Hash: hash})
		}
		issued, err := tx.Append(ctx, store.Draft{Kind: store.KindReport, Code: codes[2], By: b.by, Inputs: lines, Value: report})
		if err != nil {
			return err
		}
		return approve(issued)
	})
	return err
}
