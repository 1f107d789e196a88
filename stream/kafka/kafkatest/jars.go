package kafkatest

import (
	_ "embed"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
)

//go:embed pom.xml
var pom []byte

// jars is the folder with Kafka's jars: STILLWELL_KAFKA_JARS, or ~/.cache/stillwell/kafka, which is filled by
// Maven the first time.
func jars(t testing.TB) string {
	t.Helper()
	dir := os.Getenv("STILLWELL_KAFKA_JARS")
	if dir == "" {
		cache, err := os.UserCacheDir()
		if err != nil {
			t.Fatalf("a place for Kafka's jars: %v; name one in STILLWELL_KAFKA_JARS", err)
		}
		dir = filepath.Join(cache, "stillwell", "kafka")
	}
	if found, _ := filepath.Glob(filepath.Join(dir, "kafka_2.13-*.jar")); len(found) > 0 {
		return dir
	}
	// Into a folder beside it, then renamed: another test may be doing the same, and a broken download must
	// not look like a whole one.
	if err := os.MkdirAll(filepath.Dir(dir), 0o755); err != nil {
		t.Fatal(err)
	}
	tmp, err := os.MkdirTemp(filepath.Dir(dir), "kafka-jars-")
	if err != nil {
		t.Fatal(err)
	}
	defer os.RemoveAll(tmp)
	if err := os.WriteFile(filepath.Join(tmp, "pom.xml"), pom, 0o644); err != nil {
		t.Fatal(err)
	}
	out := filepath.Join(tmp, "jars")
	cmd := exec.Command("mvn", "-q", "-B", "-f", filepath.Join(tmp, "pom.xml"), "dependency:copy-dependencies", "-DoutputDirectory="+out)
	if text, err := cmd.CombinedOutput(); err != nil {
		t.Fatalf("no jars of Kafka in %s, and Maven cannot fetch them: %v\n%s", dir, err, text)
	}
	if err := os.Rename(out, dir); err != nil {
		if found, _ := filepath.Glob(filepath.Join(dir, "kafka_2.13-*.jar")); len(found) == 0 {
			t.Fatal(err)
		}
	}
	return dir
}
