package rest

import (
	"context"
	"errors"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Session is a version of one uninterrupted series on one instrument.
type Session struct {
	Recorded
	Label       string       `json:"label,omitempty"`
	Instrument  string       `json:"instrument"`
	Method      string       `json:"method"`
	Operator    string       `json:"operator"`
	StartedAt   *time.Time   `json:"started_at" doc:"Decides which assigned values held."`
	EndedAt     *time.Time   `json:"ended_at"`
	Corrections []Correction `json:"corrections,omitempty"`
	Upload      string       `json:"upload,omitempty" doc:"SHA-256 of the bytes as they came."`
	UploadName  string       `json:"upload_name,omitempty"`
	Readings    int          `json:"readings" doc:"How many."`
}

func showSession(it registry.Item[store.Session]) Session {
	s := it.Value
	return Session{Recorded: recorded(it), Label: s.Label, Instrument: s.Instrument, Method: s.Method, Operator: s.Operator, StartedAt: timePointer(s.StartedAt),
		EndedAt: timePointer(s.EndedAt), Corrections: showCorrections(s.Corrections), Upload: hashText(s.Upload), UploadName: s.UploadName, Readings: s.Readings}
}

var sessionKind = kindOfRecord[store.Session, Session]{kind: store.KindSession, show: showSession, made: true,
	csv: table[Session]{columns("label", "instrument", "method", "operator", "started_at", "ended_at", "readings", "upload"), func(s Session) []string {
		return s.row(s.Label, s.Instrument, s.Method, s.Operator, clock(s.StartedAt), clock(s.EndedAt), whole(&s.Readings), s.Upload)
	}}}

// A NewSession opens a session.
type NewSession struct {
	Label       string       `json:"label,omitempty" maxLength:"200"`
	Instrument  string       `json:"instrument" maxLength:"40" example:"EA1"`
	Method      string       `json:"method" maxLength:"40" example:"EA-CN"`
	Operator    string       `json:"operator,omitempty" maxLength:"100" doc:"Left out: who asks."`
	StartedAt   *time.Time   `json:"started_at,omitempty" doc:"Needed only where the readings carry no time."`
	Corrections []Correction `json:"corrections,omitempty" maxItems:"50" doc:"Replace the method's declarations by name and quantity."`
}

func (n NewSession) request() registry.SessionRequest {
	return registry.SessionRequest{Label: n.Label, Instrument: n.Instrument, Method: n.Method, Operator: n.Operator, StartedAt: instantPointer(n.StartedAt),
		Corrections: convertOrNil(n.Corrections, func(c Correction) store.Correction { return store.Correction(c) })}
}

func (f *face) addSession(ctx context.Context, actor registry.Actor, in *struct{ Body NewSession }) (*one[Session], error) {
	it, err := f.registry.AddSession(ctx, actor, in.Body.request())
	if err != nil {
		return nil, err
	}
	s := showSession(it)
	return &one[Session]{ETag: quoteTag(it.Tag()), Location: "/v1/sessions/" + s.Code, Body: s}, nil
}

// An Exclusion is one act on a session's readings.
type Exclusion struct {
	Number     int        `json:"number" doc:"Of the act, from 1."`
	Act        string     `json:"act" enum:"exclude,readmit"`
	Readings   []int      `json:"readings" doc:"Numbers of the readings."`
	Cause      string     `json:"cause"`
	Reason     string     `json:"reason"`
	RecordedAt *time.Time `json:"recorded_at"`
	RecordedBy string     `json:"recorded_by"`
	Hash       string     `json:"hash"`
}

func showExclusion(it registry.Item[store.Exclusion]) Exclusion {
	at := it.RecordedAt.Time()
	return Exclusion{it.Ref.Version, it.Value.Act, append([]int{}, it.Value.Readings...), it.Value.Cause, it.Reason, &at, it.RecordedBy, it.Hash.String()}
}

var exclusionTable = table[Exclusion]{[]string{"number", "act", "readings", "cause", "reason", "recorded_at", "recorded_by", "hash"}, func(x Exclusion) []string {
	return []string{whole(&x.Number), x.Act, spaced(convert(x.Readings, func(n int) string { return whole(&n) })), x.Cause, x.Reason, clock(x.RecordedAt), x.RecordedBy, x.Hash}
}}

// exclusionActs reads all acts of exclusion in a session, of which a session has few.
func (f *face) exclusionActs(ctx context.Context, actor registry.Actor, session string) ([]registry.Item[store.Exclusion], error) {
	if _, err := registry.One[store.Session](ctx, f.registry, actor, store.KindSession, session, 0, store.Moment{}); err != nil {
		return nil, err
	}
	var acts []registry.Item[store.Exclusion]
	for {
		page, err := registry.Versions[store.Exclusion](ctx, f.registry, actor, store.KindExclusion, session, len(acts), registry.MaxPage)
		if len(acts) == 0 && registry.MeaningOf(err) == registry.NotFound {
			return nil, nil
		}
		if err != nil {
			return nil, err
		}
		if acts = append(acts, page...); len(page) < registry.MaxPage {
			return acts, nil
		}
	}
}

// Exclusions are all acts on a session's readings, and what follows from them.
type Exclusions struct {
	Items    []Exclusion `json:"items" doc:"The acts, in order."`
	Excluded []int       `json:"excluded" doc:"Numbers of the readings that are left out now."`
}

func excludedNow(acts []registry.Item[store.Exclusion]) (list []int, set map[int]bool) {
	set = map[int]bool{}
	for _, x := range acts {
		for _, n := range x.Value.Readings {
			if x.Value.Act == "exclude" {
				set[n] = true
			} else {
				delete(set, n)
			}
		}
	}
	return sortedNumbers(set), set
}

// ExclusionsParams are the parameters of a session's acts of exclusion.
type ExclusionsParams struct {
	CodeParam
	FormatParam
}

func (f *face) exclusions(ctx context.Context, actor registry.Actor, in *ExclusionsParams) (*answer, error) {
	session, err := sessionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	acts, err := f.exclusionActs(ctx, actor, session)
	if err != nil {
		return nil, err
	}
	if in.format == "csv" {
		return csvAnswer(f, convert(acts, showExclusion), exclusionTable), nil
	}
	return jsonAnswer(exclusionsBody(acts), 200, map[string]string{"ETag": quoteTag(registry.Tag(len(acts), 0))})
}

func exclusionsBody(acts []registry.Item[store.Exclusion]) Exclusions {
	list, _ := excludedNow(acts)
	return Exclusions{Items: convert(acts, showExclusion), Excluded: list}
}

// A NewExclusion leaves readings out of fits, or lets them in again.
type NewExclusion struct {
	Act      string `json:"act" enum:"exclude,readmit"`
	Readings []int  `json:"readings" minItems:"1" maxItems:"10000"`
	Cause    string `json:"cause" enum:"leak,size,overlap,yield,wrong position,contamination,instrument,weighing,other"`
	Reason   string `json:"reason" minLength:"1" maxLength:"4000" doc:"Why, in a sentence."`
}

func (f *face) exclude(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body NewExclusion
}) (*one[Exclusions], error) {
	session, err := sessionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	acts, err := f.exclusionActs(ctx, actor, session)
	if err != nil {
		return nil, err
	}
	if in.IfMatch == "" {
		return nil, errUnconditional("the session's exclusions")
	}
	present := registry.Tag(len(acts), 0)
	if !in.matches(present) {
		return nil, registry.Refuse(registry.Stale, "session %s has %d acts of exclusion by now (ETag %q); If-Match says %s: read them again",
			store.FormatCode(session), len(acts), present, in.IfMatch)
	}
	x := store.Exclusion{Act: in.Body.Act, Readings: in.Body.Readings, Cause: in.Body.Cause}
	if _, err := f.registry.Exclude(ctx, actor, session, x, registry.Edit{After: len(acts), Reason: in.Body.Reason}); err != nil {
		return nil, err
	}
	if acts, err = f.exclusionActs(ctx, actor, session); err != nil {
		return nil, err
	}
	return &one[Exclusions]{ETag: quoteTag(registry.Tag(len(acts), 0)), Body: exclusionsBody(acts)}, nil
}

