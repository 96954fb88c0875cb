package registry

import (
	"context"
	"errors"
	"fmt"
	"slices"

	"deltamoor/calib"
	"deltamoor/store"
)

// A SessionRequest opens a session: what ran, by which procedure, who ran it.
type SessionRequest struct {
	Label      string
	Instrument string
	Method     string
	Operator   string // "" is the actor
	// StartedAt is needed only where the readings carry no time.
	StartedAt *store.Instant
	// Corrections replace the method's declarations by name and quantity.
	Corrections []store.Correction
}

// An ImportRequest brings the readings of a session: of an existing one
// (Session), or of a new one opened in the same act (New).
type ImportRequest struct {
	Session string
	New     *SessionRequest

	Name, MediaType string
	Bytes           []byte
	Table           ReadingTable

	// Preview answers as if done and stores nothing.
	Preview bool
}

// An ImportAnswer says what an import did, or would do.
type ImportAnswer struct {
	Session Item[store.Session]
	// Existed: the same bytes were imported before, into this session.
	Existed  bool
	Preview  bool
	Rows     int
	Readings []store.Reading
	Flags    []calib.Flag
	Encoding string
	Ignored  []string
}

// AddSession opens a session without readings.
func (r *Registry) AddSession(ctx context.Context, actor Actor, q SessionRequest) (Item[store.Session], error) {
	var code string
	err := r.write(ctx, actor, MayImport, func(ctx context.Context, tx *store.Tx) error {
		var err error
		if code, err = r.draw(ctx, &tx.View, actor.Laboratory, 'S'); err != nil {
			return err
		}
		_, err = openSession(ctx, tx, actor, q, code, func(*store.Session) {})
		return err
	})
	if err != nil {
		return Item[store.Session]{}, err
	}
	return reread[store.Session](ctx, r, actor, store.KindSession, code)
}

// openSession queues the first version of a session under a code drawn before;
// fill completes its body.
func openSession(ctx context.Context, tx *store.Tx, actor Actor, q SessionRequest, code string, fill func(*store.Session)) (store.Session, error) {
	var c complaints
	c.text("body.instrument", q.Instrument, 40)
	c.text("body.method", q.Method, 40)
	checkCorrections(&c, q.Corrections)
	if err := Complain("this session cannot be opened", c); err != nil {
		return store.Session{}, err
	}
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindInstrument, Code: q.Instrument}
	instrument, err := lookupIn(ctx, &tx.View, key, 0, store.Moment{})
	if err != nil {
		return store.Session{}, missing(err, key)
	}
	method, err := methodInForce(ctx, &tx.View, actor.Laboratory, q.Method, store.Moment{})
	if err != nil {
		return store.Session{}, err
	}
	body := store.Session{Label: q.Label, Instrument: q.Instrument, Method: q.Method, Operator: nameOr(q.Operator, actor.Person), StartedAt: q.StartedAt,
		Corrections: mergeCorrections(method.Value.Corrections, q.Corrections)}
	fill(&body)
	inputs := []store.Input{{Part: "instrument", Ref: instrument.Ref}, {Part: "method", Ref: method.Ref}}
	constants, err := pinConstants(ctx, &tx.View, actor.Laboratory, body)
	if err != nil {
		return body, err
	}
	_, err = tx.Append(ctx, store.Draft{Kind: store.KindSession, Code: code, By: actor.Person, Value: body, After: first, Inputs: append(inputs, constants...)})
	return body, err
}

// pinConstants names, as inputs of a session, the versions of the relations
// that its corrections used and that held when it started: another version
// later changes nothing about it.
func pinConstants(ctx context.Context, v *store.View, laboratory string, s store.Session) ([]store.Input, error) {
	var inputs []store.Input
	var c complaints
	for i, k := range s.Corrections {
		for j, code := range k.Relations {
			rel, err := relationAt(ctx, v, laboratory, code, 0, store.Moment{ValidAt: s.StartedAt})
			if MeaningOf(err) == NotFound {
				c.add(fmt.Sprintf("body.corrections[%d].relations[%d]", i, j), quote(code), "the code of an approved relation that held when the session started")
				continue
			}
			if err != nil {
				return nil, err
			}
			in := store.Input{Part: "constants", Ref: rel.Ref}
			if !slices.Contains(inputs, in) {
				inputs = append(inputs, in)
			}
		}
	}
	return inputs, Complain("this session cannot be opened", c)
}

