package registry

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/json"
	"fmt"
	"slices"
	"strconv"
	"strings"

	"deltamoor/store"
)

// rows hashes the readings of every session again, block by block.
func (c *packChecker) rows() {
	bound := map[string]bool{}
	for _, r := range c.p.Readings {
		lines := bytes.SplitAfter(r.Bytes, []byte("\n"))
		lines = lines[:len(lines)-1] // what follows the last line feed is checked by its absence
		if !bytes.HasSuffix(r.Bytes, []byte("\n")) {
			c.find(r.File, "a last line without its line feed", "one canonical line for each reading")
		}
		for i, text := range lines {
			c.out.Readings++
			text = bytes.TrimSuffix(text, []byte("\n"))
			var rd store.Reading
			if err := json.Unmarshal(text, &rd); err != nil || !bytes.Equal(store.ReadingLine(rd), text) || rd.Number != i+1 || readingsFile(packLaboratory(r.File), rd.Session) != r.File {
				c.find(fmt.Sprintf("%s line %d", r.File, i+1), quote(short([]string{string(text)}, 1)), fmt.Sprintf("the canonical line of reading %d", i+1))
				continue
			}
			c.src.readings[r.File] = append(c.src.readings[r.File], rd)
		}
	}
	for _, raw := range c.intact {
		if raw.Kind != store.KindSession {
			continue
		}
		s, err := store.Decode[store.Session](raw)
		if err != nil {
			c.find(c.files[wantedOf(raw.Ref)], err.Error(), "a session")
			continue
		}
		file := readingsFile(raw.Laboratory, raw.Code)
		bound[file] = true
		rows := c.src.readings[file]
		if len(rows) < s.Value.Readings || len(rows) > s.Value.Readings && !c.longer(raw, len(rows)) {
			c.find(file, fmt.Sprintf("%d intact readings", len(rows)), strconv.Itoa(s.Value.Readings))
		}
		rows = rows[:min(len(rows), s.Value.Readings)]
		blocks := store.ReadingBlocks(rows)
		for i := range max(len(blocks), len(s.Value.Blocks)) {
			found, want := "no readings", "none"
			if i < len(blocks) {
				found = "readings with SHA-256 " + blocks[i].String()
			}
			if i < len(s.Value.Blocks) {
				want = "SHA-256 " + s.Value.Blocks[i].String() + " as in " + c.files[wantedOf(raw.Ref)]
			}
			if i >= len(blocks) || i >= len(s.Value.Blocks) || blocks[i] != s.Value.Blocks[i] {
				c.find(fmt.Sprintf("%s block %d (64 lines each)", file, i+1), found, want)
			}
		}
	}
	for _, r := range c.p.Readings {
		if !bound[r.File] {
			c.find(r.File, "readings", "nothing: no intact session of the pack has them")
		}
	}
}

// longer tells whether another version of a session in the pack binds n readings.
func (c *packChecker) longer(raw store.Raw, n int) bool {
	return slices.ContainsFunc(c.intact, func(other store.Raw) bool {
		if other.Key != raw.Key {
			return false
		}
		s, err := store.Decode[store.Session](other)
		return err == nil && s.Value.Readings == n
	})
}

// packLaboratory is the second part of a file's name.
func packLaboratory(file string) string {
	if parts := strings.SplitN(file, "/", 3); len(parts) == 3 {
		return parts[1]
	}
	return ""
}

// uploads hashes every file again, and asks for those that versions bind.
func (c *packChecker) uploads() {
	present := map[string]bool{}
	for _, u := range c.p.Uploads {
		c.out.Uploads++
		hash := store.Hash(sha256.Sum256(u.Bytes))
		present[u.File] = true
		if uploadFile(packLaboratory(u.File), hash) != u.File {
			c.find(u.File, "bytes with SHA-256 "+hash.String(), "those that its name says")
		}
		key := store.Key{Laboratory: packLaboratory(u.File), Kind: store.KindDocument, Code: strings.TrimPrefix(u.File, packUploads+packLaboratory(u.File)+"/")}
		raw, ok := c.src.raws[wantedVersion{key, 1}]
		if !ok {
			c.find(versionFile(store.Ref{Key: key, Version: 1}), "no intact version", "the one that binds "+u.File)
			continue
		}
		if d, err := store.Decode[store.Upload](raw); err != nil || d.Value.Size != int64(len(u.Bytes)) {
			c.find(u.File, fmt.Sprintf("%d bytes", len(u.Bytes)), "as many as "+c.files[wantedOf(raw.Ref)]+" says")
		}
	}
	for _, raw := range c.intact {
		hash := boundUpload(raw)
		if hash == nil || present[uploadFile(raw.Laboratory, *hash)] {
			continue
		}
		if !slices.ContainsFunc(c.p.Withheld, func(w PackWithheld) bool { return w.Laboratory == raw.Laboratory && w.Hash == *hash }) {
			c.find(uploadFile(raw.Laboratory, *hash), "no file", "the bytes that "+c.files[wantedOf(raw.Ref)]+" binds")
		}
	}
	for _, w := range c.p.Withheld {
		if !slices.ContainsFunc(c.intact, func(raw store.Raw) bool {
			hash := boundUpload(raw)
			return hash != nil && *hash == w.Hash && raw.Laboratory == w.Laboratory
		}) || present[uploadFile(w.Laboratory, w.Hash)] {
			c.find("pack.json", "an upload "+w.Hash.String()+" that is said to be left out", "one that a version binds and that is not there")
		}
	}
}

