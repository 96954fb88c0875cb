package store

import (
	"bytes"
	"compress/flate"
	"context"
	"crypto/sha256"
	"database/sql"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
)

// Upload is the body of the version that binds an upload's name, media type and
// size to its bytes: kind document, code the SHA-256 in hexadecimal.
type Upload struct {
	Name      string `json:"name"`
	MediaType string `json:"media_type"`
	Size      int64  `json:"size"`
}

// Form of the body.
func (Upload) Form() string { return "upload/1" }

// contentPart is how many bytes one row of content holds before compression.
const contentPart = 256 << 10

// MaxUpload bounds one upload.
const MaxUpload = 64 << 20

// A part is stored as one byte that says how, the bytes, and their CRC-32C as
// stored. The hash of the whole covers what is read out of the parts; the check
// covers the stored form too, in which several spellings mean the same bytes.
const (
	partPlain   = 0
	partDeflate = 1
)

func castagnoli(b []byte) uint32 { return crc32.Checksum(b, crc32.MakeTable(crc32.Castagnoli)) }

func packPart(data []byte) ([]byte, error) {
	var b bytes.Buffer
	b.WriteByte(partDeflate)
	w, err := flate.NewWriter(&b, flate.BestSpeed)
	if err != nil {
		return nil, err
	}
	if _, err := w.Write(data); err != nil {
		return nil, err
	}
	if err := w.Close(); err != nil {
		return nil, err
	}
	packed := b.Bytes()
	if len(packed) > len(data) {
		packed = append([]byte{partPlain}, data...)
	}
	return binary.BigEndian.AppendUint32(packed, castagnoli(packed)), nil
}

func unpackPart(stored []byte) ([]byte, error) {
	if len(stored) < 5 {
		return nil, fmt.Errorf("found %d bytes, expected at least 5", len(stored))
	}
	packed, check := stored[:len(stored)-4], binary.BigEndian.Uint32(stored[len(stored)-4:])
	if found := castagnoli(packed); found != check {
		return nil, fmt.Errorf("found check %08x, expected %08x", found, check)
	}
	switch packed[0] {
	case partPlain:
		return packed[1:], nil
	case partDeflate:
		data, err := io.ReadAll(io.LimitReader(flate.NewReader(bytes.NewReader(packed[1:])), contentPart+1))
		if err != nil {
			return nil, err
		}
		if len(data) > contentPart {
			return nil, fmt.Errorf("found more than %d bytes", contentPart)
		}
		return data, nil
	}
	return nil, fmt.Errorf("found form %d, expected %d or %d", packed[0], partPlain, partDeflate)
}

var contentTable = table{"content", []string{"laboratory", "sha256", "part", "data"}}

// putContent stores bytes in parts under their hash; bytes already there stay.
func (tx *Tx) putContent(ctx context.Context, hash Hash, data []byte) error {
	for part := 0; part == 0 || part*contentPart < len(data); part++ {
		packed, err := packPart(data[part*contentPart : min(len(data), (part+1)*contentPart)])
		if err != nil {
			return fmt.Errorf("compress part %d: %w", part, err)
		}
		if err := tx.q.insert(ctx, contentTable, [][]any{{tx.laboratory, hash[:], part, packed}},
			"ON CONFLICT (laboratory, sha256, part) DO NOTHING"); err != nil {
			return err
		}
	}
	return nil
}

// A ContentError is stored bytes that are not what their hash says.
type ContentError struct {
	Hash  Hash
	Found string
}

func (e *ContentError) Error() string {
	return fmt.Sprintf("content %s is corrupt: found %s", e.Hash, e.Found)
}

const selectContent = `SELECT data FROM content WHERE laboratory = $1 AND sha256 = $2 AND part = $3`

// copyContent writes stored bytes part by part, so that memory stays flat, and
// checks them against their hash. The error comes after what was already written.
func (v *View) copyContent(ctx context.Context, laboratory string, hash Hash, w io.Writer) (int64, error) {
	sum := sha256.New()
	var size int64
	for part := 0; ; part++ {
		var packed []byte
		err := v.q.one(ctx, selectContent, []any{laboratory, hash[:], part}, &packed)
		if errors.Is(err, sql.ErrNoRows) {
			if part == 0 {
				return 0, notFound("content %s", hash)
			}
			break
		}
		if err != nil {
			return size, fmt.Errorf("read part %d of %s: %w", part, hash, err)
		}
		data, err := unpackPart(packed)
		if err != nil {
			return size, &ContentError{Hash: hash, Found: fmt.Sprintf("part %d: %v", part, err)}
		}
		sum.Write(data)
		n, err := w.Write(data)
		size += int64(n)
		if err != nil {
			return size, fmt.Errorf("write part %d of %s: %w", part, hash, err)
		}
		if len(data) < contentPart {
			break
		}
	}
	if found := Hash(sum.Sum(nil)); found != hash {
		return size, &ContentError{Hash: hash, Found: "bytes with hash " + found.String()}
	}
	return size, nil
}

