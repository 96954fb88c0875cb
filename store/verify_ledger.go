package store

import (
	"bytes"
	"context"
	"crypto/sha256"
	"database/sql"
	"encoding/hex"
	"fmt"
	"strconv"

	"deltamoor/store/ledger"
)

// A versionRow is a row of versions as it is stored, not yet believed.
type versionRow struct {
	raw       Raw // what the columns say
	body      *string
	form      string
	by        string
	validFrom *Instant
	entryHash Hash // what the ledger says of the body; zero where it says nothing
}

func (r versionRow) key() string { return r.raw.Ref.String() }

type entryRow struct {
	text        string
	transaction []byte
}

// A ledgerBatch is a run of positions: entries, the versions that claim them,
// and the nodes of the tree they complete.
type ledgerBatch struct {
	entries map[int64]entryRow
	rows    []versionRow // by position
	byPlace map[int64]int
	nodes   map[int64][]byte
}

const (
	selectEntryRows = `SELECT position, entry, transaction_id FROM entries
		WHERE laboratory = $1 AND position >= $2 AND position < $3 ORDER BY position`
	selectVersionRows = `SELECT ` + versionColumns + `, v.form, v.recorded_by, v.valid_from FROM versions v
		WHERE v.laboratory = $1 AND v.position >= $2 AND v.position < $3 ORDER BY v.position`
	selectNodeRows = `SELECT node, hash FROM tree_hashes
		WHERE laboratory = $1 AND node >= $2 AND node < $3 ORDER BY node`
)

func (v *View) ledgerBatch(ctx context.Context, laboratory string, from, to int64) (ledgerBatch, error) {
	b := ledgerBatch{entries: make(map[int64]entryRow), byPlace: make(map[int64]int), nodes: make(map[int64][]byte)}
	err := v.q.each(ctx, selectEntryRows, []any{laboratory, from, to}, func(scan func(...any) error) error {
		var position int64
		var e entryRow
		err := scan(&position, &e.text, &e.transaction)
		b.entries[position] = e
		return err
	})
	if err != nil {
		return b, fmt.Errorf("read entries %d to %d: %w", from, to-1, err)
	}
	err = v.q.each(ctx, selectVersionRows, []any{laboratory, from, to}, func(scan func(...any) error) error {
		var r versionRow
		var valid sql.Null[int64]
		var err error
		r.raw, r.body, err = scanVersion(scan, &r.form, &r.by, &valid)
		r.validFrom = instantOrNil(valid)
		b.byPlace[r.raw.Position] = len(b.rows)
		b.rows = append(b.rows, r)
		return err
	})
	if err != nil {
		return b, fmt.Errorf("read versions at %d to %d: %w", from, to-1, err)
	}
	err = v.q.each(ctx, selectNodeRows, []any{laboratory, ledger.NodeCount(from), ledger.NodeCount(to)}, func(scan func(...any) error) error {
		var node int64
		var hash []byte
		err := scan(&node, &hash)
		b.nodes[node] = hash
		return err
	})
	if err != nil {
		return b, fmt.Errorf("read nodes of %d to %d: %w", from, to-1, err)
	}
	return b, nil
}

// entryOrder remembers what the next entry must agree with.
type entryOrder struct {
	at          Instant
	transaction []byte
}

