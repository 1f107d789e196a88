package checkpoint_test

import (
	"fmt"
	"os"
	"path/filepath"

	"stillwell/stream/checkpoint"
)

func Example() {
	tmp, err := os.MkdirTemp("", "harbour")
	if err != nil {
		panic(err)
	}
	defer os.RemoveAll(tmp)
	dir := filepath.Join(tmp, "state")

	once := func(position string, changed ...checkpoint.Page) {
		s, err := checkpoint.Open(dir, checkpoint.Options{})
		if err != nil {
			panic(err)
		}
		defer s.Close()
		snap, err := s.Load()
		if err != nil {
			panic(err)
		}
		if snap == nil {
			fmt.Println("begins")
		} else {
			fmt.Printf("goes on from %d, %s: %d pages\n", snap.Sequence, snap.Meta, len(snap.Pages))
		}
		if err := s.Commit([]byte(position), changed, nil); err != nil {
			panic(err)
		}
	}
	once("offset 100", checkpoint.Page{Name: "shard/3", Data: []byte("rows")}, checkpoint.Page{Name: "shard/4", Data: []byte("rows")})
	once("offset 250", checkpoint.Page{Name: "shard/4", Data: []byte("more rows")})
	once("offset 300")
	// Output:
	// begins
	// goes on from 1, offset 100: 2 pages
	// goes on from 2, offset 250: 2 pages
}
