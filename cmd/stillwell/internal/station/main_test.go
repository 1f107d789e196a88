package station

import (
	"flag"
	"os"
	"testing"
)

// TestMain draws fewer plans than the library does where nobody says how many: each replays
// a stream twice, through stores that sync. -rapid.checks=1000 for a night's work.
func TestMain(m *testing.M) {
	flag.Parse()
	if f := flag.Lookup("rapid.checks"); f != nil && f.Value.String() == f.DefValue {
		_ = f.Value.Set("20")
	}
	os.Exit(m.Run())
}
