package file

import (
	"context"
	"io"
	"os"
	"time"
)

// interruptible returns a reader of in that ends with ctx, and what to call when
// done with it.
func interruptible(ctx context.Context, in io.Reader) (r io.Reader, done func()) {
	switch in := in.(type) {
	case *os.File:
		return &patient{ctx: ctx, file: in}, func() {}
	case io.ReadCloser:
		ended := make(chan struct{})
		stop := context.AfterFunc(ctx, func() {
			defer close(ended)
			in.Close()
		})
		return in, func() {
			if !stop() {
				<-ended
			}
		}
	}
	return in, func() {}
}

// A patient reader of a pipe or terminal asks whether there is anything before
// it reads, for a read that waits cannot be called off.
type patient struct {
	ctx  context.Context
	file *os.File
}

const patience = 50 * time.Millisecond

func (p *patient) Read(b []byte) (int, error) {
	for {
		if err := p.ctx.Err(); err != nil {
			return 0, err
		}
		ready, err := readable(p.file, patience)
		if err != nil {
			return 0, &os.PathError{Op: "poll", Path: p.file.Name(), Err: err}
		}
		if ready {
			return p.file.Read(b)
		}
	}
}
