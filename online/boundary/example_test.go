package boundary_test

import (
	"fmt"
	"math"

	"stillwell/online/boundary"
)

func ExampleSequence() {
	s, err := boundary.NewSequence(boundary.Config{Error: 0.01, TuneFor: 20_000})
	if err != nil {
		fmt.Println(err)
		return
	}
	gate := boundary.Gate{Error: 0.01}
	for _, units := range []int64{160, 2000, 20_000} {
		arms := []boundary.ArmEvidence{
			{Name: "current", Units: units / 2, Skew: 1.1, Heaviest: 0.03},
			{Name: "wide", Units: units / 2, Skew: 1.2, Heaviest: 0.03},
		}
		v := s.Step(boundary.Look{
			Units:    float64(units),
			StdError: 1 / math.Sqrt(float64(units)),
			Z:        0.03 * math.Sqrt(float64(units)),
			GateWhy:  gate.Check(arms),
		})
		if !v.Speaking {
			fmt.Println(v.Why)
			continue
		}
		fmt.Printf("%d units: |z| against %.2f, e-value %.2g, p %.2g, crossed %t\n", units, v.Critical, v.EValue, v.PAnytime, v.Crossed)
	}
	// Output:
	// not yet: arm current has 80 units, at least 100 are needed
	// 2000 units: |z| against 4.30, e-value 1.1, p 0.91, crossed false
	// 20000 units: |z| against 3.57, e-value 1.1e+03, p 0.00089, crossed true
}
