package store

import (
	"context"
	"crypto/sha256"
	"database/sql"
	"encoding/binary"
	"errors"
	"fmt"
	"strconv"

	"deltamoor/store/ledger"
)

// A Tx is one write: a View that also queues versions and adds rows. Everything
// is of one laboratory; what concerns another is referred to by hash.
type Tx struct {
	View
	laboratory string
	conn       *sql.Conn
	sql        *sql.Tx

	queue  []queued
	guards []func(context.Context, *View) error
	known  map[wanted]Hash // versions seen to exist
	at     Instant         // provisional time of the queue
	next   *Head           // the head once taken: size and time after this act

	sessions map[string]*sessionRows
	uploads  []uploadRow

	transactionID []byte
}

// queued is a version waiting for the head of the ledger.
type queued struct {
	raw   Raw // without time and position
	body  []byte
	after *int
}

// maxCode bounds a record's code, maxReason a reason, in bytes.
const (
	maxCode   = 200
	maxReason = 4000
)

// Laboratory is the one this transaction writes.
func (tx *Tx) Laboratory() string { return tx.laboratory }

// provisional is the time the queue would be recorded at if nobody else wrote.
func (tx *Tx) provisional(ctx context.Context) (Instant, error) {
	if tx.at == 0 {
		h, err := tx.Head(ctx, tx.laboratory)
		if err != nil {
			return 0, err
		}
		tx.at = max(tx.now, h.At+1)
	}
	return tx.at, nil
}

// queued returns a waiting version as a reader would see it.
func (tx *Tx) queued(ctx context.Context, q queued) (Raw, error) {
	raw := q.raw
	at, err := tx.provisional(ctx)
	raw.RecordedAt = at
	return raw, err
}

func (tx *Tx) newestQueued(key Key) *queued {
	for i := len(tx.queue) - 1; i >= 0; i-- {
		if tx.queue[i].raw.Key == key {
			return &tx.queue[i]
		}
	}
	return nil
}

const selectNewestHash = `SELECT version, hash FROM versions
	WHERE laboratory = $1 AND kind = $2 AND code = $3 AND recorded_at <= $4
	ORDER BY version DESC LIMIT 1`

// newest returns number and hash of the newest version of a record, 0 if none.
func (tx *Tx) newest(ctx context.Context, key Key) (int, Hash, error) {
	if q := tx.newestQueued(key); q != nil {
		return q.raw.Version, q.raw.Hash, nil
	}
	as, err := tx.asOf(ctx, key.Laboratory, Moment{})
	if err != nil {
		return 0, Hash{}, err
	}
	var version int
	var hash []byte
	err = tx.q.one(ctx, selectNewestHash, []any{key.Laboratory, key.Kind, key.Code, int64(as)}, &version, &hash)
	if errors.Is(err, sql.ErrNoRows) {
		return 0, Hash{}, nil
	}
	if err != nil {
		return 0, Hash{}, fmt.Errorf("read the newest version of %s: %w", key, err)
	}
	var h Hash
	copy(h[:], hash)
	return version, h, nil
}

// Append queues a version: it gets the next number of its record, and its body
// is made canonical and hashed now. It is recorded, with everything else queued,
// when the closure has returned. Its inputs must exist with the hashes given.
func (tx *Tx) Append(ctx context.Context, d Draft) (Ref, error) {
	key := Key{Laboratory: tx.laboratory, Kind: d.Kind, Code: d.Code}
	if err := checkDraft(key, d); err != nil {
		return Ref{}, err
	}
	newest, previous, err := tx.newest(ctx, key)
	if err != nil {
		return Ref{}, err
	}
	if d.After != nil && *d.After != newest {
		return Ref{}, &StaleError{Key: key, Found: newest, Expected: *d.After}
	}
	if err := tx.checkInputs(ctx, key, d.Inputs); err != nil {
		return Ref{}, err
	}
	body, hash, err := CanonicalBody(tx.laboratory, d, newest+1, previous)
	if err != nil {
		return Ref{}, err
	}
	raw := Raw{Ref: Ref{Key: key, Version: newest + 1, Hash: hash}, Position: -1}
	if err := decodeBody(&raw, body); err != nil {
		return Ref{}, err
	}
	tx.queue = append(tx.queue, queued{raw: raw, body: body, after: d.After})
	return raw.Ref, nil
}

