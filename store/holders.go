package store

import (
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
)

// What nearly every request asks first, each as one statement: who a token
// stands for, and what a code on paper stands for. One statement sees one state
// of the registry, so these need no transaction around them.

// single is a view for one statement.
func (s *Store) single() *View {
	return &View{store: s, q: &queries{engine: s.engine, tx: s.read}, now: InstantOf(s.now())}
}

// A Holder is who a token stands for at this moment: the newest versions of the
// token and of its person, by the hashes of their bodies.
type Holder struct {
	Laboratory    string
	Code          string // of the token
	Person        string // whose row the token's secret names
	Token, Holder Hash
	// Secret is the SHA-256 of the token's secret, Size that of the ledger when it
	// was looked up.
	Secret Hash
	Size   int64
}

// The newest version is found along the key of history, not by a derived row:
// what lets people in rests on nothing that could be behind.
const (
	newestOf = `(SELECT max(n.version) FROM versions n WHERE n.laboratory = t.laboratory AND n.kind = `

	selectHolder = `SELECT t.code, t.person, tv.hash, pv.hash, h.size FROM tokens t CROSS JOIN ledger_heads h CROSS JOIN versions tv CROSS JOIN versions pv
		WHERE t.laboratory = $1 AND t.hash = $2 AND h.laboratory = t.laboratory
			AND tv.laboratory = t.laboratory AND tv.kind = 'token' AND tv.code = t.code AND tv.version = ` + newestOf + `'token' AND n.code = t.code)
			AND pv.laboratory = t.laboratory AND pv.kind = 'person' AND pv.code = t.person AND pv.version = ` + newestOf + `'person' AND n.code = t.person)`
	selectNewestBody = `SELECT version, body FROM versions
		WHERE laboratory = $1 AND kind = $2 AND code = $3 AND hash = $4 ORDER BY version DESC LIMIT 1`
)

// Holder finds by the SHA-256 of a token's secret who it stands for, or ErrNotFound.
func (s *Store) Holder(ctx context.Context, laboratory string, secret Hash) (Holder, error) {
	h := Holder{Laboratory: laboratory, Secret: secret}
	var token, person []byte
	err := s.single().q.one(s.engine.brief(ctx), selectHolder, []any{laboratory, secret[:]}, &h.Code, &h.Person, &token, &person, &h.Size)
	if errors.Is(err, sql.ErrNoRows) {
		return Holder{}, notFound("token in %s", laboratory)
	}
	if err != nil {
		return Holder{}, s.unavailable(fmt.Errorf("read a token of %s: %w", laboratory, err))
	}
	copy(h.Token[:], token)
	copy(h.Holder[:], person)
	return h, nil
}

// HolderBodies reads what a holder's two versions say.
func (s *Store) HolderBodies(ctx context.Context, h Holder) (Token, Person, error) {
	var token Token
	var person Person
	ref := Ref{Key: Key{Laboratory: h.Laboratory, Kind: KindToken, Code: h.Code}, Hash: h.Token}
	body, err := s.bodyOf(ctx, &ref)
	if err == nil {
		token, err = decodeValue[Token](ref, body)
	}
	if err == nil && token.Person != h.Person {
		// The working row names the person whose version is read; the token says whose it is.
		err = &CorruptError{Ref: ref, cause: fmt.Errorf("a token of %q that is kept as one of %q", token.Person, h.Person)}
	}
	if err != nil {
		return token, person, err
	}
	ref = Ref{Key: Key{Laboratory: h.Laboratory, Kind: KindPerson, Code: h.Person}, Hash: h.Holder}
	if body, err = s.bodyOf(ctx, &ref); err == nil {
		person, err = decodeValue[Person](ref, body)
	}
	return token, person, err
}

func (s *Store) bodyOf(ctx context.Context, ref *Ref) (sql.Null[string], error) {
	var body sql.Null[string]
	err := s.single().q.one(s.engine.brief(ctx), selectNewestBody, []any{ref.Laboratory, string(ref.Kind), ref.Code, ref.Hash[:]}, &ref.Version, &body)
	if errors.Is(err, sql.ErrNoRows) {
		return body, notFound("%s", ref.Key)
	}
	if err != nil {
		return body, s.unavailable(fmt.Errorf("read %s: %w", ref.Key, err))
	}
	return body, nil
}

// A ReportedLine is a reported delta with what a reader of it wants to know
// beside: the final value it states, what became of that, and whose sample it is.
type ReportedLine struct {
	Code, Laboratory, Report string
	Version, Line            int
	// Hash of the line's canonical bytes.
	Hash Hash
	// Final is the version of the final value that was reported.
	Final      Ref
	FinalValue Final
	// FinalState is the state of that version now; "" where one statement cannot
	// tell it, or the sample, and they have to be read one by one.
	FinalState State
	IssuedAt   Instant
	IssuedBy   string
	// Client and Label are those of the sample's newest version, which has SampleHash.
	Client, Label string
	SampleHash    Hash
}

