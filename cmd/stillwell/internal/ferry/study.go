package ferry

import _ "embed"

// Study is the study file of the demo.
//
//go:embed study.yaml
var Study []byte
