package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// Invented entries in the shape of the OSV schema 1.3.1 that the Go database uses.
const (
	stdlibEntry = `{"id":"GO-2026-0001","modified":"2026-01-02T00:00:00Z","affected":[{"package":{"name":"stdlib"},
		"ranges":[{"events":[{"introduced":"0"},{"fixed":"1.25.4"},{"introduced":"1.26.0-rc.1"},{"fixed":"1.26.9"},{"introduced":"1.27.0-0"},{"fixed":"1.27.0-rc.2"}]}]}]}`
	moduleEntry = `{"id":"GO-2026-0002","modified":"2026-01-03T00:00:00Z","aliases":["CVE-2026-1"],"affected":[
		{"package":{"name":"example.org/m"},"ranges":[{"events":[{"introduced":"0"}]}]},
		{"package":{"name":"example.org/m"},"ranges":[{"events":[{"introduced":"0"}]}]}]}`
	withdrawnEntry = `{"id":"GO-2026-0003","modified":"2026-01-04T00:00:00Z","withdrawn":"2026-01-05T00:00:00Z","affected":[{"package":{"name":"example.org/w"}}]}`
)

func buildDB(t *testing.T) string {
	t.Helper()
	osv, out := t.TempDir(), t.TempDir()
	for id, text := range map[string]string{"GO-2026-0001": stdlibEntry, "GO-2026-0002": moduleEntry, "GO-2026-0003": withdrawnEntry} {
		if err := os.WriteFile(filepath.Join(osv, id+".json"), []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	n, err := layOut(osv, out)
	if err != nil || n != 2 {
		t.Fatalf("layOut = %d, %v, want 2 entries without the withdrawn one", n, err)
	}
	return out
}

func TestLayOutIndexesEntriesOncePerModule(t *testing.T) {
	db := buildDB(t)
	for name, want := range map[string]string{
		"db":      `{"modified":"2026-01-03T00:00:00Z"}`,
		"modules": `[{"path":"example.org/m","vulns":[{"id":"GO-2026-0002","modified":"2026-01-03T00:00:00Z"}]},{"path":"stdlib","vulns":[{"id":"GO-2026-0001","modified":"2026-01-02T00:00:00Z"}]}]`,
		"vulns":   `[{"id":"GO-2026-0001","modified":"2026-01-02T00:00:00Z"},{"id":"GO-2026-0002","modified":"2026-01-03T00:00:00Z","aliases":["CVE-2026-1"]}]`,
	} {
		got, err := os.ReadFile(filepath.Join(db, "index", name+".json"))
		if err != nil || string(got) != want {
			t.Errorf("%s index\n got %s, %v\nwant %s", name, got, err, want)
		}
	}
	if got, err := os.ReadFile(filepath.Join(db, "ID", "GO-2026-0002.json")); err != nil || string(got) != moduleEntry {
		t.Errorf("entry copied as %s, %v", got, err)
	}
}

func TestCheckFailsOnAnythingUnsettled(t *testing.T) {
	const (
		old      = `{"config":{"go_version":"go1.26.8"}}`
		new      = `{"config":{"go_version":"go1.26.9"}}`
		reachStd = `{"finding":{"osv":"GO-2026-0001","fixed_version":"v1.26.9","trace":[{"module":"stdlib","version":"v1.26.8","package":"net","function":"Dial"}]}}`
		reachM   = `{"finding":{"osv":"GO-2026-0002","trace":[{"module":"example.org/m","version":"v1.0.0","package":"example.org/m","receiver":"T","function":"F"}]}}`
		present  = `{"finding":{"osv":"GO-2026-0002","trace":[{"module":"example.org/m","version":"v1.0.0","package":"example.org/m"}]}}`
	)
	db := buildDB(t)
	for _, c := range []struct{ name, allow, findings, want string }{
		{"nothing found", "# none\n", old, ""},
		{"only present, not reached", "", old + present, ""},
		{"reached and not listed", "", old + reachM, "GO-2026-0002 is reached and not listed: example.org/m.T.F of example.org/m v1.0.0, no fixed version"},
		{"reached and listed", "GO-2026-0002 not built in\n", old + present + reachM, ""},
		{"listed, not reached", "GO-2026-0002 not built in\n", old + present, "GO-2026-0002 is listed and no longer found"},
		{"library fault reached and listed", "GO-2026-0001 waits for the toolchain\n", old + reachStd, ""},
		{"library fault no longer reached", "GO-2026-0001 waits for the toolchain\n", old, "GO-2026-0001 is listed and no longer found"},
		{"library fault fixed by a newer toolchain", "GO-2026-0001 waits for the toolchain\n", new, ""},
		{"listed and unknown", "GO-2026-9999 mistyped\n", old, "the database does not know it"},
		{"no reason", "GO-2026-0002\n", old, "found no reason"},
		{"not an ID", "CVE-2026-1 reason\n", old, `found "CVE-2026-1"`},
		{"listed twice", "GO-2026-0002 a\nGO-2026-0002 b\n", old, "listed twice"},
		{"no scan", "", "", "found no scan"},
		{"not JSON", "", "panic: no", "read findings"},
	} {
		t.Run(c.name, func(t *testing.T) {
			allow := filepath.Join(t.TempDir(), "allow.txt")
			if err := os.WriteFile(allow, []byte(c.allow), 0o644); err != nil {
				t.Fatal(err)
			}
			var stdout, stderr strings.Builder
			status := run([]string{"check", "-db", db, "-allow", allow}, strings.NewReader(c.findings), &stdout, &stderr)
			if c.want == "" {
				if status != 0 {
					t.Fatalf("status %d, want 0: %s", status, stderr.String())
				}
				return
			}
			if status != 1 || !strings.Contains(stderr.String(), c.want) {
				t.Errorf("status %d, stderr %q, want 1 and %q", status, stderr.String(), c.want)
			}
		})
	}
}

func TestGoVersionOfReadsPreReleases(t *testing.T) {
	for semantic, want := range map[string]string{"1.26.9": "go1.26.9", "1.27.0-rc.2": "go1.27rc2", "1.27.0-0": "go1.27"} {
		if got := goVersionOf(semantic); got != want {
			t.Errorf("goVersionOf(%q) = %q, want %q", semantic, got, want)
		}
	}
}
