package calib

import (
	"go/ast"
	"go/parser"
	"go/token"
	"go/types"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// checked are the packages whose numbers must have equal bits everywhere.
var checked = []string{".", "uncertain", "adjust", "correct", "scale"}

func sources(t *testing.T, dir string) (*token.FileSet, []*ast.File) {
	t.Helper()
	names, err := filepath.Glob(filepath.Join(dir, "*.go"))
	if err != nil || len(names) == 0 {
		t.Fatalf("no sources in %s: %v", dir, err)
	}
	set := token.NewFileSet()
	var files []*ast.File
	for _, name := range names {
		if strings.HasSuffix(name, "_test.go") {
			continue
		}
		f, err := parser.ParseFile(set, name, nil, parser.SkipObjectResolution)
		if err != nil {
			t.Fatal(err)
		}
		files = append(files, f)
	}
	return set, files
}

// typesOf resolves what can be resolved inside the package; expressions that
// involve other packages have no type and count as floating point.
func typesOf(set *token.FileSet, files []*ast.File) *types.Info {
	info := &types.Info{Types: map[ast.Expr]types.TypeAndValue{}}
	config := types.Config{Error: func(error) {}, Importer: nothing{}}
	config.Check("p", set, files, info) //nolint:errcheck // imports are missing on purpose
	return info
}

type nothing struct{}

func (nothing) Import(string) (*types.Package, error) { return nil, os.ErrNotExist }

func floating(info *types.Info, e ast.Expr) bool {
	v, ok := info.Types[e]
	if !ok || v.Type == nil || v.Type == types.Typ[types.Invalid] {
		return true
	}
	if v.Value != nil {
		return false // a constant is exact
	}
	b, ok := v.Type.Underlying().(*types.Basic)
	return ok && b.Info()&types.IsFloat != 0
}

func unparen(e ast.Expr) ast.Expr {
	for {
		p, ok := e.(*ast.ParenExpr)
		if !ok {
			return e
		}
		e = p.X
	}
}

func isProduct(e ast.Expr) bool {
	b, ok := unparen(e).(*ast.BinaryExpr)
	return ok && b.Op == token.MUL
}

// Go may fuse x*y + z into one operation, also when the product was assigned
// to a variable first, unless the product is rounded by float64(x*y). So no
// product is an operand of a sum, and none is assigned, returned, passed or
// stored unrounded where a sum could reach it.
func TestNoSumIsOpenToFusing(t *testing.T) {
	for _, dir := range checked {
		set, files := sources(t, dir)
		info := typesOf(set, files)
		complain := func(e ast.Expr, what string) {
			if isProduct(e) && floating(info, unparen(e)) {
				t.Errorf("%s: product %s without float64(…)", set.Position(e.Pos()), what)
			}
		}
		for _, f := range files {
			ast.Inspect(f, func(n ast.Node) bool {
				switch n := n.(type) {
				case *ast.BinaryExpr:
					if n.Op == token.ADD || n.Op == token.SUB {
						complain(n.X, "in a sum")
						complain(n.Y, "in a sum")
					}
				case *ast.AssignStmt:
					if n.Tok == token.MUL_ASSIGN && floating(info, n.Lhs[0]) {
						t.Errorf("%s: *= leaves its product unrounded", set.Position(n.Pos()))
					}
					for _, e := range n.Rhs {
						complain(e, "assigned")
					}
				case *ast.ReturnStmt:
					for _, e := range n.Results {
						complain(e, "returned")
					}
				case *ast.UnaryExpr:
					if n.Op == token.SUB {
						complain(n.X, "negated")
					}
				case *ast.KeyValueExpr:
					complain(n.Value, "stored")
				}
				return true
			})
		}
	}
}

// What is not the same on every architecture, or not pure, stays out.
func TestForbiddenCalls(t *testing.T) {
	forbidden := map[string]string{
		"math.Log": "", "math.Log10": "", "math.Log2": "", "math.Log1p": "", "math.Exp": "", "math.Exp2": "", "math.Expm1": "",
		"math.Pow": "", "math.Hypot": "", "math.Cbrt": "", "math.Sin": "", "math.Cos": "", "math.Tan": "",
		"time.Now": "", "rand.Float64": "", "rand.NormFloat64": "", "os.Getenv": "",
	}
	for _, dir := range checked {
		set, files := sources(t, dir)
		for _, f := range files {
			for _, i := range f.Imports {
				switch path := strings.Trim(i.Path.Value, `"`); {
				case path == "time", path == "context", path == "math/rand", path == "math/rand/v2", path == "os", path == "log", path == "gonum.org/v1/gonum/mat":
					t.Errorf("%s imports %s", set.Position(i.Pos()), path)
				}
			}
			ast.Inspect(f, func(n ast.Node) bool {
				if s, ok := n.(*ast.SelectorExpr); ok {
					if x, ok := s.X.(*ast.Ident); ok {
						if _, bad := forbidden[x.Name+"."+s.Sel.Name]; bad {
							t.Errorf("%s: %s.%s", set.Position(n.Pos()), x.Name, s.Sel.Name)
						}
					}
				}
				return true
			})
		}
	}
}

// Files past 600 lines are split by meaning.
func TestFilesAreShort(t *testing.T) {
	for _, dir := range checked {
		set, files := sources(t, dir)
		for _, f := range files {
			if n := set.Position(f.End()).Line; n > 600 {
				t.Errorf("%s has %d lines", set.Position(f.Pos()).Filename, n)
			}
		}
	}
}
