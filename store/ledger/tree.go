package ledger

import (
	"crypto/sha256"
	"fmt"
	"math/bits"

	"golang.org/x/mod/sumdb/tlog"
)

// A Hash is the hash of a leaf, an inner node or a root.
type Hash = tlog.Hash

// A HashReader reads stored inner nodes by index (tlog.StoredHashIndex).
type HashReader = tlog.HashReader

// A Node is one stored node of the tree: its index in the order of
// tlog.StoredHashIndex, and its hash.
type Node struct {
	Index int64
	Hash  Hash
}

// LeafHash returns the hash of an entry as a leaf: SHA-256(0x00 ‖ entry),
// RFC 6962, 2.1.
func LeafHash(entry []byte) Hash { return tlog.RecordHash(entry) }

// NodeCount returns how many nodes a tree of size entries has stored.
func NodeCount(size int64) int64 { return tlog.StoredHashCount(size) }

// LeafIndex returns the index of the node that holds the leaf at a position.
func LeafIndex(position int64) int64 { return tlog.StoredHashIndex(0, position) }

// EmptyRoot is the root of the tree without entries: SHA-256 of nothing,
// RFC 6962, 2.1.
func EmptyRoot() Hash { return sha256.Sum256(nil) }

// Frontier returns the indexes of the complete subtrees a tree of the given
// size consists of, largest first: all that is needed to append to it.
func Frontier(size int64) []int64 {
	indexes := make([]int64, 0, bits.OnesCount64(uint64(size)))
	start := int64(0)
	for level := 62; level >= 0; level-- {
		if width := int64(1) << level; size&width != 0 {
			indexes = append(indexes, tlog.StoredHashIndex(level, start>>level))
			start += width
		}
	}
	return indexes
}

// A Tree grows by one leaf at a time and remembers only its frontier, at most
// 63 hashes. The zero Tree is empty.
type Tree struct {
	size     int64
	frontier []Hash // complete subtrees, largest first
}

// OpenTree continues a tree of the given size whose nodes are read from r.
func OpenTree(size int64, r HashReader) (*Tree, error) {
	if size < 0 {
		return nil, fmt.Errorf("open tree: size %d, expected 0 or more", size)
	}
	if size == 0 {
		return &Tree{}, nil
	}
	hashes, err := readHashes(r, Frontier(size))
	if err != nil {
		return nil, fmt.Errorf("open tree of size %d: %w", size, err)
	}
	return &Tree{size: size, frontier: hashes}, nil
}

func readHashes(r HashReader, indexes []int64) ([]Hash, error) {
	hashes, err := r.ReadHashes(indexes)
	if err != nil {
		return nil, err
	}
	if len(hashes) != len(indexes) {
		return nil, fmt.Errorf("read nodes: found %d hashes, expected %d", len(hashes), len(indexes))
	}
	return hashes, nil
}

// Size returns the number of leaves.
func (t *Tree) Size() int64 { return t.size }

// Append adds a leaf and returns the nodes this completes, in the order they
// are stored: the leaf itself, then each subtree it closes.
func (t *Tree) Append(leaf Hash) []Node {
	index := LeafIndex(t.size)
	nodes := append(make([]Node, 0, 2), Node{Index: index, Hash: leaf})
	hash := leaf
	// Each trailing 1 bit of the old size is a complete subtree as large as the
	// one just closed, waiting on the left.
	for n := t.size; n&1 == 1; n >>= 1 {
		last := len(t.frontier) - 1
		hash = tlog.NodeHash(t.frontier[last], hash)
		t.frontier = t.frontier[:last]
		index++
		nodes = append(nodes, Node{Index: index, Hash: hash})
	}
	t.frontier = append(t.frontier, hash)
	t.size++
	return nodes
}

// Root returns the hash of the whole tree.
func (t *Tree) Root() Hash {
	if t.size == 0 {
		return EmptyRoot()
	}
	hash := t.frontier[len(t.frontier)-1]
	for i := len(t.frontier) - 2; i >= 0; i-- {
		hash = tlog.NodeHash(t.frontier[i], hash)
	}
	return hash
}

// Root returns the hash of the tree of the given size whose nodes r reads.
func Root(size int64, r HashReader) (Hash, error) {
	t, err := OpenTree(size, r)
	if err != nil {
		return Hash{}, err
	}
	return t.Root(), nil
}

// A ProofError is a proof that does not prove what it is said to.
type ProofError struct {
	// Claim says what was to be proved.
	Claim string
	// Found and Expected are roots, where it came to comparing roots.
	Found, Expected Hash
}

func (e *ProofError) Error() string {
	return fmt.Sprintf("%s: the proof does not lead to the root %s", e.Claim, e.Expected)
}

// ProveInclusion proves that the tree of the given size holds the leaf at a
// position: the audit path of RFC 6962, 2.1.1, from the leaf's sibling upwards.
func ProveInclusion(size, position int64, r HashReader) ([]Hash, error) {
	if position < 0 || position >= size {
		return nil, fmt.Errorf("prove inclusion: position %d, expected 0 to %d", position, size-1)
	}
	proof, err := tlog.ProveRecord(size, position, r)
	if err != nil {
		return nil, fmt.Errorf("prove inclusion of position %d in size %d: %w", position, size, err)
	}
	return proof, nil
}

// CheckInclusion checks a proof made by ProveInclusion against the root of the
// tree of the given size. A proof that fails is a ProofError.
func CheckInclusion(proof []Hash, size int64, root Hash, position int64, leaf Hash) error {
	claim := fmt.Sprintf("inclusion of position %d in size %d", position, size)
	if position < 0 || position >= size {
		return fmt.Errorf("%s: expected a position from 0 to %d", claim, size-1)
	}
	if err := tlog.CheckRecord(proof, size, root, position, leaf); err != nil {
		return &ProofError{Claim: claim, Expected: root}
	}
	return nil
}

// ProveConsistency proves that the tree of the given size begins with the
// entries of its older state: RFC 6962, 2.1.2. Every tree continues the empty
// one; that proof is empty.
func ProveConsistency(size, older int64, r HashReader) ([]Hash, error) {
	if older < 0 || older > size {
		return nil, fmt.Errorf("prove consistency: older size %d, expected 0 to %d", older, size)
	}
	if older == 0 {
		return []Hash{}, nil
	}
	proof, err := tlog.ProveTree(size, older, r)
	if err != nil {
		return nil, fmt.Errorf("prove that size %d continues size %d: %w", size, older, err)
	}
	return proof, nil
}

// CheckConsistency checks a proof made by ProveConsistency against both roots.
// A proof that fails is a ProofError.
func CheckConsistency(proof []Hash, size int64, root Hash, older int64, olderRoot Hash) error {
	claim := fmt.Sprintf("size %d continues size %d", size, older)
	if older < 0 || older > size {
		return fmt.Errorf("%s: expected an older size from 0 to %d", claim, size)
	}
	if older == 0 {
		if len(proof) != 0 || olderRoot != EmptyRoot() {
			return &ProofError{Claim: claim, Found: olderRoot, Expected: EmptyRoot()}
		}
		return nil
	}
	if err := tlog.CheckTree(proof, size, root, older, olderRoot); err != nil {
		return &ProofError{Claim: claim, Expected: root}
	}
	return nil
}