// boundUpload is the upload that a version's body names, if any.
func boundUpload(raw store.Raw) *store.Hash {
	var body struct {
		Upload   *store.Hash `json:"upload"`
		Document *store.Hash `json:"document"`
	}
	switch raw.Kind {
	case store.KindSession, store.KindStudy, store.KindValue, store.KindMaterial:
		if json.Unmarshal(raw.Value, &body) == nil {
			if raw.Kind == store.KindSession || raw.Kind == store.KindStudy {
				return body.Upload
			}
			return body.Document
		}
	}
	return nil
}

// reach refuses versions that the reported delta does not rest on.
func (c *packChecker) reach() {
	report, line, err := c.start()
	if err != nil {
		c.find("pack.json", err.Error(), "what the pack is about, "+c.p.Name())
		return
	}
	seen := map[wantedVersion]bool{wantedOf(report.Ref): true}
	queue := []store.Raw{report}
	for i := 0; i < len(queue); i++ {
		raw := queue[i]
		next := []wantedVersion{}
		for j, in := range raw.Inputs {
			if !packLeavesOut(raw, in, j, line, true) {
				next = append(next, wantedOf(in.Ref))
			}
		}
		for _, d := range c.src.decisions[wantedOf(raw.Ref)] {
			next = append(next, wantedOf(d.Ref))
		}
		if hash := boundUpload(raw); hash != nil {
			next = append(next, wantedVersion{store.Key{Laboratory: raw.Laboratory, Kind: store.KindDocument, Code: hash.String()}, 1})
		}
		for _, w := range next {
			if have, ok := c.src.raws[w]; ok && !seen[w] {
				seen[w] = true
				queue = append(queue, have)
			}
		}
	}
	for _, raw := range c.intact {
		if !seen[wantedOf(raw.Ref)] && !(raw.Kind == store.KindKey && raw.Code == KeyCode) {
			c.find(c.files[wantedOf(raw.Ref)], "a version that nothing in the pack rests on", "only the chain of "+c.p.Name())
		}
	}
}

// start finds the version that the pack is about, and which line of it is meant.
func (c *packChecker) start() (store.Raw, int, error) {
	if c.p.Value == nil {
		return c.reportLine()
	}
	raw, ok := c.src.raws[wantedVersion{store.Key{Laboratory: c.p.Laboratory, Kind: store.KindValue, Code: c.p.Value.Code}, c.p.Value.Version}]
	if !ok {
		return raw, -1, fmt.Errorf("no intact version %s", c.p.Name())
	}
	return raw, -1, nil
}

// reportLine finds the report that has the pack's code, and the index of the line.
func (c *packChecker) reportLine() (store.Raw, int, error) {
	for _, raw := range c.intact {
		if raw.Kind != store.KindReport || raw.Laboratory != c.p.Laboratory {
			continue
		}
		rep, err := store.Decode[store.Report](raw)
		if err != nil {
			continue
		}
		for i, line := range rep.Value.Lines {
			if line.Code == c.p.Code && i < len(rep.Inputs) && rep.Inputs[i].Part == "line" {
				return raw, i, nil
			}
		}
	}
	return store.Raw{}, -1, fmt.Errorf("no intact report with the line %s", store.FormatCode(c.p.Code))
}

// reported states the pack's delta from its final value.
func (c *packChecker) reported(ctx context.Context, raw store.Raw, line int) (ReportedDelta, error) {
	rep, err := store.Decode[store.Report](raw)
	if err != nil {
		return ReportedDelta{}, err
	}
	final, err := decodeVersion[store.Final](ctx, c.src, rep.Inputs[line].Ref)
	if err != nil {
		return ReportedDelta{}, err
	}
	out := ReportedDelta{ReportLine: store.NewReportLine(c.p.Code, rep.Code, line, final), Laboratory: raw.Laboratory, Hash: rep.Value.Lines[line].Hash, Client: rep.Value.Client,
		IssuedAt: rep.RecordedAt, IssuedBy: rep.RecordedBy, Flags: final.Value.Flags, EffectiveDF: final.Value.EffectiveDF}
	for _, in := range final.Inputs {
		if in.Part == "sample" {
			sample, err := decodeVersion[store.Sample](ctx, c.src, in.Ref)
			if err != nil {
				return out, err
			}
			out.Label = sample.Value.Label
		}
	}
	out.FinalState, _, err = c.src.State(ctx, final.Ref, store.Moment{})
	return out, err
}

// recompute runs the registry's own recomputation over the pack.
func (c *packChecker) recompute(ctx context.Context) {
	for _, raw := range c.intact {
		file := c.files[wantedOf(raw.Ref)]
		var again recheck
		if raw.Kind != store.KindReport {
			if err := again.version(ctx, c.src, raw); err != nil {
				c.find(file, "numbers that cannot be computed again: "+err.Error(), "the same numbers from the inputs it names")
			}
		}
		for _, f := range again.findings {
			c.find(strings.TrimSpace(file+strings.TrimPrefix(f.Key, raw.Ref.String())), f.Found, f.Expected)
		}
		c.out.Recomputed += again.recomputed
		c.out.Equal += again.equal
	}
	if c.p.Value != nil {
		return // the value was computed again with the others
	}
	report, line, err := c.reportLine()
	if err != nil {
		return // told by reach
	}
	c.out.Recomputed++
	d, err := c.reported(ctx, report, line)
	if err != nil {
		c.find(c.files[wantedOf(report.Ref)], fmt.Sprintf("line %d, which cannot be stated again: %v", line, err), "the line of its final value")
		return
	}
	hash, err := store.ReportLineHash(d.ReportLine)
	if err != nil || hash != d.Hash {
		c.find(fmt.Sprintf("%s lines[%d]", c.files[wantedOf(report.Ref)], line), d.Hash.String(), hash.String()+" (computed again)")
		return
	}
	c.out.Equal++
}
