package config

import (
	"bytes"
	"errors"
	"testing"
)

// FuzzParse: whatever a file holds, it is a plan that can be explained, or faults that
// stand in the file.
func FuzzParse(f *testing.F) {
	for _, pattern := range []string{"*.good.yaml", "*.bad.yaml"} {
		for _, file := range glob(f, pattern) {
			f.Add(read(f, file))
		}
	}
	f.Add([]byte(everything))
	f.Fuzz(func(t *testing.T, data []byte) {
		file, err := Parse("study.yaml", data)
		if err == nil {
			if Explain(file) == "" || len(file.StudyPrints) != len(file.Plan.Studies) {
				t.Error("a plan without explanation or fingerprints")
			}
			again, err := Parse("study.yaml", data)
			if err != nil || again.StreamPrint.Hash != file.StreamPrint.Hash {
				t.Errorf("read a second time: %v", err)
			}
			return
		}
		var faults Faults
		if !errors.As(err, &faults) || len(faults) == 0 {
			t.Fatalf("error %T: %v", err, err)
		}
		lines := 1 + bytes.Count(data, []byte("\n"))
		for _, fault := range faults {
			if fault.Line < 1 || fault.Line > lines || fault.Column < 1 || fault.Column > len(data)+1 || fault.Width < 1 || fault.Message == "" {
				t.Errorf("fault %+v in %d lines", *fault, lines)
			}
		}
	})
}
