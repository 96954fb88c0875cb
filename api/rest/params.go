package rest

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// MomentParams are the two times of a read.
type MomentParams struct {
	AsOf    time.Time `query:"as_of" required:"false" doc:"What had been said by then: only what was recorded up to this time counts. Left out: now."`
	ValidAt time.Time `query:"valid_at" required:"false" doc:"What held then: statements that begin to hold later do not count. Left out: now."`
}

// AsOfParam is the time up to which what was said counts.
type AsOfParam struct {
	AsOf time.Time `query:"as_of" required:"false" doc:"What had been said by then. Left out: now."`
}

func (p MomentParams) moment() store.Moment {
	return store.Moment{AsOf: instantOf(p.AsOf), ValidAt: instantOf(p.ValidAt)}
}

func instantOf(t time.Time) *store.Instant {
	if t.IsZero() {
		return nil
	}
	i := store.InstantOf(t)
	return &i
}

func instantPointer(t *time.Time) *store.Instant {
	if t == nil {
		return nil
	}
	return instantOf(*t)
}

func timePointer(i *store.Instant) *time.Time {
	if i == nil {
		return nil
	}
	t := i.Time()
	return &t
}

// CodeParam is the code of a record that people name themselves.
type CodeParam struct {
	Code string `path:"code" maxLength:"100" doc:"The record's code." example:"USGS40"`
}

// GeneratedParam is a code made by the registry, in any writing.
type GeneratedParam struct {
	Code string `path:"code" maxLength:"40" doc:"The record's code, ten symbols; case, spaces and hyphens do not matter." example:"S1234-5678T"`
}

// parse reads the code of a kind. Mistyped is not the same as not found: the
// check symbol tells, and the refusal says so.
func (p GeneratedParam) parse(kind store.Kind) (string, error) {
	return parseCode("path.code", p.Code, kind)
}

func parseCode(place, text string, kind store.Kind) (string, error) {
	code, err := store.ParseCode(text)
	var fault *store.CodeError
	if errors.As(err, &fault) {
		expected := fault.Expected
		if fault.Mistyped {
			expected = "a code whose check symbol fits; this one is mistyped: " + fault.Expected
		}
		return "", complain("this is not a code", place, text, expected)
	}
	if err != nil {
		return "", err
	}
	if letterKind(code[0]) != kind {
		return "", complain("this is the code of something else", place, fmt.Sprintf("%s, the code of a %s", store.FormatCode(code), letterName(code[0])), "the code of a "+kindName(kind))
	}
	return code, nil
}

// kindReported stands for reported deltas, which are no records of their own.
const kindReported store.Kind = "reported"

func letterKind(letter byte) store.Kind {
	if letter == store.LetterReported {
		return kindReported
	}
	return store.CodeKind(letter)
}

func letterName(letter byte) string {
	if letter == store.LetterJob {
		return "job"
	}
	return kindName(letterKind(letter))
}

func kindName(kind store.Kind) string {
	switch kind {
	case kindReported:
		return "reported delta"
	case store.KindFinal:
		return "final value"
	case store.KindFactor:
		return "H3 factor"
	}
	return string(kind)
}

func complain(message, place, found, expected string) error {
	c := registry.Complaint{Place: place, Found: strconv.Quote(found), Expected: expected}
	if found == "" {
		c.Found = "nothing"
	}
	return registry.Complain(message, []registry.Complaint{c})
}

// showCode writes a record's code for people: 5-5 where the registry made it.
// Codes that people chose stay as they are, whatever their length.
func showCode(kind store.Kind, code string) string {
	switch kind {
	case store.KindFinal, store.KindCalibration, store.KindSession, store.KindReport, store.KindUnit, store.KindSample,
		store.KindAssignment, store.KindRevision, store.KindToken, store.KindExclusion, kindReported:
		return store.FormatCode(code)
	case store.KindStudy:
		if campaign, rest, ok := strings.Cut(code, "/"); ok {
			return store.FormatCode(campaign) + "/" + rest
		}
	case store.KindOutcome:
		session, quantity, ok := strings.Cut(code, "/")
		if ok {
			return store.FormatCode(session) + "/" + quantity
		}
	case store.KindDecision:
		subject, rest, ok := strings.Cut(code, "/")
		dot := strings.LastIndexByte(rest, '.')
		if ok && dot > 0 {
			return subject + "/" + showCode(store.Kind(subject), rest[:dot]) + rest[dot:]
		}
	}
	return code
}

