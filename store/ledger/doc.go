// Package ledger is the tamper-evident log of one laboratory: what an entry
// is, how entries are hashed into a tree, how membership and growth are proved,
// and how the state of the tree is signed. It knows no database and imports
// nothing of the registry, so the same code checks a registry and a bundle.
//
// # Entry
//
// An entry binds one version of one record. Its bytes are one canonical JSON
// object (RFC 8785) with exactly these members:
//
//	{"at":"2026-03-02T08:15:00Z","by":"mara","code":"C4T8ZRN1HQ",
//	 "hash":"<64 hexadecimal digits>","kind":"calibration","laboratory":"FJO","version":2}
//
// (on one line). "at" is the time of the commit in UTC, to the microsecond;
// "hash" is the SHA-256 of the version's body. ParseEntry accepts no other
// spelling of the same content.
//
// # Tree
//
// The entries of a laboratory, in order of commit, are the leaves of the Merkle
// tree of RFC 6962, section 2.1 (the same in RFC 9162): the hash of a leaf is
// SHA-256(0x00 ‖ entry), of an inner node SHA-256(0x01 ‖ left ‖ right). Inner nodes
// are stored once complete, in the order of [tlog.StoredHashIndex], and never
// change: a tree of n entries has StoredHashCount(n) of them. The root of the
// empty tree is SHA-256 of nothing.
//
// # Checkpoint
//
// A checkpoint states origin, size and root of a tree, signed with Ed25519:
//
//	<registry>/<laboratory>
//	<size in decimal>
//	<root in base64>
//
//	— <registry>/<laboratory> <signature in base64>
//
// This is the checkpoint of C2SP tlog-checkpoint inside a C2SP signed note. Who
// keeps a checkpoint outside the registry can show any later change to what
// it covers, whoever made it.
//
// # Example
//
//	var tree ledger.Tree
//	for _, entry := range entries {
//		tree.Append(ledger.LeafHash(entry.Bytes()))
//	}
//	text, err := ledger.Sign(ledger.Checkpoint{Origin: origin, Size: tree.Size(), Root: tree.Root()}, key)
package ledger
