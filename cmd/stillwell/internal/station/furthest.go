package station

import (
	"bytes"
	"context"
	"fmt"

	"stillwell/config"
	"stillwell/stream"
	"stillwell/stream/file"
)

// Line finds the line of a file at a position, and its number from 1; number is 0 if the
// file cannot be read again, as standard input cannot.
func Line(ctx context.Context, f *config.File, path string, position int64) (text string, number int, err error) {
	if path == file.StdinName {
		return "", 0, nil
	}
	src, err := file.New(file.Config{Paths: []string{path}, CSV: f.Stream.CSV, MaxLine: f.Stream.MaxLine})
	if err != nil {
		return "", 0, err
	}
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	find := &finder{position: position, number: 1, found: stop}
	if err := src.Run(ctx, find); err != nil {
		return "", 0, err
	}
	if find.text == nil {
		return "", 0, fmt.Errorf("%s has no line at %d any more", path, position)
	}
	return string(find.text), find.number, nil
}

// finder counts lines up to a position.
type finder struct {
	position int64
	number   int
	text     []byte // nil until it is found
	found    func()
}

func (f *finder) Open(name string) (*stream.Partition, stream.Position, bool, error) {
	return &stream.Partition{Name: name}, stream.Position{}, false, nil
}

func (f *finder) Chunk(ctx context.Context, c *stream.Chunk) error {
	defer c.Release()
	at := f.position - c.Base
	switch {
	case f.text != nil || at < 0:
		return ctx.Err()
	case at >= int64(len(c.Data)):
		f.number += bytes.Count(c.Data, []byte("\n"))
		if c.Final { // a line that was cut off for its length
			f.number++
		}
		return ctx.Err()
	}
	f.number += bytes.Count(c.Data[:at], []byte("\n"))
	if c.Header != nil {
		f.number++
	}
	line, _, _ := bytes.Cut(c.Data[at:], []byte("\n"))
	f.text = append([]byte{}, bytes.TrimSuffix(line, []byte("\r"))...)
	f.found()
	return nil
}

func (f *finder) End(*stream.Partition)                       {}
func (f *finder) CaughtUp(*stream.Partition)                  {}
func (f *finder) Gap(*stream.Partition, int64, int64, string) {}