// entry checks one position: the entry, the row it binds, and the tree.
// Three things tell the leaf's hash: the entry's bytes, an entry made from the
// version's row, and the stored node. Where they differ, two against one say
// which is wrong, and the tree goes on with what the two say.
func (c *checker) entry(position int64, b *ledgerBatch, order *entryOrder) {
	place := c.laboratory + " position " + strconv.FormatInt(position, 10)
	e, hasEntry := b.entries[position]
	i, hasRow := b.byPlace[position]
	stored, hasNode := b.nodes[ledger.LeafIndex(position)]

	var byEntry, byRow, byNode ledger.Hash
	var entry ledger.Entry
	var parseErr error
	if hasEntry {
		byEntry = ledger.LeafHash([]byte(e.text))
		entry, parseErr = ledger.ParseEntry([]byte(e.text))
	}
	if hasRow {
		row := b.rows[i].raw
		row.RecordedBy = b.rows[i].by
		byRow = ledger.LeafHash(entryOf(row).Bytes())
		if hasEntry && parseErr == nil {
			b.rows[i].entryHash = entry.Hash
		}
	}
	if hasNode {
		copy(byNode[:], stored)
	}
	leaf := byEntry
	switch {
	case hasEntry && hasRow && byEntry == byRow:
	case hasEntry && byEntry == byNode:
		if !hasRow {
			c.find(position, "versions", entryKey(entry), "no row", "the version the ledger binds")
		} else {
			c.find(position, "versions", b.rows[i].key(), describeRow(b.rows[i]), "what the ledger binds: "+e.text)
		}
	case hasRow && byRow == byNode:
		leaf = byRow
		found := "no row"
		if hasEntry {
			found = e.text
		}
		row := b.rows[i].raw
		row.RecordedBy = b.rows[i].by
		c.find(position, "entries", place, found, string(entryOf(row).Bytes()))
	default:
		if !hasEntry && hasRow {
			leaf = byRow
		}
		found := "no row"
		if hasEntry {
			found = e.text
		}
		c.find(position, "entries", place, found, "an entry that fits the version and the tree")
		if hasRow {
			c.find(position, "versions", b.rows[i].key(), describeRow(b.rows[i]), "a version that fits the entry and the tree")
		} else if hasEntry && parseErr == nil {
			c.find(position, "versions", entryKey(entry), "no row", "the version the ledger binds")
		}
	}
	for _, n := range c.tree.Append(leaf) {
		found, ok := b.nodes[n.Index]
		key := c.laboratory + " node " + strconv.FormatInt(n.Index, 10)
		if !ok {
			c.find(position, "tree_hashes", key, "no row", n.Hash.String())
		} else if !bytes.Equal(found, n.Hash[:]) {
			c.find(position, "tree_hashes", key, hex.EncodeToString(found), hex.EncodeToString(n.Hash[:]))
		}
	}
	if hasEntry {
		c.order(position, place, e, entry, parseErr, order)
	}
}

// order checks what runs along the ledger: times never fall, and grow from act to act.
func (c *checker) order(position int64, place string, e entryRow, entry ledger.Entry, parseErr error, order *entryOrder) {
	if len(e.transaction) != 32 || !bytes.Equal(transactionCheck(e.transaction[:16]), e.transaction[16:]) {
		c.find(position, "entries", place, "transaction id "+hex.EncodeToString(e.transaction), "an id that agrees with its own check")
	}
	if parseErr != nil {
		c.find(position, "entries", place, parseErr.Error(), "a ledger entry")
		return
	}
	at := InstantOf(entry.At)
	same := bytes.Equal(e.transaction, order.transaction)
	switch {
	case same && at != order.at:
		c.find(position, "entries", place, "recorded at "+at.String(), "the time of its act, "+order.at.String())
	case !same && at <= order.at:
		c.find(position, "entries", place, "recorded at "+at.String(), "later than "+order.at.String())
	}
	order.at, order.transaction = at, e.transaction
}

func entryKey(e ledger.Entry) string {
	return Ref{Key: Key{Laboratory: e.Laboratory, Kind: Kind(e.Kind), Code: e.Code}, Version: e.Version}.String()
}

func describeRow(r versionRow) string {
	row := r.raw
	row.RecordedBy = r.by
	return string(entryOf(row).Bytes())
}

// versions checks a batch of versions: bodies, what they rest on, and the rows
// derived from them.
func (c *checker) versions(ctx context.Context, rows []versionRow) error {
	return c.store.Read(ctx, func(ctx context.Context, v *View) error {
		v.tolerant = true
		raws := make([]Raw, 0, len(rows))
		for _, r := range rows {
			raw, ok, err := c.body(ctx, v, r)
			if err != nil {
				return err
			}
			if ok {
				raws = append(raws, raw)
			}
		}
		if err := c.inputs(ctx, v, raws); err != nil {
			return err
		}
		if err := c.derived(ctx, v, raws); err != nil {
			return err
		}
		if err := c.haveCurrents(ctx, v, rows); err != nil {
			return err
		}
		for _, raw := range raws {
			if err := c.bulk(ctx, v, raw); err != nil {
				return err
			}
			if c.options.Visit == nil {
				continue
			}
			err := c.options.Visit(ctx, raw)
			if f, ok := err.(*Finding); ok {
				c.add(*f)
			} else if err != nil {
				return fmt.Errorf("visit %s: %w", raw.Ref, err)
			}
		}
		return nil
	})
}

