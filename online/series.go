package online

import (
	"stillwell/online/boundary"
	"stillwell/online/wire"
)

type series struct{ why string }

func (s *series) look(l *boundary.Look, diff float64)          {}
func (l *ledger) seriesOf(estimate int, c *comparison) *series { return nil }
func (c *comparison) critical(z float64) float64               { return z }
func (c *comparison) interval(level float64) (lo, hi float64, why string) {
	return c.effect.Interval(level)
}

func (l *ledger) encodeSeries(w *wire.Writer) {}
func (l *ledger) decodeSeries(r *wire.Reader) {}
