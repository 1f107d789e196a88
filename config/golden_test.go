package config

import (
	"flag"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// The texts beside the files are what a person should read; after a change of wording,
// go test ./config -rewrite writes them anew, to be read in the diff.
var rewrite = flag.Bool("rewrite", false, "write the wanted texts in testdata anew")

// same compares a text with the one that stands beside a test file.
func same(t *testing.T, file, got string) {
	t.Helper()
	beside := strings.TrimSuffix(file, ".yaml") + ".txt"
	if *rewrite {
		if err := os.WriteFile(beside, []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
		return
	}
	want, err := os.ReadFile(beside)
	if err != nil {
		t.Fatal(err)
	}
	if got != string(want) {
		t.Errorf("%s: got\n%s\nwant\n%s", file, got, want)
	}
}

func glob(t testing.TB, pattern string) []string {
	t.Helper()
	files, err := filepath.Glob(filepath.Join("testdata", pattern))
	if err != nil || len(files) == 0 {
		t.Fatalf("no files %s: %v", pattern, err)
	}
	return files
}

func read(t testing.TB, file string) []byte {
	t.Helper()
	data, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	return data
}

// TestBadFiles: each file holds a kind of mistake, and all its faults are told.
func TestBadFiles(t *testing.T) {
	for _, file := range glob(t, "*.bad.yaml") {
		t.Run(filepath.Base(file), func(t *testing.T) {
			_, err := Parse(filepath.Base(file), read(t, file))
			faults, ok := err.(Faults)
			if !ok || len(faults) == 0 {
				t.Fatalf("error %T %v, want faults", err, err)
			}
			same(t, file, err.Error()+"\n")
		})
	}
}

// TestGoodFiles: each file is right, and explained as the text beside it says.
func TestGoodFiles(t *testing.T) {
	for _, file := range glob(t, "*.good.yaml") {
		t.Run(filepath.Base(file), func(t *testing.T) {
			f, err := Parse(filepath.Base(file), read(t, file))
			if err != nil {
				t.Fatal(err)
			}
			same(t, file, Explain(f))
			for i := range f.Plan.Studies {
				if part := ExplainStudy(f, i); !strings.HasPrefix(part, "study "+f.Plan.Studies[i].Name) || !strings.Contains(Explain(f), part) {
					t.Errorf("study %d is explained apart as\n%s", i, part)
				}
			}
		})
	}
}
