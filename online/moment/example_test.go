package moment_test

import (
	"fmt"

	"stillwell/online/moment"
)

func ExampleCell() {
	shape, err := moment.NewShape(2, [][2]int{{0, 0}, {0, 1}, {1, 1}}, nil)
	if err != nil {
		fmt.Println(err)
		return
	}
	c := moment.NewCell(shape) // of fares and visits
	c.Add([]float64{40, 2})
	c.Add([]float64{0, 1})
	c.Add([]float64{65, 3})
	c.Replace([]float64{0, 1}, []float64{20, 2}) // the second passenger bought after all
	c.Retract([]float64{65, 3})
	fmt.Println(c.Units(), c.Mean(0), c.Co(0, 0), c.Co(0, 1))
	// Output: 2 30 200 0
}
