package normal

import (
	"math"
	"testing"

	"pgregory.net/rapid"
)

// near says whether got is want to rel, relative to max(1, |want|).
func near(got, want, rel float64) bool {
	return math.Abs(got-want) <= rel*math.Max(1, math.Abs(want))
}

// Values by ../testdata/bc.sh, GNU bc with 60 digits.
func TestLogMills(t *testing.T) {
	for _, tt := range []struct{ x, want float64 }{
		{-30, 450.9189385332046727417803297364056176398613974736377834},
		{-8, 32.918938533204672119684272309227011786509546995108139354},
		{-1.5, 1.97479507759243875878731459728806906877509207055825328},
		{-1, 1.2461847541812228522538465628848169098519711831098021094},
		{-.5, .6749921179160163487147140973624402993067188467162301020},
		{0, .225791352644727432363097614947441071785897339277528158696},
		{.5, -.1319732283889458670993993568633970812766711897146187635},
		{1, -.42208311180459076399045333682691138168627443518549011219},
		{2.5, -1.03770974407401775660013256090080437952314144973380445},
		{5, -1.6460598607840529943033750554911079652063151517088992825},
		{10, -2.312346617307797836566697617725592239054618355948553753},
		{20, -2.998216837892591195024128918121282412646234515330010306},
		{24.9, -3.2164742284085256397650998102246715238434414399327626},
		{25.1, -3.2244488726839260166384208803244182729232607022035488},
		{30, -3.402305423138524365575441601239348016489690863663435815},
		{40, -3.689503480549115424826503182204318560288234525140139766},
		{100, -4.60527016100041588452212759361991370005297049497699364},
	} {
		if got := LogMills(tt.x); math.Abs(got-tt.want) > 4e-16*math.Max(1, tt.x*tt.x/2) {
			t.Errorf("LogMills(%g) = %.17g, want %.17g", tt.x, got, tt.want)
		}
	}
}

// Values by R 4.2.2: pnorm(x, log.p = TRUE); quantiles by qnorm, the last one (where that
// qnorm is off) by uniroot over pnorm(lower.tail = FALSE, log.p = TRUE).
func TestLogCDFAndQuantile(t *testing.T) {
	for _, tt := range []struct{ x, want float64 }{
		{-50, -1254.8313611394199},
		{-38, -726.55721601882010},
		{-10, -53.231285150512477},
		{-1, -1.8410216450092636},
		{0, -0.69314718055994529},
		{2, -0.023012909328963492},
		{9, -1.1285884059538408e-19},
	} {
		if got := LogCDF(tt.x); math.Abs(got-tt.want) > 2e-14*math.Abs(tt.want) {
			t.Errorf("LogCDF(%g) = %.17g, want %.17g", tt.x, got, tt.want)
		}
	}
	for _, tt := range []struct{ logTail, want float64 }{
		{-0.5, -0.27028802073873581},
		{-1, 0.33747496376420238},
		{-600, 34.51199549973351566},
		{-700, 37.29507963264740766},
		{-1e6, 1414.2077829910174},
	} {
		if got := UpperQuantile(tt.logTail); !near(got, tt.want, 2e-14) {
			t.Errorf("UpperQuantile(%g) = %.17g, want %.17g", tt.logTail, got, tt.want)
		}
	}
	if got := UpperQuantile(0.1); !math.IsNaN(got) {
		t.Errorf("UpperQuantile of a probability above 1 = %g, want NaN", got)
	}
}

func TestUpperQuantileInverts(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		z := rapid.Float64Range(-5, 1e4).Draw(t, "z")
		// Log Q hardly moves with z far below 0, so digits of z are lost there.
		if got := UpperQuantile(LogCDF(-z)); math.Abs(got-z) > 1e-10*math.Max(1, math.Abs(z)) {
			t.Fatalf("UpperQuantile(LogCDF(%g)) = %.17g", -z, got)
		}
	})
}

func TestWeightRises(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		x := rapid.Float64Range(-60, 60).Draw(t, "x")
		d := rapid.Float64Range(1e-6, 1).Draw(t, "d")
		if Weight(x+d) <= Weight(x) {
			t.Fatalf("Weight(%g) = %.17g, Weight(%g) = %.17g", x, Weight(x), x+d, Weight(x+d))
		}
	})
}
