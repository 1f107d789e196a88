package allocation_test

import (
	"fmt"

	"stillwell/online/allocation"
)

func ExampleCheck() {
	c, err := allocation.New(allocation.Plan{
		What:   "units entered",
		Arms:   []string{"current", "wide"},
		Shares: []float64{1, 1},
	})
	if err != nil {
		fmt.Println(err)
		return
	}
	for _, counts := range [][]int64{{100, 90}, {5270, 4800}, {9000, 9000}} {
		fmt.Printf("%q\n", c.Step(counts))
	}
	// Output:
	// ""
	// "units entered: 5270 current, 4800 wide where 1:1 was planned (e-value 5,176)"
	// "units entered: 5270 current, 4800 wide where 1:1 was planned (e-value 5,176)"
}