// body checks a row's body against its hash and its columns against the body.
func (c *checker) body(ctx context.Context, v *View, r versionRow) (Raw, bool, error) {
	position, key := r.raw.Position, r.key()
	var text []byte
	if r.body != nil {
		text = []byte(*r.body)
	} else {
		c.keptApart(r.raw.Hash)
		ok, err := c.content(ctx, v, position, r.raw.Hash, -1)
		if err != nil || !ok {
			return Raw{}, false, err
		}
		if text, err = v.contentBytes(ctx, r.raw.Laboratory, r.raw.Hash); err != nil {
			return Raw{}, false, err
		}
	}
	if found := Hash(sha256.Sum256(text)); found != r.raw.Hash {
		c.find(position, "versions", key, "a body with hash "+found.String(), "a body with hash "+r.raw.Hash.String())
		return Raw{}, false, nil
	}
	raw := r.raw
	e, err := decodeEnvelope(&raw, text)
	if err != nil {
		c.find(position, "versions", key, err.Error(), "a body")
		return Raw{}, false, nil
	}
	intact := true
	compare := func(column, found, expected string) {
		if found != expected {
			intact = false
			c.find(position, "versions", key, column+" "+strconv.Quote(found), strconv.Quote(expected)+" as in the body")
		}
	}
	compare("form", r.form, raw.Form)
	compare("recorded_by", r.by, raw.RecordedBy)
	compare("valid_from", fmt.Sprint(nullInstant(r.validFrom)), fmt.Sprint(nullInstant(raw.ValidFrom)))
	// The body names its own record; the kind stands in the entry alone.
	compare("laboratory", r.raw.Laboratory, e.Laboratory)
	compare("code", r.raw.Code, e.Code)
	compare("version", strconv.Itoa(r.raw.Version), strconv.Itoa(e.Version))
	return raw, intact, nil
}

// inputs checks that what versions rest on exists with the hash they name, and
// that each version continues the one before.
func (c *checker) inputs(ctx context.Context, v *View, raws []Raw) error {
	var ask []wanted
	seen := make(map[wanted]bool)
	want := func(w wanted) {
		if !seen[w] {
			seen[w] = true
			ask = append(ask, w)
		}
	}
	for _, raw := range raws {
		for _, in := range raw.Inputs {
			want(wanted{Key: in.Key, version: in.Version})
		}
		if raw.Version > 1 {
			want(wanted{Key: raw.Key, version: raw.Version - 1})
		}
	}
	hashes, err := v.hashesOf(ctx, ask)
	if err != nil {
		return err
	}
	for _, raw := range raws {
		for i, in := range raw.Inputs {
			h, ok := hashes[wanted{Key: in.Key, version: in.Version}]
			c.compareHash(raw, fmt.Sprintf("input %d (%s)", i, in.Ref), in.Hash, h, ok)
		}
		switch {
		case raw.Version > 1:
			h, ok := hashes[wanted{Key: raw.Key, version: raw.Version - 1}]
			c.compareHash(raw, "the version before", raw.Previous, h, ok)
		case raw.Previous != (Hash{}):
			c.find(raw.Position, "versions", raw.Ref.String(), "a version before the first", "none")
		}
	}
	return nil
}

func (c *checker) compareHash(raw Raw, what string, named, stored Hash, exists bool) {
	switch {
	case !exists:
		c.find(raw.Position, "versions", raw.Ref.String(), what+" does not exist", "it with hash "+named.String())
	case named != stored:
		c.find(raw.Position, "versions", raw.Ref.String(), what+" with hash "+stored.String(), "hash "+named.String())
	}
}