// mergeCorrections lets a session's declarations replace its method's.
func mergeCorrections(method, session []store.Correction) []store.Correction {
	out := slices.Clone(method)
	for _, k := range session {
		i := slices.IndexFunc(out, func(m store.Correction) bool { return m.Name == k.Name && m.Quantity == k.Quantity })
		if i < 0 {
			out = append(out, k)
		} else {
			out[i] = k
		}
	}
	return out
}

// ImportMapping tells how files of a session, or of a method for a session to
// be opened, are read.
func (r *Registry) ImportMapping(ctx context.Context, actor Actor, session, method string) (store.Mapping, error) {
	var mapping store.Mapping
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var m store.Version[store.Method]
		if session != "" {
			s, err := newest[store.Session](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindSession, Code: session})
			if err != nil {
				return err
			}
			if m, err = sessionMethod(ctx, v, s.Version); err != nil {
				return err
			}
		} else {
			var err error
			if m, err = methodInForce(ctx, v, actor.Laboratory, method, store.Moment{}); err != nil {
				return err
			}
		}
		if m.Value.Mapping == nil {
			return Refuse(Invalid, "method %s has no import mapping: state a version of it with one, or send the readings as JSON", m.Code)
		}
		mapping = *m.Value.Mapping
		return nil
	})
	return mapping, err
}

func sessionMethod(ctx context.Context, v *store.View, s store.Version[store.Session]) (store.Version[store.Method], error) {
	ref, err := inputOf(s.Inputs, "method")
	if err != nil {
		return store.Version[store.Method]{}, fmt.Errorf("%s: %w", s.Ref, err)
	}
	return decodeVersion[store.Method](ctx, v, ref)
}

func inputOf(inputs []store.Input, part string) (store.Ref, error) {
	for _, in := range inputs {
		if in.Part == part {
			return in.Ref, nil
		}
	}
	return store.Ref{}, fmt.Errorf("no input %q", part)
}

// errPreview ends a write whose answer is wanted and whose effect is not.
var errPreview = errors.New("preview")

// ImportReadings brings a table of readings into a session. All rows land or
// none; the bytes are kept under their hash. The same bytes for the same
// instrument and method answer with the session that exists.
func (r *Registry) ImportReadings(ctx context.Context, actor Actor, q ImportRequest) (ImportAnswer, error) {
	var out ImportAnswer
	if len(q.Bytes) > MaxUpload {
		return out, Refuse(TooLarge, "%d bytes: an import takes at most %d", len(q.Bytes), MaxUpload)
	}
	if len(q.Table.Readings) > MaxReadings {
		return out, Refuse(TooLarge, "%d readings: an import takes at most %d", len(q.Table.Readings), MaxReadings)
	}
	if len(q.Table.Readings) == 0 {
		return out, Refuse(Invalid, "there are no readings in %s", nameOr(q.Name, "the request"))
	}
	err := r.write(ctx, actor, MayImport, func(ctx context.Context, tx *store.Tx) error {
		out = ImportAnswer{Preview: q.Preview, Rows: q.Table.Rows, Encoding: q.Table.Encoding, Ignored: q.Table.Ignored}
		if err := r.importOnce(ctx, tx, actor, q, &out); err != nil {
			return err
		}
		if q.Preview {
			return errPreview
		}
		return nil
	})
	if q.Preview && errors.Is(err, errPreview) {
		return out, nil
	}
	if err != nil || out.Existed {
		return out, err
	}
	out.Session, err = reread[store.Session](ctx, r, actor, store.KindSession, out.Session.Code)
	return out, err
}

