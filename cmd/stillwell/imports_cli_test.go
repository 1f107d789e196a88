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

// module is the root of the source tree, seen from this package.
const module = "../.."

// floors lists, for each top folder, which others its files may import.
var floors = map[string][]string{
	"cmd":    {"cmd", "config", "stream", "sinks", "online"},
	"config": {"config", "online"},
	"stream": {"stream", "online"},
	"sinks":  {"sinks", "online"},
	"online": {"online"},
}

// impure are packages of the standard library that the statistics must do without, and
// why. A package stands for those below it too.
var impure = map[string]string{
	"context":       "nothing here waits for anything",
	"crypto/rand":   "the same events must give the same bytes",
	"database/sql":  "results go out as values",
	"expvar":        "a global that changes",
	"flag":          "settings come in a plan",
	"hash/maphash":  "its seeds differ from process to process",
	"io/fs":         "no input, no output",
	"io/ioutil":     "no input, no output",
	"log":           "nothing is logged; what is to be told is a value",
	"math/rand":     "the same events must give the same bytes",
	"net":           "no input, no output",
	"os":            "no input, no output",
	"path/filepath": "no input, no output",
	"runtime":       "numbers must not depend on cores or on the collector",
	"sync":          "no goroutine, so nothing to guard",
	"syscall":       "no input, no output",
	"testing":       "for tests only",
}

// clock is what of package time reads or waits for the wall clock.
var clock = []string{"Now", "Since", "Until", "Sleep", "After", "AfterFunc", "Tick", "NewTimer", "NewTicker", "Local", "LoadLocation"}

// grammar are the parts of the expression library that the statistics use: its parser,
// never what runs expressions.
var grammar = []string{"ast", "builtin", "conf", "file", "parser", "parser/lexer", "parser/utils"}

// breaches tells what in a source file breaks the rules of its folder.
func breaches(name string, source any) ([]string, error) {
	set := token.NewFileSet()
	f, err := parser.ParseFile(set, name, source, parser.SkipObjectResolution)
	if err != nil {
		return nil, err
	}
	var out []string
	fault := func(at token.Pos, format string, args ...any) {
		out = append(out, fmt.Sprintf("%s: ", set.Position(at))+fmt.Sprintf(format, args...))
	}
	folder := path.Dir(filepath.ToSlash(name))
	floor, _, _ := strings.Cut(folder, "/")
	pure := floor == "online" && !strings.HasSuffix(name, "_test.go")
	for _, spec := range f.Imports {
		imp, err := strconv.Unquote(spec.Path.Value)
		if err != nil {
			return nil, err
		}
		if below, ours := strings.CutPrefix(imp, "stillwell/"); ours {
			to, _, _ := strings.Cut(below, "/")
			if !slices.Contains(floors[floor], to) {
				fault(spec.Pos(), "%s must not import %s: imports run cmd, then config, stream and sinks side by side, then online", floor, imp)
			}
			continue
		}
		if pure {
			if why := forbidden(folder, imp); why != "" {
				fault(spec.Pos(), "online must not import %s: %s", imp, why)
			}
		}
		if pure && imp == "time" && spec.Name != nil {
			fault(spec.Pos(), "package time under another name hides the clock from this test")
		}
	}
	if !pure {
		return out, nil
	}
	ast.Inspect(f, func(n ast.Node) bool {
		switch n := n.(type) {
		case *ast.GoStmt:
			fault(n.Pos(), "a goroutine in online: the same events in the same order must give the same bytes")
		case *ast.SelectorExpr:
			if x, ok := n.X.(*ast.Ident); ok && x.Name == "time" && slices.Contains(clock, n.Sel.Name) {
				fault(n.Pos(), "time.%s in online: only event time decides numbers", n.Sel.Name)
			} else if ok && x.Name == "unsafe" && n.Sel.Name != "Sizeof" {
				fault(n.Pos(), "unsafe.%s in online: state is bytes that every machine reads alike", n.Sel.Name)
			}
		case *ast.FuncDecl:
			if n.Name.Name == "init" && n.Recv == nil {
				fault(n.Pos(), "an init function in online: nothing is set up by importing")
			}
		}
		return true
	})
	return out, nil
}

// forbidden tells why a pure package must not import another, "" if it may.
func forbidden(folder, imp string) string {
	for bad, why := range impure {
		if imp == bad || strings.HasPrefix(imp, bad+"/") {
			return why
		}
	}
	first, _, _ := strings.Cut(imp, "/")
	switch below, isExpr := strings.CutPrefix(imp, "github.com/expr-lang/expr/"); {
	case !strings.Contains(first, "."): // the standard library
		return ""
	case strings.HasPrefix(imp, "gonum.org/v1/gonum/"):
		return ""
	case isExpr && folder != "online/expr":
		return "only online/expr knows the expression library"
	case isExpr && slices.Contains(grammar, below):
		return ""
	}
	return "beside the standard library there are only gonum and the grammar of expressions"
}

