package expr

import (
	"fmt"
	"strings"
)

// Influence is the estimate's influence function at a unit, in the words of the
// file: the sum over scores of the derivative by the score's mean times the
// unit's deviation from that mean.
func (e *Estimate) Influence() string {
	var absent []string
	for i, s := range e.scores {
		if s.absent && !e.grad[i].isNum(0) {
			absent = append(absent, "("+s.text+")")
		}
	}
	if i, j, ok := e.Ratio(); ok && len(absent) == 0 {
		p := &printer{scores: e.scores}
		p.WriteByte('(')
		p.part(e.scores[i].root, bindSum)
		p.WriteString(" - R ")
		p.part(e.scores[j].root, bindAtom)
		return fmt.Sprintf("%s) / mean(%s), where R = %s", p.Builder.String(), e.scores[j].text, e.Functional.String())
	}
	sum := num(0)
	for i, s := range e.scores {
		mean := &node{op: opMean, slot: i}
		sum = plus(sum, times(e.grad[i], &node{op: opSub, args: []*node{s.root, mean}}))
	}
	text := sum.text(e.scores)
	if len(absent) > 0 {
		text += fmt.Sprintf("; the deviation of %s counts 0 for units without it, and is divided by the share of units with it",
			strings.Join(absent, " and of "))
	}
	return text
}