// MatchParam is the condition of a write that somebody else may have been
// first with. Its absence is refused by the handler, with 428, not by the
// schema.
type MatchParam struct {
	IfMatch string `header:"If-Match" doc:"The ETag of the version that the author has seen. Required: somebody else may have been first." example:"\"1-0\""`
}

// errUnconditional asks for If-Match.
func errUnconditional(what string) error {
	return registry.Refuse(registry.Unconditional, "read %s first and send its ETag in the header If-Match: somebody else may have been first", what)
}

// tags reads the strong entity tags of If-Match; weak ones never match (RFC
// 9110, 13.1.1). any is true for "*".
func (p MatchParam) tags() (tags []string, any bool) {
	for _, part := range strings.Split(p.IfMatch, ",") {
		part = strings.TrimSpace(part)
		if part == "*" {
			return nil, true
		}
		if len(part) >= 2 && part[0] == '"' && part[len(part)-1] == '"' {
			tags = append(tags, part[1:len(part)-1])
		}
	}
	return tags, false
}

// seen resolves If-Match against a record: the number of the version that the
// author saw and the number of decisions on it, having checked that both are so
// still. What happens between this look and the write is for the registry to
// refuse, which it does with the same meaning.
func seen[T store.Body](ctx context.Context, f *face, actor registry.Actor, kind store.Kind, code string, p MatchParam) (registry.Item[T], error) {
	var none registry.Item[T]
	newest, err := newestItem[T](ctx, f, actor, kind, code)
	if err != nil {
		return none, err
	}
	if p.IfMatch == "" {
		return none, errUnconditional("the version")
	}
	tags, any := p.tags()
	if any {
		return newest, nil
	}
	for _, tag := range tags {
		number, _, _ := strings.Cut(tag, "-")
		n, err := strconv.Atoi(number)
		if err != nil || n < 1 || n > newest.Ref.Version {
			continue
		}
		it := newest
		if n != newest.Ref.Version {
			if it, err = registry.One[T](ctx, f.registry, actor, kind, code, n, store.Moment{}); err != nil {
				return none, err
			}
		}
		if it.Tag() == tag {
			return it, nil
		}
	}
	return none, registry.Refuse(registry.Stale, "%s %s is at version %d with %d decisions by now (ETag %q); If-Match says %s: read it again",
		kindName(kind), showCode(kind, code), newest.Ref.Version, len(newest.Decisions), newest.Tag(), p.IfMatch)
}

// newestItem reads the newest version of a record, drafts included.
func newestItem[T store.Body](ctx context.Context, f *face, actor registry.Actor, kind store.Kind, code string) (registry.Item[T], error) {
	var newest registry.Item[T]
	for after := 0; ; {
		page, err := registry.Versions[T](ctx, f.registry, actor, kind, code, after, registry.MaxPage)
		if err != nil {
			return newest, err
		}
		if len(page) > 0 {
			newest = page[len(page)-1]
			after = newest.Ref.Version
		}
		if len(page) < registry.MaxPage {
			return newest, nil
		}
	}
}

// quoteTag writes an ETag header.
func quoteTag(tag string) string { return `"` + tag + `"` }

// matches compares one entity tag with If-Match.
func (p MatchParam) matches(tag string) bool {
	tags, any := p.tags()
	return any || slices.Contains(tags, tag)
}

// FurtherMatch is the condition of a statement that may be the first or a
// further one: the first needs none.
type FurtherMatch struct {
	IfMatch string `header:"If-Match" doc:"The ETag of the version stated before; required where there is one." example:"\"1-0\""`
}

// firstOrSeen is the number of the version that the author has seen, 0 where
// there is no version yet.
func firstOrSeen[T store.Body](ctx context.Context, f *face, actor registry.Actor, kind store.Kind, code, ifMatch string) (int, error) {
	before, err := seen[T](ctx, f, actor, kind, code, MatchParam{ifMatch})
	switch {
	case registry.MeaningOf(err) == registry.NotFound || err == nil && before.Laboratory != actor.Laboratory:
		if ifMatch != "" {
			return 0, registry.Refuse(registry.Stale, "there is no %s %s yet, and If-Match says %s", kindName(kind), showCode(kind, code), ifMatch)
		}
		return 0, nil
	case err != nil:
		return 0, err
	}
	return before.Ref.Version, nil
}
