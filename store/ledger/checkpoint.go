package ledger

import (
	"bytes"
	"crypto/ed25519"
	"crypto/rand"
	"encoding/base64"
	"errors"
	"fmt"
	"strconv"
	"strings"

	"golang.org/x/mod/sumdb/note"
	"golang.org/x/mod/sumdb/tlog"
)

// Checkpoint says what a log was at one size. Signed, it is a note of C2SP checkpoint and
// signed-note, with Ed25519:
//
//	steelyard/3d0f…         the origin: which log; also the name of its key
//	20852163                how many records, in decimal, without leading zeros
//	CsUYapGGPo4dkMgI…       the root, in base64
//
//	— steelyard/3d0f… Az3…  the signature
//
// Other lines may follow the root, and other signatures the first: they are signed with the
// rest, or are somebody else's, and a reader ignores them.
type Checkpoint struct {
	Origin string
	Size   uint64
	Root   Hash
}

func (c Checkpoint) text() string {
	return fmt.Sprintf("%s\n%d\n%s\n", c.Origin, c.Size, c.Root)
}

// OriginOf is the origin line of the log of a store, from the store's UUID.
func OriginOf(id string) string { return "steelyard/" + id }

// NewKey makes a key for the log of an origin: the key to sign with, which is a secret, and
// the one to verify with, which is for everybody. Both are lines of text that begin with the
// origin, in the forms of package note.
func NewKey(origin string) (signing, verifying string, err error) {
	return note.GenerateKey(rand.Reader, origin)
}

// Verifying is the key to verify with what a key signs.
func Verifying(signing string) (string, error) {
	signer, err := note.NewSigner(signing)
	if err != nil {
		return "", errors.New("that is no key to sign with, or it is damaged") // no more: it is a secret
	}
	// PRIVATE+KEY+name+number+base64 of 1 for Ed25519 and the seed: NewSigner has checked it.
	_, text, _ := strings.Cut(strings.TrimPrefix(signing, "PRIVATE+KEY+"+signer.Name()+"+"), "+")
	seed, err := base64.StdEncoding.DecodeString(text)
	if err != nil || len(seed) != 1+ed25519.SeedSize {
		return "", errors.New("that is no key to sign with, or it is damaged")
	}
	public := ed25519.NewKeyFromSeed(seed[1:]).Public().(ed25519.PublicKey)
	return note.NewEd25519VerifierKey(signer.Name(), public)
}

// Sign signs a checkpoint.
func Sign(c Checkpoint, signing string) ([]byte, error) {
	signer, err := note.NewSigner(signing)
	if err != nil {
		return nil, errors.New("sign a checkpoint: the key is damaged") // the error would tell of the key
	}
	if signer.Name() != c.Origin {
		return nil, fmt.Errorf("sign a checkpoint: the key is that of %s and the log is %s", signer.Name(), c.Origin)
	}
	return note.Sign(&note.Note{Text: c.text()}, signer)
}

// Open reads a signed checkpoint and checks its signature with a key to verify with. Every
// bit of the text counts, but for the lines of other signatures.
func Open(signed []byte, verifying string) (Checkpoint, error) {
	verifier, err := note.NewVerifier(strings.TrimSpace(verifying))
	if err != nil {
		return Checkpoint{}, errors.New("that is no key to verify with")
	}
	n, err := note.Open(signed, note.VerifierList(verifier))
	var unverified *note.UnverifiedNoteError
	var invalid *note.InvalidSignatureError
	switch {
	case errors.As(err, &unverified):
		return Checkpoint{}, fmt.Errorf("a checkpoint isn't signed with the key of %s", verifier.Name())
	case errors.As(err, &invalid):
		return Checkpoint{}, fmt.Errorf("a checkpoint's signature with the key of %s is false: it was changed", verifier.Name())
	case err != nil:
		return Checkpoint{}, errors.New("that is no signed checkpoint")
	}
	// The library reads base64 with bits to spare at its end.
	for _, sig := range n.Sigs {
		if _, err := base64.StdEncoding.Strict().DecodeString(sig.Base64); err != nil {
			return Checkpoint{}, errors.New("a checkpoint's signature was changed")
		}
	}
	c, err := parse(n.Text)
	if err == nil && c.Origin != verifier.Name() {
		err = fmt.Errorf("a checkpoint of %s is signed with the key of %s", c.Origin, verifier.Name())
	}
	if err != nil {
		return Checkpoint{}, err
	}
	return c, nil
}

// OriginIn is the origin that a signed checkpoint names; nothing is checked.
func OriginIn(signed []byte) string {
	origin, _, _ := bytes.Cut(signed, []byte("\n"))
	return string(origin)
}

func parse(text string) (c Checkpoint, err error) {
	lines := strings.SplitN(text, "\n", 4)
	if len(lines) < 4 {
		return c, errors.New("a checkpoint has too few lines")
	}
	c.Origin = lines[0]
	if c.Size, err = strconv.ParseUint(lines[1], 10, 63); err != nil || strconv.FormatUint(c.Size, 10) != lines[1] {
		return c, fmt.Errorf("a checkpoint's size is %q", lines[1])
	}
	if c.Root, err = ParseHash(lines[2]); err != nil {
		return c, fmt.Errorf("a checkpoint's root is %q", lines[2])
	}
	return c, nil
}

// ParseHash reads a hash in base64, in its one form.
func ParseHash(text string) (h Hash, err error) {
	if h, err = tlog.ParseHash(text); err == nil && h.String() != text {
		err = errors.New("that hash is not written in its one form")
	}
	return h, err
}
