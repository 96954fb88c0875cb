package store

import (
	"context"
	"errors"
	"fmt"
	"runtime"
	"slices"
	"sync"

	"deltamoor/store/ledger"
)

// A Finding is one place where the registry does not say what it should.
type Finding struct {
	// Position in the ledger it belongs to; -1 where it belongs to none.
	Position int64
	// Table and Key name the row, as in versions, "value FJO/GLY/d13C-VPDB/total.2".
	Table, Key      string
	Found, Expected string
}

func (f *Finding) Error() string {
	return fmt.Sprintf("%s %s: found %s, expected %s", f.Table, f.Key, f.Found, f.Expected)
}

// Findings are what a verification found. No findings means: every row of
// history and of what is derived from it is as it was recorded, up to Size.
type Findings struct {
	Laboratory string
	// Size, At and Root are the state of the ledger that was verified.
	Size int64
	At   Instant
	Root ledger.Hash
	// Checkpoints is how many signed checkpoints lead to the recomputed roots.
	Checkpoints int
	// List holds the findings in order, at most VerifyOptions.MaxFindings of Count.
	List  []Finding
	Count int
}

// Clean reports whether nothing was found.
func (f Findings) Clean() bool { return f.Count == 0 }

// VerifyOptions say how to verify.
type VerifyOptions struct {
	// Workers is how many versions are checked at once; 0 is one for each processor.
	Workers int
	// Progress is called now and then with the ledger entries done; nil is silent.
	Progress func(done, total int64)
	// Visit is called once for every version whose body is intact, by several
	// workers at once, in no order. A *Finding it returns joins the others; any other
	// error ends the verification.
	Visit func(context.Context, Raw) error
	// Verifiers are known public keys beside those recorded in the registry itself.
	Verifiers []string
	// Outside are signed checkpoints kept outside the registry. Only they can show
	// that the newest entries, or a stored checkpoint, have been removed.
	Outside [][]byte
	// MaxFindings bounds the list; 0 is 1000. Further findings are counted.
	MaxFindings int
}

const selectLastPosition = `SELECT max(position) FROM (
	SELECT coalesce(max(position), -1) AS position FROM entries WHERE laboratory = $1
	UNION ALL
	SELECT coalesce(max(position), -1) FROM versions WHERE laboratory = $1) AS last`

// verifyBatch is how many entries are read at once; so many bodies are in memory
// for each worker.
const verifyBatch = 128

// Verify reads a laboratory's whole ledger in order, recomputes everything that
// can be recomputed, and reports every difference by table and key. Writers may
// go on; what they add meanwhile is left for the next time. The error is for a
// verification that could not be carried out, not for what it found.
func (s *Store) Verify(ctx context.Context, laboratory string, o VerifyOptions) (Findings, error) {
	if err := checkLaboratory(laboratory); err != nil {
		return Findings{}, err
	}
	if o.Workers <= 0 {
		o.Workers = runtime.GOMAXPROCS(0)
	}
	if o.MaxFindings <= 0 {
		o.MaxFindings = 1000
	}
	c := &checker{store: s, laboratory: laboratory, options: o, apart: make(map[Hash]bool), roots: make(map[int64]ledger.Hash)}
	var head Head
	err := s.Read(ctx, func(ctx context.Context, v *View) (err error) {
		v.tolerant = true
		if head, err = v.Head(ctx, laboratory); err != nil {
			return err
		}
		// A head that promises more than there is must not keep the walk going: what
		// it promises is told by the checks of the head itself.
		var last int64
		if err := v.q.one(ctx, selectLastPosition, []any{laboratory}, &last); err != nil {
			return err
		}
		head.Size = min(head.Size, last+1)
		return c.loadCheckpoints(ctx, v)
	})
	if err != nil {
		return Findings{}, fmt.Errorf("verify %s: %w", laboratory, err)
	}
	if err := c.ledger(ctx, head); err != nil {
		return Findings{}, fmt.Errorf("verify %s: %w", laboratory, err)
	}
	c.checkCheckpoints()
	if err := c.tables(ctx); err != nil {
		return Findings{}, fmt.Errorf("verify %s: %w", laboratory, err)
	}
	slices.SortStableFunc(c.list, func(a, b Finding) int {
		switch {
		case a.Position < 0 && b.Position >= 0:
			return 1
		case b.Position < 0 && a.Position >= 0:
			return -1
		case a.Position != b.Position:
			return int(a.Position - b.Position)
		}
		return 0
	})
	return Findings{Laboratory: laboratory, Size: head.Size, At: head.At, Root: c.tree.Root(), Checkpoints: c.signed, List: c.list, Count: c.count}, nil
}

// A checker is one verification.
type checker struct {
	store      *Store
	laboratory string
	options    VerifyOptions
	tree       ledger.Tree

	mu    sync.Mutex
	list  []Finding
	count int
	// apart holds the hashes of bodies kept in content parts.
	apart map[Hash]bool

	stored  []Checkpoint
	outside []Checkpoint
	roots   map[int64]ledger.Hash // recomputed, at the sizes of checkpoints
	keys    []string              // verifiers
	signed  int
}

func (c *checker) find(position int64, table, key, found, expected string) {
	c.add(Finding{Position: position, Table: table, Key: key, Found: found, Expected: expected})
}

func (c *checker) add(f Finding) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.count++
	if len(c.list) < c.options.MaxFindings {
		c.list = append(c.list, f)
	}
}

func (c *checker) keptApart(h Hash) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.apart[h] = true
}

// ledger walks the entries. One goroutine reads and grows the tree, which is
// a matter of order; workers check the versions, which is not.
func (c *checker) ledger(ctx context.Context, head Head) error {
	ctx, cancel := context.WithCancelCause(ctx)
	defer cancel(nil)
	work := make(chan []versionRow)
	var workers sync.WaitGroup
	for range c.options.Workers {
		workers.Go(func() {
			for batch := range work {
				if ctx.Err() != nil {
					continue // drain
				}
				if err := c.versions(ctx, batch); err != nil {
					cancel(err)
				}
			}
		})
	}
	err := c.walk(ctx, head, work)
	close(work)
	workers.Wait()
	if cause := context.Cause(ctx); cause != nil && (err == nil || errors.Is(err, context.Canceled)) {
		return cause
	}
	return err
}

func (c *checker) walk(ctx context.Context, head Head, work chan<- []versionRow) error {
	var order entryOrder
	for from := int64(0); from < head.Size; from += verifyBatch {
		to := min(from+verifyBatch, head.Size)
		var b ledgerBatch
		err := c.store.Read(ctx, func(ctx context.Context, v *View) (err error) {
			b, err = v.ledgerBatch(ctx, c.laboratory, from, to)
			return err
		})
		if err != nil {
			return err
		}
		for position := from; position < to; position++ {
			c.entry(position, &b, &order)
			if _, ok := c.roots[position+1]; ok {
				c.roots[position+1] = c.tree.Root()
			}
		}
		select {
		case work <- b.rows:
		case <-ctx.Done():
			return ctx.Err()
		}
		if c.options.Progress != nil {
			c.options.Progress(to, head.Size)
		}
	}
	return nil
}