func (r *Registry) importOnce(ctx context.Context, tx *store.Tx, actor Actor, q ImportRequest, out *ImportAnswer) error {
	v := &tx.View
	hash, _, err := tx.PutUpload(ctx, q.Name, q.MediaType, q.Bytes)
	if err != nil {
		return err
	}
	var session store.Version[store.Session]
	var existing []store.Key // sessions of the same bytes
	if q.New == nil {
		it, err := newest[store.Session](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindSession, Code: q.Session})
		if err != nil {
			return err
		}
		if it.Value.Readings > 0 {
			if it.Value.Upload != nil && *it.Value.Upload == hash {
				out.Existed, out.Session = true, it
				return nil
			}
			return Refuse(Conflict, "session %s has its %d readings from %s already; another file is another session",
				store.FormatCode(it.Code), it.Value.Readings, nameOr(it.Value.UploadName, "an import"))
		}
		session = it.Version
	} else {
		if existing, err = v.Resolve(ctx, actor.Laboratory, store.KindSession, hash.String()); err != nil {
			return err
		}
		for _, key := range existing {
			it, err := newest[store.Session](ctx, v, key)
			if err != nil {
				return err
			}
			if it.Value.Instrument == q.New.Instrument && it.Value.Method == q.New.Method {
				out.Existed, out.Session = true, it
				return nil
			}
		}
	}

	var method store.Version[store.Method]
	if q.New == nil {
		method, err = sessionMethod(ctx, v, session)
	} else {
		method, err = methodInForce(ctx, v, actor.Laboratory, q.New.Method, store.Moment{})
	}
	if err != nil {
		return err
	}
	readings, err := resolveReadings(ctx, v, actor.Laboratory, method.Value, q.Table)
	if err != nil {
		return err
	}
	started, ended := span(readings)
	fill := func(s *store.Session) {
		if started != nil {
			s.StartedAt, s.EndedAt = started, ended
		}
		s.Upload, s.UploadName = &hash, q.Name
		s.Readings, s.Blocks = len(readings), store.ReadingBlocks(readings)
	}
	given := session.Value.StartedAt
	if q.New != nil {
		given = q.New.StartedAt
	}
	if started == nil && given == nil {
		return Complain("when the session ran is not known", []Complaint{{Place: "body.started_at", Found: "nothing, and no reading has a time",
			Expected: "when the session started, since it decides which assigned values held"}})
	}

	code := session.Code
	if q.New != nil {
		if code, err = r.draw(ctx, v, actor.Laboratory, 'S'); err != nil {
			return err
		}
		if len(existing) == 0 {
			onlyOne(tx, store.KindSession, hash.String())
		}
		number(readings, code) // before the body: its blocks are hashes over lines that carry the code
		body, err := openSession(ctx, tx, actor, *q.New, code, fill)
		if err != nil {
			return err
		}
		out.Session = Item[store.Session]{State: store.Recorded}
		out.Session.Code, out.Session.Laboratory, out.Session.Kind, out.Session.Ref.Version = code, actor.Laboratory, store.KindSession, 1
		out.Session.Value = body
	} else {
		number(readings, code)
		body := session.Value
		fill(&body)
		after := session.Ref.Version
		if _, err := tx.Append(ctx, store.Draft{Kind: store.KindSession, Code: code, By: actor.Person, Reason: "readings imported from " + nameOr(q.Name, "a request"),
			Inputs: session.Inputs, Value: body, After: &after}); err != nil {
			return err
		}
		out.Session = Item[store.Session]{Version: session, State: store.Recorded}
		out.Session.Value, out.Session.Ref.Version = body, after+1
	}
	if err := tx.AppendReadings(ctx, readings); err != nil {
		return err
	}
	out.Readings = readings
	out.Flags = seatingFlags(readings, method.Value)
	overlap, err := overlapFlags(ctx, v, actor.Laboratory, out.Session.Code, out.Session.Value)
	out.Flags = append(out.Flags, overlap...)
	if err != nil {
		return err
	}
	warnings, err := unitWarnings(ctx, v, actor.Laboratory, readings, out.Session.Value.StartedAt)
	out.Flags = append(out.Flags, warnings...)
	return err
}

func number(readings []store.Reading, session string) {
	for i := range readings {
		readings[i].Session, readings[i].Number = session, i+1
	}
}

func nameOr(name, other string) string {
	if name == "" {
		return other
	}
	return name
}

func span(readings []store.Reading) (first, last *store.Instant) {
	for _, rd := range readings {
		if rd.At == nil {
			continue
		}
		if first == nil || *rd.At < *first {
			first = rd.At
		}
		if last == nil || *rd.At > *last {
			last = rd.At
		}
	}
	return first, last
}

// ReadingsPage reads up to limit readings of a session behind a number.
func (r *Registry) ReadingsPage(ctx context.Context, actor Actor, session string, after, limit int) ([]store.Reading, error) {
	var page []store.Reading
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindSession, Code: session}
		if _, err := v.Newest(ctx, key); err != nil {
			return missing(err, key)
		}
		var err error
		page, err = v.ReadingsPage(ctx, actor.Laboratory, session, after, Query{Limit: limit}.limit())
		return err
	})
	return page, err
}

// Readings streams the readings of a session by number.
func (r *Registry) Readings(ctx context.Context, actor Actor, session string, fn func(store.Reading) error) error {
	return r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindSession, Code: session}
		if _, err := v.Newest(ctx, key); err != nil {
			return missing(err, key)
		}
		return v.Readings(ctx, actor.Laboratory, session, fn)
	})
}