// The state is told by the derived row of the final value where that is certain:
// for the version in force and the newest, and as long as no time is to come at
// which the row would be wrong. The sample is found by the edge of the final value
// that names it; it is NULL where there is none.
const (
	stateOfLine = `CASE WHEN c.until IS NOT NULL THEN '' WHEN c.in_force = r.final_version THEN c.held WHEN c.newest = r.final_version THEN c.state ELSE '' END`
	ofSample    = ` FROM edges e CROSS JOIN versions s WHERE e.laboratory = r.laboratory AND e.from_kind = 'final' AND e.from_code = r.final
			AND e.from_version = r.final_version AND e.part = 'sample' AND e.to_laboratory = r.laboratory AND e.to_kind = 'sample'
			AND s.laboratory = r.laboratory AND s.kind = 'sample' AND s.code = e.to_code ORDER BY s.version DESC LIMIT 1)`

	selectLineNow = `SELECT r.hash, ` + stateOfLine + `, (SELECT s.hash` + ofSample + `,
		CASE WHEN EXISTS (SELECT 1 FROM edges e WHERE e.laboratory = r.laboratory AND e.to_laboratory = r.laboratory AND e.to_kind = 'report' AND e.to_code = r.report AND e.part = 'amends') THEN 1 ELSE 0 END
		FROM ledger_heads h CROSS JOIN tokens t CROSS JOIN reported r CROSS JOIN currents c
		WHERE h.laboratory = $2 AND h.size = $4 AND t.laboratory = h.laboratory AND t.hash = $3
			AND r.code = $1 AND r.laboratory = h.laboratory AND c.laboratory = r.laboratory AND c.kind = 'final' AND c.code = r.final`
	selectReportedLine = `SELECT r.report, r.version, r.line, r.final, r.final_version, r.hash, i.recorded_at, i.recorded_by, f.hash, f.body,
		` + stateOfLine + `, (SELECT s.body` + ofSample + `, (SELECT s.hash` + ofSample + `
	FROM reported r CROSS JOIN versions i CROSS JOIN versions f CROSS JOIN currents c
	WHERE r.code = $1 AND r.laboratory = $2
		AND i.laboratory = r.laboratory AND i.kind = 'report' AND i.code = r.report AND i.version = r.version
		AND f.laboratory = r.laboratory AND f.kind = 'final' AND f.code = r.final AND f.version = r.final_version
		AND c.laboratory = r.laboratory AND c.kind = 'final' AND c.code = r.final`
)

// LineNow is what may change about a reported delta: what became of its final
// value, and what is said of the sample. With the hash of the line it says which
// line it is, and with that of the sample's newest version what that says.
type LineNow struct {
	Hash, Sample Hash
	// FinalState is "" where it cannot be told so.
	FinalState State
	// Amended tells that a report amends the one that it stands in.
	Amended bool
}

// LineNow asks it for a holder, if the holder's token still has its row and the
// ledger its size: nothing can have been said about the token since. Else, as for
// an unknown code, ErrNotFound.
func (s *Store) LineNow(ctx context.Context, h Holder, code string) (LineNow, error) {
	var out LineNow
	var line, sample []byte
	var amended int
	err := s.single().q.one(s.engine.brief(ctx), selectLineNow, []any{code, h.Laboratory, h.Secret[:], h.Size}, &line, &out.FinalState, &sample, &amended)
	if errors.Is(err, sql.ErrNoRows) {
		return LineNow{}, notFound("reported delta %s", FormatCode(code))
	}
	if err != nil {
		return LineNow{}, s.unavailable(fmt.Errorf("read reported delta %s: %w", FormatCode(code), err))
	}
	copy(out.Hash[:], line)
	copy(out.Sample[:], sample)
	out.Amended = amended != 0
	return out, nil
}

// ReportedLine returns a laboratory's reported delta by its code in stored form,
// or ErrNotFound.
func (s *Store) ReportedLine(ctx context.Context, laboratory, code string) (ReportedLine, error) {
	v := s.single()
	out := ReportedLine{Code: code, Laboratory: laboratory}
	out.Final.Laboratory, out.Final.Kind = laboratory, KindFinal
	var lineHash, finalHash, sampleHash []byte
	var body, sampleBody sql.Null[string]
	err := v.q.one(s.engine.brief(ctx), selectReportedLine, []any{code, laboratory}, &out.Report, &out.Version, &out.Line,
		&out.Final.Code, &out.Final.Version, &lineHash, &out.IssuedAt, &out.IssuedBy, &finalHash, &body, &out.FinalState, &sampleBody, &sampleHash)
	if errors.Is(err, sql.ErrNoRows) {
		return ReportedLine{}, notFound("reported delta %s", FormatCode(code))
	}
	if err != nil {
		return ReportedLine{}, s.unavailable(fmt.Errorf("read reported delta %s: %w", FormatCode(code), err))
	}
	copy(out.Hash[:], lineHash)
	copy(out.Final.Hash[:], finalHash)
	copy(out.SampleHash[:], sampleHash)
	if out.FinalValue, err = decodeValue[Final](out.Final, body); err != nil {
		return out, err
	}
	if !sampleBody.Valid { // named nowhere but in the value
		out.FinalState = ""
		return out, nil
	}
	sample, err := decodeValue[Sample](Ref{Key: Key{Laboratory: laboratory, Kind: KindSample, Code: out.FinalValue.Sample}}, sampleBody)
	out.Client, out.Label = sample.Client, sample.Label
	return out, err
}

// decodeValue decodes the value of a body that stands in its row, and nothing else of it.
func decodeValue[T Body](ref Ref, body sql.Null[string]) (T, error) {
	var e struct {
		Form  string `json:"form"`
		Value T      `json:"value"`
	}
	if !body.Valid {
		return e.Value, &CorruptError{Ref: ref, cause: errors.New("its body is kept apart")}
	}
	if err := json.Unmarshal([]byte(body.V), &e); err != nil {
		return e.Value, &CorruptError{Ref: ref, cause: err}
	}
	if want := e.Value.Form(); e.Form != want {
		return e.Value, &FormError{Ref: ref, Found: e.Form, Expected: want}
	}
	return e.Value, nil
}