// TestImportsRunOneWay: a layer sees those below it, and the statistics are pure.
func TestImportsRunOneWay(t *testing.T) {
	seen := map[string]int{}
	err := filepath.WalkDir(module, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		if d.IsDir() && name != module && (strings.HasPrefix(d.Name(), ".") || d.Name() == "testdata") {
			return filepath.SkipDir
		}
		if d.IsDir() || filepath.Ext(name) != ".go" {
			return nil
		}
		rel, err := filepath.Rel(module, name)
		if err != nil {
			return err
		}
		floor, _, _ := strings.Cut(filepath.ToSlash(rel), "/")
		if floors[floor] == nil {
			t.Errorf("%s lies in no known folder: %v", rel, floors)
			return nil
		}
		seen[floor]++
		source, err := os.ReadFile(name)
		if err != nil {
			return err
		}
		found, err := breaches(filepath.ToSlash(rel), source)
		for _, b := range found {
			t.Error(b)
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	for floor := range floors {
		if seen[floor] < 3 {
			t.Errorf("saw %d files under %s; is this the source tree?", seen[floor], floor)
		}
	}
}

// TestImportsBreaches: the rules find what they are there for.
func TestImportsBreaches(t *testing.T) {
	for _, tt := range []struct{ file, source, want string }{
		{"online/a.go", `import "math"`, ""},
		{"online/a.go", `import "gonum.org/v1/gonum/mat"`, ""},
		{"online/a.go", `import ("time"; "io"); var every = time.Second`, ""},
		{"online/a.go", `import "stillwell/online/moment"`, ""},
		{"online/expr/a.go", `import "github.com/expr-lang/expr/parser"`, ""},
		{"online/a_test.go", `import "os"; func f() { go g() }`, ""},
		{"stream/file/a.go", `import ("os"; "stillwell/stream"; "stillwell/online/wire"); func f() { go g() }`, ""},
		{"cmd/stillwell/a.go", `import ("stillwell/sinks/file"; "stillwell/config")`, ""},

		{"online/a.go", `import "os"`, "no input"},
		{"online/a.go", `import "os/exec"`, "no input"},
		{"online/a.go", `import "net/http"`, "no input"},
		{"online/a.go", `import "log/slog"`, "logged"},
		{"online/a.go", `import "math/rand/v2"`, "same bytes"},
		{"online/a.go", `import "sync/atomic"`, "guard"},
		{"online/a.go", `import "go.uber.org/zap"`, "only gonum"},
		{"online/a.go", `import "github.com/expr-lang/expr/parser"`, "only online/expr"},
		{"online/expr/a.go", `import "github.com/expr-lang/expr/vm"`, "only gonum"},
		{"online/a.go", `import "stillwell/stream"`, "online must not import stillwell/stream"},
		{"online/a_test.go", `import "stillwell/config"`, "online must not import stillwell/config"},
		{"stream/a.go", `import "stillwell/sinks/file"`, "stream must not"},
		{"sinks/a.go", `import "stillwell/config"`, "sinks must not"},
		{"config/a.go", `import "stillwell/stream/decode"`, "config must not"},
		{"config/a.go", `import "stillwell/cmd/stillwell/internal/station"`, "config must not"},
		{"online/a.go", `import "time"; func f() time.Time { return time.Now() }`, "time.Now in online"},
		{"online/a.go", `import "time"; var now = time.Now`, "time.Now in online"},
		{"online/a.go", `import clock "time"; func f() time.Time { return clock.Now() }`, "another name"},
		{"online/a.go", `import "unsafe"; const word = unsafe.Sizeof(0)`, ""},
		{"online/a.go", `import "unsafe"; func f(p *int) *byte { return (*byte)(unsafe.Pointer(p)) }`, "unsafe.Pointer"},
		{"online/a.go", `func f() { go g() }`, "goroutine"},
		{"online/a.go", `func init() {}`, "init function"},
	} {
		got, err := breaches(tt.file, "package a\n"+tt.source)
		switch {
		case err != nil:
			t.Errorf("%s: %s: %v", tt.file, tt.source, err)
		case tt.want == "" && len(got) > 0:
			t.Errorf("%s: %s: %q, want nothing", tt.file, tt.source, got)
		case tt.want != "" && (len(got) != 1 || !strings.Contains(got[0], tt.want)):
			t.Errorf("%s: %s: %q, want one with %q", tt.file, tt.source, got, tt.want)
		}
	}
}
