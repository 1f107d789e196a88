package expr

import (
	"math"
	"strings"
	"testing"
)

// longText is too long for the buffer on the stack that hides an allocation.
var longText = strings.Repeat("Kirkwall to Stromness, second class ", 4)

var benchFilters = []string{
	`type == "ticket" && ms > 800`,
	`type == "ticket"`,
	`ms > 800`,
	`(type == "ticket" || type == "visit") && !member`,
	`type in ["a", "b", "ticket"]`,
	`note in ["1", "2", "3", "4", "5", "6", "7", "8", "9"] || note >= "M" || note == type`,
	`amount * 2 + ms > 3 ** 2 && (note ?? "x") != "y" && min(amount, ms, 3) not in [1, 2]`,
}

func benchEvent(f *Fields) Record {
	return event(f, fields{"type": "ticket", "ms": 900, "member": false, "amount": 12.5, "note": longText})
}

func TestNoAllocation(t *testing.T) {
	none := func(what string, f func()) {
		t.Helper()
		if n := testing.AllocsPerRun(100, f); n != 0 {
			t.Errorf("%s: %v allocations", what, n)
		}
	}
	for _, src := range benchFilters {
		var f Fields
		filter, err := ParseFilter(src, &f)
		if err != nil {
			t.Fatal(err)
		}
		operand, err := ParseValue(src, &f)
		if err != nil {
			t.Fatal(err)
		}
		rec, blank := benchEvent(&f), make(Record, len(f.Names()))
		none(src, func() { filter.Match(rec); filter.Match(blank); operand.Eval(rec) })
	}
	e := parseEstimate(t, "log(mean(min(fare, 400))) ** 2 / sqrt(mean((slowest ?? 0) > 3 && fare in [1, 2])) - exp(mean(visits) / 9)")
	row := []float64{450, 3, 1, math.NaN(), 0}
	m, grad := []float64{3, 4, 5}, make([]float64, 3)
	none("estimate", func() {
		for _, s := range e.Scores() {
			s.Eval(row)
		}
		e.Gradient(m, grad)
		e.Denominators()[0].Gradient(m, grad)
		e.Eval(m)
	})
}

// go test ./online/expr -run '^$' -bench . -count 10
func BenchmarkFilter(b *testing.B) {
	for _, src := range benchFilters {
		b.Run(src, func(b *testing.B) {
			var f Fields
			filter, err := ParseFilter(src, &f)
			if err != nil {
				b.Fatal(err)
			}
			rec, matched := benchEvent(&f), 0
			b.ReportAllocs()
			for b.Loop() {
				if filter.Match(rec) {
					matched++
				}
			}
		})
	}
}

func BenchmarkOperand(b *testing.B) {
	for _, src := range []string{"amount", "amount * 2", "min(amount, 400)", "amount * (type == \"ticket\")"} {
		b.Run(src, func(b *testing.B) {
			var f Fields
			operand, err := ParseValue(src, &f)
			if err != nil {
				b.Fatal(err)
			}
			rec, sum := benchEvent(&f), 0.0
			b.ReportAllocs()
			for b.Loop() {
				v, _ := operand.Eval(rec)
				sum += v
			}
		})
	}
}

func BenchmarkScore(b *testing.B) {
	for _, src := range []string{"fare", "min(fare, 400)", "fare > 3 && bought", "log(visits + 1)"} {
		b.Run(src, func(b *testing.B) {
			e, err := ParseEstimate("mean("+src+")", scoreTallies)
			if err != nil {
				b.Fatal(err)
			}
			row, s, sum := []float64{450, 3, 1, 2, 0}, e.Scores()[0], 0.0
			for b.Loop() {
				v, _ := s.Eval(row)
				sum += v
			}
		})
	}
}

func BenchmarkGradient(b *testing.B) {
	for _, src := range []string{"mean(fare)", "mean(fare) / mean(visits)", "log(mean(fare)) - 2 * mean(visits) ** 0.5"} {
		b.Run(src, func(b *testing.B) {
			e, err := ParseEstimate(src, scoreTallies)
			if err != nil {
				b.Fatal(err)
			}
			m, grad := []float64{450, 3}, make([]float64, 2)
			for b.Loop() {
				e.Gradient(m, grad)
			}
		})
	}
}

func BenchmarkParseFilter(b *testing.B) {
	b.ReportAllocs()
	for b.Loop() {
		if _, err := ParseFilter(benchFilters[0], &Fields{}); err != nil {
			b.Fatal(err)
		}
	}
}
