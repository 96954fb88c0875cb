package main

import (
	"encoding/json"
	"path/filepath"
	"strings"
	"testing"

	"deltamoor/api/demo"
	"deltamoor/api/rest"
	"deltamoor/store"
)

func TestCompareSetsDeltasOfOneReportAgainstEachOther(t *testing.T) {
	dir := t.TempDir()
	place, err := demo.Open(t.Context(), store.Options{Database: filepath.Join(dir, "deltamoor.db")}, demoSeed)
	if err != nil {
		t.Fatal(err)
	}
	s, err := demo.Build(t.Context(), place.Registry, place.Clock, demoSeed)
	if err != nil {
		t.Fatal(err)
	}
	if err := place.Close(); err != nil {
		t.Fatal(err)
	}
	var codes []string
	for _, l := range s.Reports[0].Lines {
		if l.Scale == s.Reports[0].Lines[0].Scale {
			codes = append(codes, store.FormatCode(l.Code))
		}
	}
	if len(codes) < 3 {
		t.Fatalf("the demo's first report has %d deltas on its first scale", len(codes))
	}
	status, stdout, stderr := call(t.Context(), nil, "", "compare", "--data", dir, "--json", codes[0], codes[1])
	var c rest.Comparison
	if err := json.Unmarshal([]byte(stdout), &c); status != statusDone || err != nil {
		t.Fatalf("status %d, %v: %s", status, err, stderr)
	}
	if c.Pair == nil || !(c.Pair.U < c.Pair.RootSumOfSquares) || c.Pair.Verdict == "" {
		t.Errorf("two samples of one session: %+v", c.Pair)
	}
	status, stdout, _ = call(t.Context(), nil, "", "compare", "--data", dir, codes[0], strings.ToLower(codes[1]))
	if status != statusDone || !strings.Contains(stdout, "u, shared sources cancelled") || !strings.Contains(stdout, "coverage probability of 95 %") {
		t.Errorf("status %d:\n%s", status, stdout)
	}
	status, stdout, _ = call(t.Context(), nil, "", append([]string{"compare", "--data", dir}, codes[:3]...)...)
	if status != statusDone || !strings.Contains(stdout, "covariance (‰²)") || !strings.Contains(stdout, "of it what all share") {
		t.Errorf("status %d:\n%s", status, stdout)
	}
}
