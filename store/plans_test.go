package store

import (
	"context"
	"strings"
	"testing"
)

// TestLookupsByKeyUseTheKey reads SQLite's plans of the statements that run for
// every version: without statistics a planner must not be led away from the key.
func TestLookupsByKeyUseTheKey(t *testing.T) {
	s, err := Open(context.Background(), Options{Database: t.TempDir(), Migrate: true})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	edges := derivedTables[0]
	for name, c := range map[string]struct{ statement, want string }{
		"selectVersion":           {selectVersion, "laboratory=? AND kind=? AND code=? AND version=?"},
		"selectNewest":            {selectNewest, "laboratory=? AND kind=? AND code=?"},
		"selectNewestHash":        {selectNewestHash, "laboratory=? AND kind=? AND code=?"},
		"selectVersions":          {selectVersions, "laboratory=? AND kind=? AND code=? AND version>?"},
		"selectHistory":           {selectHistory, "laboratory=? AND kind=? AND code=?"},
		"selectDecisions":         {selectDecisions + list(3, 2) + orderDecisions, "laboratory=? AND kind=? AND code=?"},
		"selectHashes":            {s.engine.withWanted + selectHashes, "laboratory=? AND kind=? AND code=? AND version=?"},
		"selectHistories":         {s.engine.withWanted + selectHistories, "laboratory=? AND kind=? AND code=?"},
		"edges of versions":       {s.engine.withWanted + derivedOf(edges.table, edges.kind, edges.code, edges.version, ""), "laboratory=? AND from_kind=? AND from_code=? AND from_version=?"},
		"selectInForce":           {selectInForce, "laboratory=? AND kind=? AND code=? AND version=?"},
		"selectRecent":            {selectRecent, "versions_recorded (laboratory=? AND <expr>=? AND recorded_at<?"},
		"selectRecentOfAll":       {selectRecentOfAll, "versions_position (laboratory=? AND position<?"},
		"selectEdgesTo":           {selectEdgesTo, "laboratory=? AND to_laboratory=? AND to_kind=? AND to_code=?"},
		"selectResultsOfScale":    {selectResultsOfScale, "results_scale (laboratory=? AND scale=? AND measured_at>?"},
		"selectResultsOfSubject":  {selectResultsOfSubject, "results_subject (laboratory=? AND subject=? AND measured_at>?"},
		"selectNamed":             {selectNamed, "laboratory=? AND kind=? AND name=?"},
		"selectReadings":          {selectReadings, "laboratory=? AND session=? AND number>?"},
		"selectBlocks":            {s.engine.withWanted + selectBlocks, "laboratory=? AND calibration=? AND version=?"},
		"selectAnchors":           {s.engine.withWanted + selectAnchors, "laboratory=? AND from_kind=? AND from_code=? AND from_version=? AND part=?"},
		"selectVersionsOf":        {s.engine.withWanted + selectVersionsOf, "laboratory=? AND kind=? AND code=? AND version=?"},
		"selectDraftsOf":          {selectDraftsOf, "laboratory=? AND from_kind=? AND from_code=?"},
		"selectReportsOfRevision": {selectReportsOfRevision, "laboratory=? AND to_laboratory=? AND to_kind=? AND to_code=?"},
		"countJudged":             {s.engine.withWanted + countJudged, "laboratory=? AND to_laboratory=? AND to_kind=? AND to_code=?"},
		"selectLinesOfReport":     {selectLinesOfReport, "laboratory=? AND report=? AND version=?"},
	} {
		plan := planOf(t, s, c.statement)
		if !strings.Contains(plan, c.want) {
			t.Errorf("%s does not search by %s:\n%s", name, c.want, plan)
		}
		for line := range strings.Lines(plan) {
			if strings.HasPrefix(line, "SCAN ") && !strings.Contains(line, "VIRTUAL TABLE") && !strings.HasPrefix(line, "SCAN w") {
				t.Errorf("%s reads a whole table:\n%s", name, plan)
			}
		}
	}
}

func planOf(t *testing.T, s *Store, statement string) string {
	t.Helper()
	args := make([]any, strings.Count(statement, "$"))
	for n := len(args); n >= 0; n-- { // parameters may repeat
		rows, err := s.read.Query("EXPLAIN QUERY PLAN "+statement, args[:n]...)
		if err != nil {
			continue
		}
		defer rows.Close()
		plan := ""
		for rows.Next() {
			var id, parent, unused int
			var detail string
			if err := rows.Scan(&id, &parent, &unused, &detail); err != nil {
				t.Fatal(err)
			}
			plan += detail + "\n"
		}
		if err := rows.Err(); err != nil {
			t.Fatal(err)
		}
		return plan
	}
	t.Fatalf("no plan for %s", statement)
	return ""
}

// What rests on a version is walked from the to side, and each version found is
// read by its key.
func TestWalkUpwardsUsesTheIndexOfEdges(t *testing.T) {
	s, err := Open(context.Background(), Options{Database: t.TempDir(), Migrate: true})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	plan := planOf(t, s, strings.Replace(s.engine.withWanted, "wanted", "RECURSIVE wanted", 1)+selectAffected)
	for _, want := range []string{"edges_to (laboratory=? AND to_laboratory=? AND to_kind=? AND to_code=?", "versions_1 (laboratory=? AND kind=? AND code=? AND version=?)", "PRIMARY KEY (laboratory=? AND kind=? AND code=?)"} {
		if !strings.Contains(plan, want) {
			t.Errorf("the plan does not search by %s:\n%s", want, plan)
		}
	}
}
