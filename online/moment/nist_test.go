package moment

import (
	"bufio"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"
)

// digits is the log relative error of McCullough 1998, Am. Statistician 52:358:
// the number of correct significant digits, 0 to 15.
func digits(got, want float64) float64 {
	off := math.Abs(got)
	if want != 0 {
		off = math.Abs(got-want) / math.Abs(want)
	}
	if off == 0 {
		return 15
	}
	return min(15, max(0, -math.Log10(off)))
}

type nistSet struct {
	mean, sd float64
	xs       []float64
}

func readNIST(t *testing.T, name string) (s nistSet) {
	t.Helper()
	f, err := os.Open("../../testdata/nist/" + name + ".txt")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	number := func(text string) float64 {
		x, err := strconv.ParseFloat(text, 64)
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		return x
	}
	lines := bufio.NewScanner(f)
	for lines.Scan() {
		switch line := lines.Text(); {
		case strings.HasPrefix(line, "# certified mean: "):
			s.mean = number(line[len("# certified mean: "):])
		case strings.HasPrefix(line, "# certified sd: "):
			s.sd = number(line[len("# certified sd: "):])
		case !strings.HasPrefix(line, "#"):
			s.xs = append(s.xs, number(line))
		}
	}
	if lines.Err() != nil {
		t.Fatal(lines.Err())
	}
	return s
}

// Certified values: NIST StRD, https://www.itl.nist.gov/div898/strd/. The ceiling is
// the number of digits that exact arithmetic on the data as rounded to float64 has
// in common with them, and rounded is the standard deviation it gives (computed with
// mpmath 1.2.1); a cell must reach both.
func TestNISTUnivariate(t *testing.T) {
	for _, tt := range []struct {
		name    string
		n       int
		ceiling float64
		rounded float64 // 0 where it is the certified value
	}{
		{"Lottery", 218, 15, 0},
		{"Lew", 200, 15, 0},
		{"Mavro", 50, 13.1, 0.00042912345400308541},
		{"Michelso", 100, 13.8, 0.079010547819050667},
		{"NumAcc1", 3, 15, 0},
		{"NumAcc2", 1001, 15, 0},
		{"NumAcc3", 1001, 9.5, 0.1000000000349246},
		{"NumAcc4", 1001, 8.3, 0.10000000055879354},
	} {
		set := readNIST(t, tt.name)
		if len(set.xs) != tt.n {
			t.Fatalf("%s: %d observations, want %d", tt.name, len(set.xs), tt.n)
		}
		for _, origin := range []float64{0, set.xs[0]} {
			c := fill(t, mustShape(t, 1, [][2]int{{0, 0}}, nil), []float64{origin}, column(set.xs))
			sd := math.Sqrt(c.Co(0, 0) / float64(tt.n-1))
			if got := digits(c.Mean(0), set.mean); got < 14.9 {
				t.Errorf("%s about %g: mean %v has %.1f digits of %v", tt.name, origin, c.Mean(0), got, set.mean)
			}
			// The printed certified values end at 15 digits, so 15 is reached as 14.9.
			if got := digits(sd, set.sd); got < tt.ceiling-0.1 {
				t.Errorf("%s about %g: sd %v has %.1f digits of %v, attainable %.1f", tt.name, origin, sd, got, set.sd, tt.ceiling)
			}
			want := tt.rounded
			if want == 0 {
				want = set.sd
			}
			if math.Abs(sd-want) > 1e-13*want {
				t.Errorf("%s about %g: sd %v, exact arithmetic on the rounded data gives %v", tt.name, origin, sd, want)
			}
		}
	}
}
