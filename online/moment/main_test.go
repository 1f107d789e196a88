package moment

import (
	"flag"
	"os"
	"testing"
)

// Property tests draw from one seed, so that a run can be repeated; -rapid.seed=N
// gives another.
func TestMain(m *testing.M) {
	flag.Parse()
	if seed := flag.Lookup("rapid.seed"); seed.Value.String() == "0" {
		if err := flag.Set("rapid.seed", "20260301"); err != nil {
			panic(err)
		}
	}
	os.Exit(m.Run())
}
