package stream

import (
	"context"
	"sync"
)

// A gate holds a source back while its partition is far ahead of the others, so
// that catching up after a pause needs no unbounded buffer.
type gate struct {
	mu     sync.Mutex
	closed chan struct{} // nil: open
}

// Hold closes the partition's gate: its source should fetch no further.
func (p *Partition) Hold() {
	p.gate.mu.Lock()
	defer p.gate.mu.Unlock()
	if p.gate.closed == nil {
		p.gate.closed = make(chan struct{})
	}
}

// Free opens the gate again.
func (p *Partition) Free() {
	p.gate.mu.Lock()
	defer p.gate.mu.Unlock()
	if p.gate.closed != nil {
		close(p.gate.closed)
		p.gate.closed = nil
	}
}

// Wait returns at once while the gate is open, else when it opens or ctx ends. A
// source calls it before it fetches.
func (p *Partition) Wait(ctx context.Context) error {
	p.gate.mu.Lock()
	closed := p.gate.closed
	p.gate.mu.Unlock()
	if closed == nil {
		return ctx.Err()
	}
	select {
	case <-closed:
		return ctx.Err()
	case <-ctx.Done():
		return ctx.Err()
	}
}
