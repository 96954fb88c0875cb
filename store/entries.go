package store

import (
	"bytes"
	"context"
	"database/sql"
	"errors"
	"fmt"

	"deltamoor/store/ledger"
)

// nodesPerStatement bounds one read of tree nodes; a proof needs at most 63.
const nodesPerStatement = 64

const selectNodes = `SELECT node, hash FROM tree_hashes WHERE laboratory = $1 AND node IN (`

// nodeReader reads a laboratory's tree within a transaction.
type nodeReader struct {
	ctx        context.Context
	q          *queries
	laboratory string
}

func (v *View) nodes(ctx context.Context, laboratory string) nodeReader {
	return nodeReader{ctx: ctx, q: v.q, laboratory: laboratory}
}

// TreeHashReader reads the stored nodes of a laboratory's tree, for proofs. It
// is good for as long as the view is.
func (v *View) TreeHashReader(ctx context.Context, laboratory string) ledger.HashReader {
	return v.nodes(ctx, laboratory)
}

// ReadHashes implements tlog.HashReader.
func (r nodeReader) ReadHashes(indexes []int64) ([]ledger.Hash, error) {
	place := make(map[int64][]int, len(indexes))
	for i, x := range indexes {
		place[x] = append(place[x], i)
	}
	hashes := make([]ledger.Hash, len(indexes))
	missing := len(place)
	for rest := indexes; len(rest) > 0; {
		n := min(len(rest), nodesPerStatement)
		args := []any{r.laboratory}
		for _, x := range rest[:n] {
			args = append(args, x)
		}
		err := r.q.each(r.ctx, selectNodes+list(2, n)+`)`, args, func(scan func(...any) error) error {
			var node int64
			var hash []byte
			if err := scan(&node, &hash); err != nil {
				return err
			}
			missing--
			for _, i := range place[node] {
				copy(hashes[i][:], hash)
			}
			return nil
		})
		if err != nil {
			return nil, fmt.Errorf("read nodes of ledger %s: %w", r.laboratory, err)
		}
		rest = rest[n:]
	}
	if missing != 0 {
		return nil, fmt.Errorf("read nodes of ledger %s: found %d of %d nodes", r.laboratory, len(place)-missing, len(place))
	}
	return hashes, nil
}

// An Entry is one entry of a laboratory's ledger: its position and canonical bytes.
type Entry struct {
	Position int64
	Bytes    []byte
}

const selectEntries = `SELECT position, entry FROM entries
	WHERE laboratory = $1 AND position >= $2 AND position < $3 ORDER BY position LIMIT $4`

