package ledger

import (
	"crypto/ed25519"
	"crypto/sha256"
	"encoding/base64"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"strconv"
	"strings"

	formats "github.com/transparency-dev/formats/log"
	"golang.org/x/mod/sumdb/note"
)

// A Checkpoint is the state of a ledger: who it belongs to, how many entries
// it has, and the root of their tree.
type Checkpoint struct {
	// Origin names the ledger: <registry>/<laboratory>.
	Origin string
	Size   int64
	Root   Hash
}

// A CheckpointError is a text that is no checkpoint in the one accepted form.
type CheckpointError struct {
	Found    string
	Expected string
}

func (e *CheckpointError) Error() string {
	return fmt.Sprintf("checkpoint: found %s, expected %s", e.Found, e.Expected)
}

// Origin names the ledger of a laboratory in a registry.
func Origin(registry, laboratory string) string { return registry + "/" + laboratory }

// Text returns the three lines that are signed.
func (c Checkpoint) Text() string {
	return string(formats.Checkpoint{Origin: c.Origin, Size: uint64(c.Size), Hash: c.Root[:]}.Marshal())
}

// ParseCheckpoint reads the three lines of Text. Further lines, leading zeros
// and other spellings are refused as a CheckpointError.
func ParseCheckpoint(text string) (Checkpoint, error) {
	var parsed formats.Checkpoint
	rest, err := parsed.Unmarshal([]byte(text))
	if err != nil {
		return Checkpoint{}, &CheckpointError{Found: strconv.Quote(text) + " (" + err.Error() + ")", Expected: "origin, size and root on three lines"}
	}
	c := Checkpoint{Origin: parsed.Origin, Size: int64(parsed.Size)}
	if len(parsed.Hash) != len(c.Root) || parsed.Size > 1<<62 {
		return Checkpoint{}, &CheckpointError{Found: fmt.Sprintf("size %d with a root of %d bytes", parsed.Size, len(parsed.Hash)), Expected: "a root of 32 bytes"}
	}
	copy(c.Root[:], parsed.Hash)
	if len(rest) > 0 || c.Text() != text {
		return Checkpoint{}, &CheckpointError{Found: strconv.Quote(text), Expected: strconv.Quote(c.Text())}
	}
	return c, nil
}

// A Key signs checkpoints: an Ed25519 private key. One key may serve every
// ledger of a registry; its name in a signature is the ledger's origin.
type Key struct {
	seed [ed25519.SeedSize]byte
}

// keyText opens the text form of a private key.
const keyText = "ed25519-seed:"

// errKey does not repeat what was found: it may be most of a secret.
var errKey = errors.New("signing key: expected " + keyText + " and 44 characters of base64")

// NewKey draws a key.
func NewKey(rand io.Reader) (Key, error) {
	var k Key
	if _, err := io.ReadFull(rand, k.seed[:]); err != nil {
		return Key{}, fmt.Errorf("draw signing key: %w", err)
	}
	return k, nil
}

// ParseKey reads the text form of a private key.
func ParseKey(text string) (Key, error) {
	encoded, ok := strings.CutPrefix(strings.TrimSpace(text), keyText)
	seed, err := base64.StdEncoding.DecodeString(encoded)
	if !ok || err != nil || len(seed) != ed25519.SeedSize {
		return Key{}, errKey
	}
	var k Key
	copy(k.seed[:], seed)
	return k, nil
}

// Secret returns the text form of the private key. It belongs in a file of
// mode 0600 or a variable, never in the database.
func (k Key) Secret() string { return keyText + base64.StdEncoding.EncodeToString(k.seed[:]) }

// String hides the key, so that it cannot be printed by accident.
func (k Key) String() string { return "signing key" }

// GoString hides the key.
func (k Key) GoString() string { return "ledger.Key{}" }

// algorithmEd25519 is the signature type of C2SP signed-note.
const algorithmEd25519 = 1

// Verifier returns the public half for one ledger, in the verifier form of C2SP
// signed-note: <origin>+<8 hexadecimal digits>+<base64>.
func (k Key) Verifier(origin string) (string, error) {
	public, _ := ed25519.NewKeyFromSeed(k.seed[:]).Public().(ed25519.PublicKey)
	return note.NewEd25519VerifierKey(origin, public)
}

// signer makes the private key the note package signs with.
func (k Key) signer(origin string) (note.Signer, error) {
	public, _ := ed25519.NewKeyFromSeed(k.seed[:]).Public().(ed25519.PublicKey)
	sum := sha256.Sum256(append([]byte(origin+"\n"), append([]byte{algorithmEd25519}, public...)...))
	return note.NewSigner(fmt.Sprintf("PRIVATE+KEY+%s+%08x+%s", origin, binary.BigEndian.Uint32(sum[:]),
		base64.StdEncoding.EncodeToString(append([]byte{algorithmEd25519}, k.seed[:]...))))
}

// Sign returns the checkpoint as a signed note.
func Sign(c Checkpoint, k Key) ([]byte, error) {
	signer, err := k.signer(c.Origin)
	if err != nil {
		return nil, fmt.Errorf("sign checkpoint of %q: %w", c.Origin, err)
	}
	signed, err := note.Sign(&note.Note{Text: c.Text()}, signer)
	if err != nil {
		return nil, fmt.Errorf("sign checkpoint of %q: %w", c.Origin, err)
	}
	return signed, nil
}

// A Signed is a checkpoint with the key that vouches for it.
type Signed struct {
	Checkpoint
	// Signer is <name>+<8 hexadecimal digits>: the verifier without the key itself.
	Signer string
}

// SignedBy reads who signed a checkpoint, without checking: <name>+<8
// hexadecimal digits> of the first signature.
func SignedBy(text []byte) (string, error) {
	_, err := note.Open(text, note.VerifierList())
	if unverified, ok := errors.AsType[*note.UnverifiedNoteError](err); ok && len(unverified.Note.UnverifiedSigs) > 0 {
		sig := unverified.Note.UnverifiedSigs[0]
		return fmt.Sprintf("%s+%08x", sig.Name, sig.Hash), nil
	}
	return "", &CheckpointError{Found: strconv.Quote(string(text)), Expected: "a signed note"}
}

// Open checks a signed checkpoint against the verifiers known for its ledger
// and returns it. One good signature by a known key is asked for; a bad
// signature by a known key is refused.
func Open(text []byte, verifiers ...string) (Signed, error) {
	known := make([]note.Verifier, 0, len(verifiers))
	seen := make(map[string]bool, len(verifiers))
	for _, v := range verifiers {
		if seen[v] {
			continue // a note refuses ambiguous verifiers, even equal ones
		}
		seen[v] = true
		verifier, err := note.NewVerifier(v)
		if err != nil {
			return Signed{}, fmt.Errorf("verifier %q: %w", v, err)
		}
		known = append(known, verifier)
	}
	opened, err := note.Open(text, note.VerifierList(known...))
	if err != nil {
		return Signed{}, fmt.Errorf("checkpoint: %w", err)
	}
	c, err := ParseCheckpoint(opened.Text)
	if err != nil {
		return Signed{}, err
	}
	sig := opened.Sigs[0]
	return Signed{Checkpoint: c, Signer: fmt.Sprintf("%s+%08x", sig.Name, sig.Hash)}, nil
}
