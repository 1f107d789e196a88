package online

import "stillwell/online/wire"

func (l *ledger) checkAllocation(T int64, final bool, out *Output) {}
func (l *ledger) blocked(e *Estimate, place int) string            { return "" }
func (l *ledger) withdrawn(e *Estimate, place int) bool            { return false }
func (l *ledger) encodeChecks(w *wire.Writer)                      {}
func (l *ledger) decodeChecks(r *wire.Reader)                      {}
