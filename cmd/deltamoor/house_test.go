package main

import (
	"os"
	"slices"
	"testing"
)

// The module's root stays readable at one glance: what is not listed here
// belongs into one of the folders.
func TestRootHoldsNothingBeyondTheLayout(t *testing.T) {
	layout := []string{
		"api", "calib", "cmd", "migrations", "store", "testdata",
		"go.mod", "go.sum", "DEVELOPERS.md", "LICENSE", "README.md",
		".ci", ".gitattributes", ".gitignore",
	}
	// What git, a build or a trial may leave in a working checkout; .gitignore has the same.
	passing := []string{".git", "deltamoor", "deltamoor-data"}

	entries, err := os.ReadDir(moduleRoot(t))
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, entry := range entries {
		names = append(names, entry.Name())
		if !slices.Contains(layout, entry.Name()) && !slices.Contains(passing, entry.Name()) {
			t.Errorf("%s: found in the module's root, expected only %v", entry.Name(), layout)
		}
	}
	for _, name := range layout {
		if !slices.Contains(names, name) {
			t.Errorf("%s: missing from the module's root", name)
		}
	}
}