// An Outcome says what became of a session for one quantity.
type Outcome struct {
	Recorded
	OutcomeBody
}

// An OutcomeBody is the statement itself.
type OutcomeBody struct {
	Quantity string `json:"quantity" maxLength:"20" example:"d13C"`
	Outcome  string `json:"outcome" enum:"accepted,in part,rejected"`
	From     int    `json:"from,omitempty" minimum:"1" doc:"First reading accepted, where that is a part."`
	To       int    `json:"to,omitempty" minimum:"1"`
	Cause    string `json:"cause,omitempty" enum:"leak,size,overlap,yield,wrong position,contamination,instrument,weighing,other"`
}

func showOutcome(it registry.Item[store.Outcome]) Outcome {
	o := it.Value
	return Outcome{recorded(it), OutcomeBody{o.Quantity, o.Outcome, o.From, o.To, o.Cause}}
}

var outcomeKind = kindOfRecord[store.Outcome, Outcome]{kind: store.KindOutcome, show: showOutcome,
	csv: table[Outcome]{columns("quantity", "outcome", "from", "to", "cause"), func(o Outcome) []string {
		from, to := "", ""
		if o.From > 0 {
			from, to = whole(&o.From), whole(&o.To)
		}
		return o.row(o.Quantity, o.Outcome, from, to, o.Cause)
	}}}

