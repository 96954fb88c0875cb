package registry

import (
	"context"
	"fmt"
	"slices"

	"deltamoor/store"
)

// resting follows shifts from calibrations to final values and reported deltas
// by the packed rows of what rests on each: as many rows as calibrations, not
// as deltas.
type resting struct {
	// moved tells the states that are not simply approved; nil where there are too
	// many of them to be read once, and each batch reads its own.
	moved store.Moved
	// parted are final values and lines of several calibrations, until all of these,
	// or the end of the walk, have come.
	parted map[partedKey]*parted
	// passed are reports counted as left out.
	passed map[store.Ref]bool
}

type partedKey struct {
	kind    store.Kind
	code    string
	version int
}

type parted struct {
	share store.RestingShare
	shift shift
	seen  int
	state store.State
	scale string
}

// maxMoved bounds how many states a preview keeps.
const maxMoved = 50_000

// restOn passes the shifts of a batch of calibrations on.
func (im *impact) restOn(ctx context.Context, calibrations []store.Ref) error {
	calibrations = slices.DeleteFunc(slices.Clone(calibrations), func(ref store.Ref) bool {
		s, ok := im.calibrations.find(ref)
		return !ok || !s.moved
	})
	if len(calibrations) == 0 {
		return nil
	}
	moved := im.resting.moved
	if moved == nil {
		var err error
		if moved, err = im.v.MovedOn(ctx, im.laboratory, calibrations); err != nil {
			return err
		}
	}
	var of store.Ref
	var lines []shift
	var scale string
	return im.v.RestingOn(ctx, im.laboratory, calibrations, func(calibration store.Ref, s *store.RestingShare) error {
		if s.Position >= im.body.Position {
			return nil
		}
		if calibration != of {
			found, _ := im.calibrations.find(calibration)
			of, lines, scale = calibration, found.lines, im.blocks[calibration].Scale
		}
		if s.Line < 0 || s.Line >= len(lines) {
			return fmt.Errorf("%s rests on line %d of %s, which has %d", s.Final, s.Line, calibration, len(lines))
		}
		ref := s.Final
		if s.Kind == store.KindReport {
			ref = s.Report
		}
		state := moved.State(ref)
		line := lines[s.Line]
		if s.Members == 1 {
			if !line.moved {
				return nil
			}
			return im.rests(s, weighted(line, s.Weight), state, scale)
		}
		key := partedKey{s.Kind, s.Code, ref.Version}
		p := im.parted[key]
		if p == nil {
			if im.parted == nil {
				im.parted = map[partedKey]*parted{}
			}
			p = &parted{share: *s, state: state, scale: scale}
			im.parted[key] = p
		}
		p.shift.add(line, s.Weight, im.parts)
		if p.seen++; p.seen < s.Members {
			return nil
		}
		delete(im.parted, key)
		return im.restsParted(p)
	})
}

// restingAtLast hands out what rests on calibrations of which some do not move.
func (im *impact) restingAtLast() error {
	left := make([]*parted, 0, len(im.parted))
	for _, p := range im.parted {
		left = append(left, p)
	}
	slices.SortFunc(left, func(a, b *parted) int {
		if a.share.Position != b.share.Position {
			return int(a.share.Position - b.share.Position)
		}
		return a.share.ReportLine - b.share.ReportLine
	})
	im.parted = nil
	for _, p := range left {
		if err := im.restsParted(p); err != nil {
			return err
		}
	}
	return nil
}

func (im *impact) restsParted(p *parted) error {
	if !p.shift.moved {
		return nil
	}
	return im.rests(&p.share, p.shift, p.state, p.scale)
}

func weighted(s shift, weight float64) shift {
	if weight == 1 {
		return s
	}
	var out shift
	out.add(s, weight, len(s.parts))
	return out
}

// rests hands out a final value or a reported delta that moves.
func (im *impact) rests(s *store.RestingShare, by shift, state store.State, scale string) error {
	out := Affected{Ref: s.Final, Position: s.Position, State: state}
	counts := &im.summary.Finals
	if s.Kind == store.KindReport {
		if state != store.Approved {
			if !im.passed[s.Report] {
				if im.passed == nil {
					im.passed = map[store.Ref]bool{}
				}
				im.passed[s.Report] = true
				im.summary.Passed++
			}
			return nil
		}
		out.Ref, out.Line, out.Reported = s.Report, s.ReportLine, s.Code
		counts = &im.summary.Reported
	} else {
		if out.Scale = scale; s.Scale != "" {
			out.Scale = s.Scale
		}
		if !im.counts(state) {
			im.summary.Passed++
			return nil
		}
	}
	out.fill(s.Value, s.StandardUncertainty, by)
	counts.count(out)
	return im.emit(out)
}
