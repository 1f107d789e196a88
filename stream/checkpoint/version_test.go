package checkpoint

import (
	"maps"
	"os"
	"path/filepath"
	"slices"
	"testing"
)

// What was written by any version must still load: testdata/v1 holds the first three
// steps of the workload in crash_test.go, as version 1 of the format wrote them.
func TestOlderVersionsLoad(t *testing.T) {
	d := newDisk()
	files, err := filepath.Glob("testdata/v1/*" + suffix)
	if err != nil || len(files) != 2 {
		t.Fatalf("%v, %v", files, err)
	}
	for _, f := range files {
		b, err := os.ReadFile(f)
		if err != nil {
			t.Fatal(err)
		}
		d.now[filepath.Base(f)] = &inode{b, len(b)}
	}
	want := worked()
	mustBe(t, d, 3, want[3])
	mustBe(t, d.without(3), 2, want[2])
	if names := slices.Sorted(maps.Keys(want[3])); len(names) < 3 {
		t.Errorf("too few pages to tell: %v", names)
	}
}
