package store_test

import (
	"go/ast"
	"go/parser"
	"go/token"
	"os"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"testing"
)

// withoutLaboratory are the statements that may do without, and why.
var withoutLaboratory = map[string]string{
	"selectReported":       "codes are unique in the registry; the caller checks the laboratory afterwards",
	"selectLaboratories":   "tells the names of laboratories and nothing else",
	"createMigrationLease": "the lease for migrating, before there are laboratories",
	"takeMigrationLease":   "the lease for migrating, before there are laboratories",
	"renewMigrationLease":  "the lease for migrating, before there are laboratories",
	"dropMigrationLease":   "the lease for migrating, before there are laboratories",
	"readSchema":           "the migrations' own table",
	"selectRebuilds":       "what a migration left to fill, before anybody reads",
	"hasTable":             "the engine's own catalogue",
	// Pieces of statements, complete only with what stands beside them.
	"versionColumns": "columns", "resultColumns": "columns", "lineColumns": "columns", "jobColumns": "columns",
}

// What shows that a statement is confined: a condition on laboratory, or, in an
// insert, laboratory as the first column.
var (
	confined = regexp.MustCompile(`(?is)(where|on|and)\s+(\w+\.)?laboratory\s*=\s*(\$1|\w+\.laboratory)`)
	inserts  = regexp.MustCompile(`(?is)^\s*insert\s+into\s+\w+\s*\(\s*laboratory\b`)
	verbs    = regexp.MustCompile(`^[\s)]*(SELECT|INSERT|UPDATE|DELETE|WITH|CREATE)\s`)
)

func TestEveryStatementIsConfinedToALaboratory(t *testing.T) {
	files, err := filepath.Glob("*.go")
	if err != nil {
		t.Fatal(err)
	}
	statements := 0
	for _, file := range files {
		if strings.HasSuffix(file, "_test.go") {
			continue
		}
		text, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		fset := token.NewFileSet()
		parsed, err := parser.ParseFile(fset, file, text, 0)
		if err != nil {
			t.Fatal(err)
		}
		ast.Inspect(parsed, func(n ast.Node) bool {
			name, values := "", []ast.Expr(nil)
			switch x := n.(type) {
			case *ast.ValueSpec:
				for i, id := range x.Names {
					if i < len(x.Values) {
						statements += checkStatement(t, fset, id.Name, x.Values[i])
					}
				}
				return false
			case *ast.KeyValueExpr:
				if id, ok := x.Key.(*ast.Ident); ok {
					name, values = id.Name, []ast.Expr{x.Value}
				}
			case *ast.CallExpr:
				values = x.Args
			case *ast.AssignStmt:
				values = x.Rhs
			case *ast.CompositeLit:
				values = x.Elts
			case *ast.ReturnStmt:
				values = x.Results
			}
			for _, v := range values {
				statements += checkStatement(t, fset, name, v)
			}
			return true
		})
	}
	t.Logf("%d statements", statements)
	if statements < 60 {
		t.Errorf("found %d statements, want the store's 60 and more: the test looks in the wrong place", statements)
	}
}

// literal joins the constant text of an expression.
func literal(e ast.Expr) string {
	switch x := e.(type) {
	case *ast.BasicLit:
		text, _ := strconv.Unquote(x.Value)
		return text
	case *ast.BinaryExpr:
		return literal(x.X) + literal(x.Y)
	case *ast.CallExpr: // fmt.Sprintf
		text := ""
		for _, a := range x.Args {
			text += literal(a)
		}
		return text
	}
	return ""
}

func checkStatement(t *testing.T, fset *token.FileSet, name string, e ast.Expr) int {
	t.Helper()
	if list, ok := e.(*ast.CompositeLit); ok { // such as the list of orphans
		n := 0
		for _, x := range list.Elts {
			n += checkStatement(t, fset, name, x)
		}
		return n
	}
	text := literal(e)
	if !verbs.MatchString(text) || withoutLaboratory[name] != "" {
		return 0
	}
	if name == "wantedRows" {
		return 0 // the beginning of statements that join on laboratory, checked by their end
	}
	if strings.HasPrefix(text, "INSERT INTO ") && !strings.Contains(text, "(lab") {
		return 0 // built by table.statement, see the test of the tables
	}
	if !confined.MatchString(text) && !inserts.MatchString(text) {
		t.Errorf("%s: statement %s is not confined to a laboratory:\n%s", fset.Position(e.Pos()), name, text)
	}
	return 1
}

// Rows are inserted in bulk by lists of columns; and every key begins with the
// laboratory, in every table of both engines but those named.
func TestEveryKeyBeginsWithTheLaboratory(t *testing.T) {
	text, err := os.ReadFile("../migrations/sqlite/0001_history.sql")
	if err != nil {
		t.Fatal(err)
	}
	tables := regexp.MustCompile(`(?s)CREATE TABLE (\w+) \((.*?)\n\)`).FindAllStringSubmatch(string(text), -1)
	if len(tables) != 21 {
		t.Errorf("found %d tables, want 21", len(tables))
	}
	for _, m := range tables {
		first := strings.Fields(m[2])[0]
		if key := regexp.MustCompile(`PRIMARY KEY \(laboratory\b`); m[1] == "reported" {
			continue
		} else if first != "laboratory" || !key.MatchString(m[2]) && !strings.Contains(m[2], "laboratory  TEXT    NOT NULL PRIMARY KEY") {
			t.Errorf("the key of %s does not begin with the laboratory", m[1])
		}
	}
	for _, m := range regexp.MustCompile(`CREATE (?:UNIQUE )?INDEX (\w+) ON \w+ \((\w+)`).FindAllStringSubmatch(string(text), -1) {
		if m[2] != "laboratory" {
			t.Errorf("index %s begins with %s", m[1], m[2])
		}
	}
}
