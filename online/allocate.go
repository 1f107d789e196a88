package online

func (l *ledger) checkAllocation(T int64, final bool, out *Output) {}
func (l *ledger) blocked(e *Estimate, place int) string            { return "" }
func (l *ledger) withdrawn(e *Estimate, place int) bool            { return false }
func (l *ledger) gap(from, to int64)                               {}
func (l *ledger) gapText() []string                                { return nil }