// outcomes reads the newest outcome of each quantity of a session's method.
func (f *face) outcomes(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	FormatParam
}) (*answer, error) {
	session, err := sessionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	s, err := registry.One[store.Session](ctx, f.registry, actor, store.KindSession, session, 0, store.Moment{})
	if err != nil {
		return nil, err
	}
	method, err := sessionMethod(ctx, f, actor, s)
	if err != nil {
		return nil, err
	}
	var items []Outcome
	done := map[string]bool{}
	for _, q := range method.Value.Quantities {
		if done[q.Quantity] {
			continue
		}
		done[q.Quantity] = true
		it, err := registry.One[store.Outcome](ctx, f.registry, actor, store.KindOutcome, registry.OutcomeCode(session, q.Quantity), 0, store.Moment{})
		if registry.MeaningOf(err) == registry.NotFound {
			continue
		}
		if err != nil {
			return nil, err
		}
		items = append(items, showOutcome(it))
	}
	if in.format == "csv" {
		return csvAnswer(f, items, outcomeKind.csv), nil
	}
	return jsonAnswer(List[Outcome]{Items: append([]Outcome{}, items...)}, 200, nil)
}

// sessionMethod reads the version of the method that a session pinned.
func sessionMethod(ctx context.Context, f *face, actor registry.Actor, s registry.Item[store.Session]) (registry.Item[store.Method], error) {
	for _, in := range s.Inputs {
		if in.Part == "method" {
			return registry.One[store.Method](ctx, f.registry, actor, store.KindMethod, in.Code, in.Ref.Version, store.Moment{})
		}
	}
	return registry.Item[store.Method]{}, errors.New("session names no method")
}

// OutcomeParams name the outcome of a session for a quantity.
type OutcomeParams struct {
	CodeParam
	Quantity string `path:"quantity" maxLength:"20" doc:"The quantity." example:"d13C"`
}

func (p OutcomeParams) code() (string, error) {
	session, err := sessionKind.code(p.Code)
	return registry.OutcomeCode(session, p.Quantity), err
}

func (f *face) outcome(ctx context.Context, actor registry.Actor, in *struct {
	OutcomeParams
	MomentParams
}) (*one[Outcome], error) {
	code, err := in.code()
	if err != nil {
		return nil, err
	}
	return oneOf(ctx, f, actor, outcomeKind, code, 0, in.moment())
}

func (f *face) outcomeVersions(ctx context.Context, actor registry.Actor, in *struct {
	OutcomeParams
	ListParams
}) (*answer, error) {
	code, err := in.code()
	if err != nil {
		return nil, err
	}
	return answerList(ctx, f, &in.ListParams, versionPages[store.Outcome](f, actor, store.KindOutcome, code), showOutcome, outcomeKind.csv)
}

func (f *face) outcomeVersion(ctx context.Context, actor registry.Actor, in *struct {
	OutcomeParams
	Number int `path:"version" minimum:"1" doc:"Number of the version." example:"1"`
}) (*one[Outcome], error) {
	code, err := in.code()
	if err != nil {
		return nil, err
	}
	return oneOf(ctx, f, actor, outcomeKind, code, in.Number, store.Moment{})
}

// A NewOutcome states an outcome; where one is stated already it is a further
// version, and asks for a reason and for If-Match.
type NewOutcome struct {
	OutcomeBody
	Reason string `json:"reason,omitempty" maxLength:"4000"`
}

func (f *face) stateOutcome(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	FurtherMatch
	Body NewOutcome
}) (*one[Outcome], error) {
	session, err := sessionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	b := in.Body
	if _, err := registry.One[store.Session](ctx, f.registry, actor, store.KindSession, session, 0, store.Moment{}); err != nil {
		return nil, err
	}
	edit := registry.Edit{Reason: b.Reason}
	if edit.After, err = firstOrSeen[store.Outcome](ctx, f, actor, store.KindOutcome, registry.OutcomeCode(session, b.Quantity), in.IfMatch); err != nil {
		return nil, err
	}
	it, err := f.registry.StateOutcome(ctx, actor, session, store.Outcome{Quantity: b.Quantity, Outcome: b.Outcome, From: b.From, To: b.To, Cause: b.Cause}, edit)
	if err != nil {
		return nil, err
	}
	o := showOutcome(it)
	return &one[Outcome]{ETag: quoteTag(it.Tag()), Location: "/v1/sessions/" + store.FormatCode(session) + "/outcomes/" + o.Quantity, Body: o}, nil
}