// Guard queues a condition that must still be true at the moment of recording.
// It runs when no other writer can slip between, and sees the laboratory as it
// is just before this act, without the act itself. Its error ends the write.
func (tx *Tx) Guard(f func(context.Context, *View) error) { tx.guards = append(tx.guards, f) }

func checkDraft(key Key, d Draft) error {
	place := key.String()
	invalid := func(found, expected string) error {
		return &InvalidError{Place: place, Found: found, Expected: expected}
	}
	switch {
	case d.Value == nil:
		return invalid("no value", "a body")
	case d.Kind == "":
		return invalid("no kind", "a kind of record")
	case d.Code == "":
		return invalid("no code", "a code")
	case d.By == "":
		return invalid("nobody", "who records it")
	}
	for _, text := range []struct {
		name, text string
		limit      int
	}{{"kind", string(d.Kind), maxCode}, {"code", d.Code, maxCode}, {"by", d.By, maxCode}, {"reason", d.Reason, maxReason}} {
		if err := checkText(place+" "+text.name, text.text, text.limit); err != nil {
			return err
		}
	}
	seen := make(map[Input]bool, len(d.Inputs))
	for i, in := range d.Inputs {
		in := in
		in.Hash = Hash{}
		if in.Part == "" || in.Version < 1 {
			return invalid(fmt.Sprintf("input %d (%s) with part %q", i, in.Ref, in.Part), "a part and a version number")
		}
		seen[in] = true
	}
	if d.Kind != KindDecision {
		return nil
	}
	subject, version, err := DecisionSubject(key.Laboratory, d.Code)
	if err != nil {
		return err
	}
	if len(d.Inputs) != 1 || !seen[Input{Part: "subject", Ref: Ref{Key: subject, Version: version}}] {
		return invalid(fmt.Sprintf("%d inputs", len(d.Inputs)), fmt.Sprintf("one, the subject %s.%d", subject, version))
	}
	if !subject.Kind.Decided() {
		return invalid("a decision on a "+string(subject.Kind), "a kind that is decided on")
	}
	body, ok := d.Value.(Decision)
	if !ok {
		return invalid(fmt.Sprintf("%T", d.Value), "a Decision")
	}
	switch body.Act {
	case ActSubmitted, ActApproved, ActDeclined, ActWithdrawn:
		return nil
	}
	return invalid("act "+strconv.Quote(body.Act), "submitted, approved, declined or withdrawn")
}

// checkInputs refuses inputs that do not exist, or not with that hash.
func (tx *Tx) checkInputs(ctx context.Context, key Key, inputs []Input) error {
	var ask []wanted
	for _, in := range inputs {
		w := wanted{Key: in.Key, version: in.Version}
		if _, ok := tx.known[w]; !ok {
			ask = append(ask, w)
		}
	}
	if tx.known == nil {
		tx.known = make(map[wanted]Hash)
	}
	for _, q := range tx.queue {
		tx.known[wanted{Key: q.raw.Key, version: q.raw.Version}] = q.raw.Hash
	}
	if len(ask) > 0 {
		found, err := tx.hashesOf(ctx, ask)
		if err != nil {
			return err
		}
		for w, h := range found {
			tx.known[w] = h
		}
	}
	for i, in := range inputs {
		h, ok := tx.known[wanted{Key: in.Key, version: in.Version}]
		place := fmt.Sprintf("%s input %d (%s)", key, i, in.Ref)
		if !ok {
			return &InvalidError{Place: place, Found: "no such version", Expected: "a recorded version"}
		}
		if h != in.Hash {
			return &InvalidError{Place: place, Found: "hash " + in.Hash.String(), Expected: "hash " + h.String()}
		}
	}
	return nil
}

// maxClockLag is how far the clock may be behind the ledger's head.
const maxClockLag = 5 * 60 * 1_000_000 // µs

