package main

import (
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// The dependency rule. Imports point one way:
//
//	calib ← store ← api/registry ← api/{exchange, figure, auth, demo, rest, web} ← api ← cmd
//
// and each folder may name in this module what the table says, nothing else.
// An entry that ends in /... stands for the folder and everything below it.
var mayImport = []struct {
	folder string
	ours   []string
}{
	// Within calib, three children are below the root package and never name it
	// (among themselves the compiler forbids circles); the others are above it.
	{"calib/uncertain", calibFoundations},
	{"calib/adjust", calibFoundations},
	{"calib/scale", calibFoundations},
	{"calib", calibFoundations},
	{"calib/...", []string{"calib/..."}},

	{"migrations", nil},
	{"store/ledger", nil}, // so that a bundle can be checked without a store
	{"store", []string{"calib/...", "migrations", "store/ledger"}},
	{"store/storetest", []string{"calib/...", "migrations", "store", "store/ledger"}},

	{"api/registry", belowRegistry},
	{"api/exchange", belowSiblings},
	{"api/figure", belowSiblings},
	{"api/auth", belowSiblings},
	{"api/demo", append([]string{"api/exchange"}, belowSiblings...)},
	{"api/rest", append([]string{"api/exchange", "api/figure", "api/auth", "api/demo", "api/web"}, belowSiblings...)},
	{"api/web", append([]string{"api/exchange", "api/figure", "api/auth", "api/demo", "api/rest"}, belowSiblings...)},
	{"api", append([]string{"api/exchange", "api/figure", "api/auth", "api/demo", "api/rest", "api/web"}, belowSiblings...)},

	{"cmd/...", []string{"api/...", "calib/...", "migrations", "store", "store/ledger"}},
	{".ci/...", nil},
}

var (
	calibFoundations = []string{"calib/uncertain", "calib/adjust", "calib/scale"}

	belowRegistry = []string{"calib/...", "migrations", "store", "store/ledger"}
	belowSiblings = append([]string{"api/registry"}, belowRegistry...)
)

// Tests obey the same table, and may name the package they test from outside,
// the store's test helper, and what is listed here for their folder.
var testsMayImport = map[string][]string{
	"":           {"store/storetest"},
	"migrations": {"store"}, // both engines end with the same tables: needs a store to open
}

// What others wrote, where it matters who names it.
var (
	// calib and its children compute: the standard library and gonum alone, and
	// of the standard library nothing that reaches the world outside.
	calibOutside     = []string{"gonum.org/v1/gonum/..."}
	calibTestOutside = []string{"gonum.org/v1/gonum/...", "github.com/google/go-cmp/...", "pgregory.net/rapid"}
	calibForbidden   = []string{"context", "crypto/rand", "database/...", "log/...", "math/rand", "net/...", "os/...", "syscall", "unsafe"}

	// HTTP stays in the packages that answer it.
	httpPackages = []string{"net/http/...", "github.com/labstack/...", "github.com/danielgtaylor/huma/..."}
	httpFolders  = []string{"api", "api/auth", "api/rest", "api/web", "cmd/..."}
)

// A sourceFile is a parsed Go file of the module.
type sourceFile struct {
	name   string // from the module's root, with slashes
	folder string
	test   bool
	syntax *ast.File
}

const modulePath = "deltamoor"

// moduleRoot finds the module's root above the folder the tests run in.
func moduleRoot(t testing.TB) string {
	t.Helper()
	dir, err := os.Getwd()
	if err != nil {
		t.Fatal(err)
	}
	for {
		if _, err := os.Stat(filepath.Join(dir, "go.mod")); err == nil {
			return dir
		}
		up := filepath.Dir(dir)
		if up == dir {
			t.Fatal("found no go.mod above the test's folder")
		}
		dir = up
	}
}

// goFiles parses every Go file of the module, whatever its build constraints.
func goFiles(t testing.TB) (*token.FileSet, []sourceFile) {
	t.Helper()
	root := moduleRoot(t)
	set := token.NewFileSet()
	var files []sourceFile
	err := filepath.WalkDir(root, func(name string, entry fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		if entry.IsDir() {
			if base := entry.Name(); base == "testdata" || base == ".git" {
				return filepath.SkipDir
			}
			return nil
		}
		if filepath.Ext(name) != ".go" {
			return nil
		}
		text, err := os.ReadFile(name)
		if err != nil {
			return err
		}
		local, err := filepath.Rel(root, name)
		if err != nil {
			return err
		}
		local = filepath.ToSlash(local)
		syntax, err := parser.ParseFile(set, local, text, parser.SkipObjectResolution)
		if err != nil {
			return err
		}
		files = append(files, sourceFile{local, path.Dir(local), strings.HasSuffix(local, "_test.go"), syntax})
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if len(files) == 0 {
		t.Fatal("found no Go files")
	}
	return set, files
}

// within reports whether a path is named by one of the patterns.
func within(p string, patterns []string) bool {
	return slices.ContainsFunc(patterns, func(pattern string) bool {
		above, deep := strings.CutSuffix(pattern, "/...")
		return p == above || deep && strings.HasPrefix(p, above+"/")
	})
}

// importFault says what is wrong with one import, or "" when it is allowed.
func importFault(folder, imported string, test bool) string {
	if ours, ok := strings.CutPrefix(imported, modulePath+"/"); ok {
		if test && (ours == folder || within(ours, testsMayImport[""]) || within(ours, testsMayImport[folder])) {
			return ""
		}
		for _, rule := range mayImport {
			if !within(folder, []string{rule.folder}) {
				continue
			}
			if within(ours, rule.ours) {
				return ""
			}
			return fmt.Sprintf("%s may import of this module only %v", folder, rule.ours)
		}
		return fmt.Sprintf("%s is not in the table of mayImport: say there what it may import", folder)
	}
	foreign := strings.Contains(strings.Split(imported, "/")[0], ".")
	if within(folder, []string{"calib/..."}) {
		outside := calibOutside
		if test {
			outside = calibTestOutside
		} else if within(imported, calibForbidden) {
			return "calib computes: no context, no random source of its own, no files, no network, no log"
		}
		if foreign && !within(imported, outside) {
			return fmt.Sprintf("calib and its children import the standard library and %v", outside)
		}
	}
	if within(folder, []string{".ci/..."}) && foreign {
		return "the helpers of .ci import the standard library alone"
	}
	if within(imported, httpPackages) && !within(folder, httpFolders) {
		return fmt.Sprintf("HTTP stays in %v", httpFolders)
	}
	return ""
}

func TestImportsPointOneWay(t *testing.T) {
	set, files := goFiles(t)
	for _, file := range files {
		for _, spec := range file.syntax.Imports {
			imported, err := strconv.Unquote(spec.Path.Value)
			if err != nil {
				t.Fatal(err)
			}
			if fault := importFault(file.folder, imported, file.test); fault != "" {
				t.Errorf("%s imports %s: %s", set.Position(spec.Pos()), imported, fault)
			}
		}
	}
}

// The rule is only worth something if it refuses: each edge here is one that
// the layout forbids, or one that it allows.
func TestImportRuleRefusesWhatTheLayoutForbids(t *testing.T) {
	for _, c := range []struct {
		folder, imported string
		test, allowed    bool
	}{
		{"calib", "deltamoor/calib/uncertain", false, true},
		{"calib/uncertain", "deltamoor/calib", false, false},
		{"calib/adjust", "deltamoor/calib", false, false},
		{"calib/scale", "deltamoor/calib", true, false},
		{"calib/assign", "deltamoor/calib", false, true},
		{"calib", "deltamoor/calib/assign", false, false},
		{"calib", "deltamoor/store", false, false},
		{"calib/control", "gonum.org/v1/gonum/stat/distuv", false, true},
		{"calib", "github.com/google/go-cmp/cmp", false, false},
		{"calib", "github.com/google/go-cmp/cmp", true, true},
		{"calib", "os", false, false},
		{"calib", "os", true, true},
		{"calib/montecarlo", "math/rand/v2", false, true},
		{"store", "deltamoor/calib/uncertain", false, true},
		{"store", "deltamoor/migrations", false, true},
		{"store", "deltamoor/api/registry", false, false},
		{"store", "deltamoor/api/registry", true, false},
		{"store", "deltamoor/store/storetest", true, true},
		{"store", "deltamoor/store/storetest", false, false},
		{"store/ledger", "deltamoor/store", false, false},
		{"store/ledger", "deltamoor/calib", false, false},
		{"store/ledger", "golang.org/x/mod/sumdb/tlog", false, true},
		{"api/registry", "deltamoor/store/ledger", false, true},
		{"api/registry", "deltamoor/api/exchange", false, false},
		{"api/registry", "net/http", false, false},
		{"api/exchange", "deltamoor/api/registry", false, true},
		{"api/exchange", "deltamoor/api/figure", false, false},
		{"api/figure", "net/http/httptest", false, false},
		{"api/demo", "deltamoor/api/exchange", false, true},
		{"api/demo", "deltamoor/api/rest", false, false},
		{"api/auth", "deltamoor/api/web", false, false},
		{"api/web", "deltamoor/api/figure", false, true},
		{"api/web", "deltamoor/api", false, false},
		{"api/rest", "github.com/labstack/echo/v4", false, true},
		{"api", "deltamoor/api/demo", true, true},
		{"api", "deltamoor/cmd/deltamoor", false, false},
		{"cmd/deltamoor", "deltamoor/api", false, true},
		{"cmd/deltamoor", "deltamoor/store/storetest", false, false},
		{"api/newcomer", "deltamoor/store", false, false},
	} {
		if fault := importFault(c.folder, c.imported, c.test); (fault == "") != c.allowed {
			t.Errorf("%s imports %s (test %v): fault %q, want allowed %v", c.folder, c.imported, c.test, fault, c.allowed)
		}
	}
}

// calib gives the same bits for the same input: it reads no clock, draws from
// no source but the one it is given, and has no number narrower than float64.
func TestCalibReadsNoClockAndNoGlobalSource(t *testing.T) {
	forbidden := map[string][]string{
		"time":         {"Now", "Since", "Until", "After", "Tick", "NewTimer", "NewTicker", "Sleep"},
		"math/rand/v2": {"Float64", "Float32", "NormFloat64", "ExpFloat64", "Int", "IntN", "Int64", "Int64N", "Uint64", "Uint64N", "Uint32", "Perm", "Shuffle", "N"},
	}
	set, files := goFiles(t)
	for _, file := range files {
		if file.test || !within(file.folder, []string{"calib/..."}) {
			continue
		}
		names := map[string]string{} // as the file calls the package → its path
		for _, spec := range file.syntax.Imports {
			imported, err := strconv.Unquote(spec.Path.Value)
			if err != nil {
				t.Fatal(err)
			}
			name := strings.TrimSuffix(imported, "/v2")
			name = path.Base(name)
			if spec.Name != nil {
				name = spec.Name.Name
			}
			names[name] = imported
		}
		ast.Inspect(file.syntax, func(node ast.Node) bool {
			switch node := node.(type) {
			case *ast.SelectorExpr:
				if x, ok := node.X.(*ast.Ident); ok && slices.Contains(forbidden[names[x.Name]], node.Sel.Name) {
					t.Errorf("%s: %s.%s: expected the time or the random source as an argument", set.Position(node.Pos()), x.Name, node.Sel.Name)
				}
			case *ast.Ident:
				if node.Name == "float32" {
					t.Errorf("%s: found float32, expected float64", set.Position(node.Pos()))
				}
			}
			return true
		})
	}
}