// Entries returns up to limit entries of a laboratory's ledger from a position
// on, in order; limit 0 is DefaultLimit.
func (v *View) Entries(ctx context.Context, laboratory string, from int64, limit int) ([]Entry, error) {
	h, err := v.Head(ctx, laboratory)
	if err != nil {
		return nil, err
	}
	var all []Entry
	err = v.q.each(ctx, selectEntries, []any{laboratory, from, h.Size, pageLimit(limit)}, func(scan func(...any) error) error {
		var e Entry
		var text string
		err := scan(&e.Position, &text)
		e.Bytes = []byte(text)
		all = append(all, e)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read entries of ledger %s: %w", laboratory, err)
	}
	return all, nil
}

// Root returns the root of a laboratory's tree at a size, the current one if
// size is negative.
func (v *View) Root(ctx context.Context, laboratory string, size int64) (ledger.Hash, int64, error) {
	h, err := v.Head(ctx, laboratory)
	if err != nil {
		return ledger.Hash{}, 0, err
	}
	if size < 0 {
		size = h.Size
	}
	if size > h.Size {
		return ledger.Hash{}, 0, notFound("size %d of ledger %s, which has %d entries,", size, laboratory, h.Size)
	}
	root, err := ledger.Root(size, v.nodes(ctx, laboratory))
	return root, size, err
}

// A Checkpoint is a signed checkpoint as it is stored.
type Checkpoint struct {
	Size   int64
	Signer string
	Note   []byte
}

const selectCheckpoints = `SELECT size, signer, note FROM checkpoints
	WHERE laboratory = $1 AND size > $2 ORDER BY size, signer LIMIT $3`

// Checkpoints returns up to limit checkpoints of a laboratory with a size
// greater than after, smallest first; limit 0 is DefaultLimit.
func (v *View) Checkpoints(ctx context.Context, laboratory string, after int64, limit int) ([]Checkpoint, error) {
	return v.checkpoints(ctx, selectCheckpoints, laboratory, after, pageLimit(limit))
}

const selectLastCheckpoint = `SELECT size, signer, note FROM checkpoints
	WHERE laboratory = $1 ORDER BY size DESC, signer LIMIT 1`

// LastCheckpoint returns the newest checkpoint of a laboratory, or ErrNotFound.
func (v *View) LastCheckpoint(ctx context.Context, laboratory string) (Checkpoint, error) {
	all, err := v.checkpoints(ctx, selectLastCheckpoint, laboratory)
	if err != nil {
		return Checkpoint{}, err
	}
	if len(all) == 0 {
		return Checkpoint{}, notFound("checkpoint of ledger %s", laboratory)
	}
	return all[0], nil
}

func (v *View) checkpoints(ctx context.Context, statement, laboratory string, args ...any) ([]Checkpoint, error) {
	var all []Checkpoint
	err := v.q.each(ctx, statement, append([]any{laboratory}, args...), func(scan func(...any) error) error {
		var c Checkpoint
		var text string
		err := scan(&c.Size, &c.Signer, &text)
		c.Note = []byte(text)
		all = append(all, c)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read checkpoints of ledger %s: %w", laboratory, err)
	}
	return all, nil
}

const (
	insertCheckpoint = `INSERT INTO checkpoints (laboratory, size, signer, note) VALUES ($1, $2, $3, $4)
		ON CONFLICT (laboratory, size, signer) DO NOTHING`
	countCheckpoint = `UPDATE ledger_heads SET checkpoints = checkpoints + 1 WHERE laboratory = $1`
	// lockHead waits for whoever holds the head and then holds it.
	lockHead = `UPDATE ledger_heads SET size = size WHERE laboratory = $1 RETURNING size`
)

// AppendCheckpoint keeps a signed checkpoint of this laboratory's ledger. Its
// root must be the ledger's at that size; the same checkpoint again changes nothing.
func (tx *Tx) AppendCheckpoint(ctx context.Context, signed []byte, verifier string) error {
	c, err := ledger.Open(signed, verifier)
	if err != nil {
		return fmt.Errorf("keep checkpoint: %w", err)
	}
	root, _, err := tx.Root(ctx, tx.laboratory, c.Size)
	if err != nil {
		return fmt.Errorf("keep checkpoint: %w", err)
	}
	if root != c.Root {
		return &InvalidError{Place: fmt.Sprintf("checkpoint of ledger %s at size %d", tx.laboratory, c.Size), Found: "root " + c.Root.String(), Expected: "root " + root.String()}
	}
	n, err := tx.q.exec(ctx, insertCheckpoint, tx.laboratory, c.Size, c.Signer, string(signed))
	if err != nil {
		return fmt.Errorf("keep checkpoint: %w", err)
	}
	if n == 0 {
		return nil
	}
	// A ledger without entries may be signed too; then it has no head yet.
	if _, err := tx.q.exec(ctx, insertHead, tx.laboratory); err != nil {
		return fmt.Errorf("keep checkpoint: %w", err)
	}
	_, err = tx.q.exec(ctx, countCheckpoint, tx.laboratory)
	return err
}

const selectTransactionID = `SELECT transaction_id FROM entries WHERE laboratory = $1 AND position = $2`

// wasCommitted tells whether a transaction whose commit was not answered took
// effect. It first takes the head: a commit still on its way holds it, so
// afterwards there is only one answer.
func (s *Store) wasCommitted(ctx context.Context, laboratory string, id []byte, c Commit) (bool, error) {
	options := s.engine.write
	tx, err := s.write.BeginTx(ctx, &options)
	if err != nil {
		return false, err
	}
	defer tx.Rollback()
	q := &queries{engine: s.engine, tx: tx}
	var size int64
	if err := q.one(ctx, lockHead, []any{laboratory}, &size); errors.Is(err, sql.ErrNoRows) {
		return false, nil
	} else if err != nil {
		return false, err
	}
	var found []byte
	if err := q.one(ctx, selectTransactionID, []any{laboratory, c.First}, &found); errors.Is(err, sql.ErrNoRows) {
		return false, nil
	} else if err != nil {
		return false, err
	}
	return bytes.Equal(found, id), nil
}