const (
	insertHead = `INSERT INTO ledger_heads (laboratory, size, recorded_at, checkpoints) VALUES ($1, 0, 0, 0)
		ON CONFLICT (laboratory) DO NOTHING`
	// takeHead is the queue of a laboratory's writers: whoever has updated the row
	// is next, and the others wait until it has committed.
	takeHead = `UPDATE ledger_heads SET size = size + $2,
			recorded_at = CASE WHEN $3 > recorded_at THEN $3 ELSE recorded_at + 1 END
		WHERE laboratory = $1 RETURNING size, recorded_at`
)

// run is everything of a write but the commit.
func (tx *Tx) run(ctx context.Context, f func(context.Context, *Tx) error) (Commit, error) {
	seen, err := tx.Head(ctx, tx.laboratory)
	if err != nil {
		return Commit{}, err
	}
	if err := f(ctx, tx); err != nil {
		return Commit{}, err
	}
	if err := tx.bindUploads(ctx); err != nil {
		return Commit{}, err
	}
	if err := tx.bindReadings(ctx); err != nil {
		return Commit{}, err
	}
	commit := Commit{Laboratory: tx.laboratory}
	if len(tx.queue) == 0 {
		return commit, tx.runGuards(ctx, seen)
	}
	if tx.transactionID, err = tx.store.transactionID(); err != nil {
		return Commit{}, err
	}

	// The head is taken last, so that a slow closure keeps nobody waiting.
	if seen.Size == 0 {
		if _, err := tx.q.exec(ctx, insertHead, tx.laboratory); err != nil {
			return Commit{}, fmt.Errorf("begin ledger %s: %w", tx.laboratory, err)
		}
	}
	count := int64(len(tx.queue))
	clock := InstantOf(tx.store.now())
	head := Head{Laboratory: tx.laboratory}
	if err := tx.q.one(ctx, takeHead, []any{tx.laboratory, count, int64(clock)}, &head.Size, &head.At); err != nil {
		return Commit{}, fmt.Errorf("take the head of ledger %s: %w", tx.laboratory, err)
	}
	if head.At-clock > maxClockLag {
		return Commit{}, &UnavailableError{Reason: fmt.Sprintf("clock is at %s, more than 5 minutes behind the ledger's last entry at %s", clock, head.At-1)}
	}
	first := head.Size - count
	if err := tx.runGuards(ctx, Head{Laboratory: tx.laboratory, Size: first, At: head.At - 1}); err != nil {
		return Commit{}, err
	}
	tx.next = &head
	if err := tx.record(ctx, first, head.At); err != nil {
		return Commit{}, err
	}
	commit.RecordedAt, commit.First, commit.Count = head.At, first, count
	return commit, nil
}

func (tx *Tx) runGuards(ctx context.Context, head Head) error {
	if len(tx.guards) == 0 {
		return nil
	}
	v := &View{store: tx.store, q: tx.q, now: tx.now, cut: true, heads: map[string]Head{tx.laboratory: head}}
	for _, g := range tx.guards {
		if err := g(ctx, v); err != nil {
			return err
		}
	}
	return nil
}

// transactionID is 16 random bytes and 16 that follow from them, so that an id
// changed by accident shows.
func (s *Store) transactionID() ([]byte, error) {
	id, err := s.random(16)
	if err != nil {
		return nil, err
	}
	return append(id, transactionCheck(id)...), nil
}

func transactionCheck(random []byte) []byte {
	sum := sha256.Sum256(random)
	return sum[:16]
}

var (
	entriesTable  = table{"entries", []string{"laboratory", "position", "entry", "transaction_id"}}
	nodesTable    = table{"tree_hashes", []string{"laboratory", "node", "hash"}}
	versionsTable = table{"versions", []string{"laboratory", "kind", "code", "version", "recorded_at", "recorded_by",
		"valid_from", "position", "form", "hash", "body"}}
)

// maxBody is the largest body kept in its row.
const maxBody = 256 << 10

