package file

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
)

// Expand replaces patterns (path/filepath.Match) by the files they match, in
// order of name; other paths stay as they are. A file that several name comes once.
// A pattern that matches nothing is an error; a path that does not exist is none.
func Expand(patterns []string) ([]string, error) {
	var paths []string
	seen := make(map[string]bool)
	for _, pattern := range patterns {
		matches := []string{pattern}
		if _, err := os.Lstat(pattern); err != nil && strings.ContainsAny(pattern, "*?[") {
			if matches, err = filepath.Glob(pattern); err != nil {
				return nil, fmt.Errorf("file: pattern %q: %w: a [ opens a set of characters and needs its ]", pattern, err)
			}
			if len(matches) == 0 {
				return nil, fmt.Errorf("file: no file matches %q", pattern)
			}
		}
		for _, path := range matches {
			if clean := filepath.Clean(path); !seen[clean] {
				seen[clean] = true
				paths = append(paths, path)
			}
		}
	}
	return paths, nil
}
