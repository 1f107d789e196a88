package influence_test

import (
	"bufio"
	"encoding/csv"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"stillwell/online/influence"
	"stillwell/online/moment"
)

// score is the functional m[i].
type score int

func (s score) Eval(m []float64) float64 { return m[s] }
func (s score) Gradient(m, dst []float64) float64 {
	clear(dst)
	dst[s] = 1
	return m[s]
}

// quotient is m[num] / m[den].
type quotient struct{ num, den int }

func (q quotient) Eval(m []float64) float64 { return m[q.num] / m[q.den] }
func (q quotient) Gradient(m, dst []float64) float64 {
	clear(dst)
	dst[q.num] += 1 / m[q.den]
	dst[q.den] -= m[q.num] / (m[q.den] * m[q.den])
	return m[q.num] / m[q.den]
}

// smooth is any function with its gradient.
type smooth struct {
	eval func(m []float64) float64
	grad func(m, dst []float64)
}

func (s smooth) Eval(m []float64) float64 { return s.eval(m) }
func (s smooth) Gradient(m, dst []float64) float64 {
	s.grad(m, dst)
	return s.eval(m)
}

func meanOf(i int) influence.Estimate {
	return influence.Estimate{Of: score(i), Shape: influence.Shape{Kind: influence.Mean, Num: i}}
}

func ratioOf(num, den int) influence.Estimate {
	return influence.Estimate{Of: quotient{num, den}, Shape: influence.Shape{Kind: influence.Ratio, Num: num, Den: den}}
}

func proportionOf(i int) influence.Estimate {
	e := meanOf(i)
	e.Binary = true
	return e
}

// cellOf holds the rows with all their second and third moments.
func cellOf(t testing.TB, rows [][]float64) *moment.Cell {
	t.Helper()
	k := len(rows[0])
	var pairs [][2]int
	var triples [][3]int
	for i := range k {
		for j := range i + 1 {
			pairs = append(pairs, [2]int{i, j})
			for l := range j + 1 {
				triples = append(triples, [3]int{i, j, l})
			}
		}
	}
	shape, err := moment.NewShape(k, pairs, triples)
	if err != nil {
		t.Fatal(err)
	}
	c := moment.NewCell(shape)
	for _, z := range rows {
		if !c.Add(z) {
			t.Fatalf("refused %v", z)
		}
	}
	return c
}

// upTo lists 0 to k-1.
func upTo(k int) []int {
	all := make([]int, k)
	for i := range all {
		all[i] = i
	}
	return all
}

func armOf(t testing.TB, name string, rows [][]float64) *influence.Arm {
	t.Helper()
	a := influence.NewArm(name, cellOf(t, rows), upTo(len(rows[0])))
	return &a
}

// proportionArm is an arm of n units of which x score 1.
func proportionArm(name string, x, n int64) *influence.Arm {
	p, m := float64(x)/float64(n), float64(n)
	return &influence.Arm{Name: name, Units: n, Freedom: m - 1, Mean: []float64{p}, Cov: []float64{p * (1 - p) / (m - 1)}}
}

func near(t *testing.T, what string, got, want, rel float64) {
	t.Helper()
	if !(math.Abs(got-want) <= rel*math.Abs(want)) {
		t.Errorf("%s = %.15g, want %.15g", what, got, want)
	}
}

const references = "../../testdata/reference/"

// readTable reads a data set: by row, the numbers of the named columns.
func readTable(t *testing.T, name string, columns ...string) [][]float64 {
	t.Helper()
	f, err := os.Open(references + name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	records, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	rows := make([][]float64, len(records)-1)
	for _, want := range columns {
		at := -1
		for j, have := range records[0] {
			if have == want {
				at = j
			}
		}
		if at < 0 {
			t.Fatalf("%s has no column %s", name, want)
		}
		for i, r := range records[1:] {
			x, err := strconv.ParseFloat(r[at], 64)
			if err != nil {
				x = map[string]float64{"Cont": 0, "FT": 1}[r[at]]
			}
			rows[i] = append(rows[i], x)
		}
	}
	return rows
}

// where keeps the rows whose last entry is value, without that entry.
func where(rows [][]float64, value float64) (out [][]float64) {
	for _, r := range rows {
		if last := len(r) - 1; r[last] == value {
			out = append(out, r[:last])
		}
	}
	return out
}

// readValues reads reference.txt, whose first line says what computed it.
func readValues(t *testing.T) map[string]float64 {
	t.Helper()
	f, err := os.Open(references + "reference.txt")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	values := map[string]float64{}
	for lines := bufio.NewScanner(f); lines.Scan(); {
		if name, text, ok := strings.Cut(lines.Text(), " "); ok && name != "#" {
			x, err := strconv.ParseFloat(text, 64)
			if err != nil {
				t.Fatal(err)
			}
			values[name] = x
		}
	}
	if len(values) < 100 {
		t.Fatalf("only %d reference values", len(values))
	}
	return values
}