// record writes entries, tree, versions and derived rows of the queue.
func (tx *Tx) record(ctx context.Context, first int64, at Instant) error {
	tree, err := ledger.OpenTree(first, tx.nodes(ctx, tx.laboratory))
	if err != nil {
		return fmt.Errorf("ledger %s: %w", tx.laboratory, err)
	}
	entries := make([][]any, 0, len(tx.queue))
	versions := make([][]any, 0, len(tx.queue))
	var nodes [][]any
	for i := range tx.queue {
		q := &tx.queue[i]
		q.raw.RecordedAt, q.raw.Position = at, first+int64(i)
		entry := entryOf(q.raw).Bytes()
		entries = append(entries, []any{tx.laboratory, q.raw.Position, string(entry), tx.transactionID})
		for _, n := range tree.Append(ledger.LeafHash(entry)) {
			nodes = append(nodes, []any{tx.laboratory, n.Index, n.Hash[:]})
		}
		body := any(string(q.body))
		if len(q.body) > maxBody {
			body = nil
			if err := tx.putContent(ctx, q.raw.Hash, q.body); err != nil {
				return fmt.Errorf("body of %s: %w", q.raw.Ref, err)
			}
		}
		versions = append(versions, []any{tx.laboratory, string(q.raw.Kind), q.raw.Code, q.raw.Version, int64(at), q.raw.RecordedBy,
			nullInstant(q.raw.ValidFrom), q.raw.Position, q.raw.Form, q.raw.Hash[:], body})
	}
	if err := tx.q.insert(ctx, versionsTable, versions, ""); err != nil {
		return err
	}
	if err := tx.q.insert(ctx, entriesTable, entries, ""); err != nil {
		return err
	}
	if err := tx.q.insert(ctx, nodesTable, nodes, ""); err != nil {
		return err
	}
	return tx.writeDerived(ctx)
}

// entryOf is the ledger entry of a recorded version.
func entryOf(raw Raw) ledger.Entry {
	return ledger.Entry{At: raw.RecordedAt.Time(), By: raw.RecordedBy, Code: raw.Code, Hash: raw.Hash,
		Kind: string(raw.Kind), Laboratory: raw.Laboratory, Version: raw.Version}
}

// conflict says who was first, after a unique key refused the transaction.
func (tx *Tx) conflict(ctx context.Context, cause error) error {
	refused := error(&ConflictError{Found: "a row with the same key", Expected: "a new one", cause: cause})
	err := tx.store.Read(ctx, func(ctx context.Context, v *View) error {
		for _, q := range tx.queue {
			newest, err := v.Newest(ctx, q.raw.Key)
			if errors.Is(err, ErrNotFound) {
				if other, err := v.sameCode(ctx, q.raw.Key); err == nil {
					refused = &ConflictError{Key: q.raw.Key, Found: "the code " + strconv.Quote(other), Expected: "a code unique without regard to case", cause: cause}
					return nil
				}
				continue
			}
			if err != nil {
				return err
			}
			if newest.Version < q.raw.Version {
				continue
			}
			if q.after != nil {
				refused = &StaleError{Key: q.raw.Key, Found: newest.Version, Expected: *q.after, Said: describe(newest)}
				return nil
			}
			refused = &ConflictError{Key: q.raw.Key, Found: describe(newest), Expected: fmt.Sprintf("version %d to be free", q.raw.Version), cause: cause}
			return nil
		}
		return nil
	})
	if err != nil {
		return errors.Join(refused, err)
	}
	return refused
}

// describe says what a version that was first says.
func describe(raw Raw) string {
	text := fmt.Sprintf("version %d by %s", raw.Version, raw.RecordedBy)
	if d, err := Decode[Decision](raw); raw.Kind == KindDecision && err == nil {
		text = fmt.Sprintf("version %d: %s by %s", raw.Version, d.Value.Act, raw.RecordedBy)
	}
	return text
}

const selectSameCode = `SELECT code FROM currents WHERE laboratory = $1 AND kind = $2 AND lower(code) = lower(cast($3 as text)) AND code <> $3`

func (v *View) sameCode(ctx context.Context, key Key) (string, error) {
	var code string
	err := v.q.one(ctx, selectSameCode, []any{key.Laboratory, key.Kind, key.Code}, &code)
	return code, err
}

// packFloats writes float64 as little-endian bytes.
func packFloats(values []float64) []byte {
	b := make([]byte, 0, 8*len(values))
	for _, f := range values {
		b = binary.LittleEndian.AppendUint64(b, floatBits(f))
	}
	return b
}