func (v *View) contentBytes(ctx context.Context, laboratory string, hash Hash) ([]byte, error) {
	var b bytes.Buffer
	_, err := v.copyContent(ctx, laboratory, hash, &b)
	return b.Bytes(), err
}

// UploadInfo is what is known of an upload beside its bytes.
type UploadInfo struct {
	Hash      Hash
	Name      string
	MediaType string
	Size      int64
}

const selectUpload = `SELECT name, media_type, size FROM uploads WHERE laboratory = $1 AND sha256 = $2`

// UploadInfo returns name, media type and size of an upload.
func (v *View) UploadInfo(ctx context.Context, laboratory string, hash Hash) (UploadInfo, error) {
	u := UploadInfo{Hash: hash}
	err := v.q.one(ctx, selectUpload, []any{laboratory, hash[:]}, &u.Name, &u.MediaType, &u.Size)
	if errors.Is(err, sql.ErrNoRows) {
		return UploadInfo{}, notFound("upload %s/%s", laboratory, hash)
	}
	if err != nil {
		return UploadInfo{}, fmt.Errorf("read upload %s/%s: %w", laboratory, hash, err)
	}
	return u, nil
}

// Upload writes the bytes of an upload to w, as they came.
func (v *View) Upload(ctx context.Context, laboratory string, hash Hash, w io.Writer) (UploadInfo, error) {
	u, err := v.UploadInfo(ctx, laboratory, hash)
	if err != nil {
		return UploadInfo{}, err
	}
	_, err = v.copyContent(ctx, laboratory, hash, w)
	return u, err
}

// An uploadRow waits for the version that binds it, which is recorded by
// whoever records the act it belongs to.
type uploadRow struct {
	hash Hash
	Upload
}

const insertUpload = `INSERT INTO uploads (laboratory, sha256, name, media_type, size) VALUES ($1, $2, $3, $4, $5)
	ON CONFLICT (laboratory, sha256) DO NOTHING`

// PutUpload stores bytes as they came. Bytes already there stay under their
// first name: existed. An upload belongs to an act: a transaction that stores
// one must queue a version too. With it a version of kind document is recorded
// that binds name, media type and size to the bytes.
func (tx *Tx) PutUpload(ctx context.Context, name, mediaType string, data []byte) (hash Hash, existed bool, err error) {
	hash = sha256.Sum256(data)
	if len(data) > MaxUpload {
		return hash, false, &InvalidError{Place: "upload " + name, Found: fmt.Sprintf("%d bytes", len(data)), Expected: fmt.Sprintf("at most %d", MaxUpload)}
	}
	if err := checkText("upload name", name, 500); err != nil {
		return hash, false, err
	}
	if err := checkText("upload media type", mediaType, 200); err != nil {
		return hash, false, err
	}
	n, err := tx.q.exec(ctx, insertUpload, tx.laboratory, hash[:], name, mediaType, int64(len(data)))
	if err != nil {
		return hash, false, fmt.Errorf("store upload %s: %w", hash, err)
	}
	if n == 0 {
		return hash, true, nil
	}
	if err := tx.putContent(ctx, hash, data); err != nil {
		return hash, false, fmt.Errorf("store upload %s: %w", hash, err)
	}
	tx.uploads = append(tx.uploads, uploadRow{hash: hash, Upload: Upload{Name: name, MediaType: mediaType, Size: int64(len(data))}})
	return hash, false, nil
}

// bindUploads queues the versions that bind new uploads.
func (tx *Tx) bindUploads(ctx context.Context) error {
	if len(tx.uploads) == 0 {
		return nil
	}
	if len(tx.queue) == 0 {
		return &InvalidError{Place: "upload " + tx.uploads[0].Name, Found: "no version in the same act", Expected: "the version that the upload belongs to"}
	}
	by := tx.queue[0].raw.RecordedBy
	for _, u := range tx.uploads {
		if _, err := tx.Append(ctx, Draft{Kind: KindDocument, Code: u.hash.String(), By: by, Value: u.Upload}); err != nil {
			return fmt.Errorf("bind upload %s: %w", u.hash, err)
		}
	}
	return nil
}
