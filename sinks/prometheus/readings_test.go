package prometheus

import (
	"fmt"
	"math"
	"strings"
	"testing"

	"github.com/prometheus/client_golang/prometheus/testutil"

	"stillwell/online"
)

// The whole page of a study with a contrast, an estimate without one, a segment, a watch,
// and an allocation check that was raised.
func TestPageOfReadings(t *testing.T) {
	s := newSink(t, Config{})
	s.Emit(online.Output{
		Latest: []online.Reading{
			{Study: "seat-map", Estimate: "fare_per_passenger", Contrast: "relative", Arm: "wide", Baseline: "current",
				Value: p(0.0213), StdError: p(0.0071), Units: online.Counts{{Name: "current", N: 20110}, {Name: "wide", N: 20311}},
				Interval: &[2]float64{0.0074, 0.0353}, Anytime: &[2]float64{-0.0005, 0.0431},
				Provision: &online.Provisional{Value: p(0.0209)}, Sampling: 0.5, Heaviest: p(0.031)},
			mean("wide", 8, platform("web")),
			{Study: "checkout-latency", Estimate: "share_slow", Value: p(0.5), Units: online.Counts{{Name: "all", N: 77}}, Sampling: 1},
		},
		Watches: []online.WatchReading{watch(online.StateWatching, "wide")},
		Alarms:  []online.Alarm{{Study: "seat-map", Watch: "allocation: units entered", State: online.StateRaised}},
	})
	wantPage(t, s, `
# HELP stillwell_alarm 1 while an alarm is raised, 0 where it is not, or withdrawn; allocation checks and silence have a series once they were raised.
# TYPE stillwell_alarm gauge
stillwell_alarm{arm="",segment="",study="seat-map",watch="allocation: units entered"} 1
stillwell_alarm{arm="wide",segment="",study="seat-map",watch="buying-not-worse"} 0
# HELP stillwell_anytime_high Upper end of the interval that holds at all looks together, in the estimate's unit.
# TYPE stillwell_anytime_high gauge
stillwell_anytime_high{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 9
stillwell_anytime_high{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 0.0431
# HELP stillwell_anytime_low Lower end of the interval that holds at all looks together, in the estimate's unit.
# TYPE stillwell_anytime_low gauge
stillwell_anytime_low{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 7
stillwell_anytime_low{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} -0.0005
# HELP stillwell_estimate Value of the estimate over complete units, in its own unit; for a contrast, what the arm differs by from the baseline.
# TYPE stillwell_estimate gauge
stillwell_estimate{arm="",contrast="",estimate="share_slow",segment="",study="checkout-latency"} 0.5
stillwell_estimate{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 8
stillwell_estimate{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 0.0213
# HELP stillwell_heaviest_share Share of the estimate's variance that the heaviest unit carries alone, from 0 to 1.
# TYPE stillwell_heaviest_share gauge
stillwell_heaviest_share{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 0.03125
stillwell_heaviest_share{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 0.031
# HELP stillwell_interval_high Upper end of the interval for one look fixed beforehand, in the estimate's unit.
# TYPE stillwell_interval_high gauge
stillwell_interval_high{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 8.5
stillwell_interval_high{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 0.0353
# HELP stillwell_interval_low Lower end of the interval for one look fixed beforehand, in the estimate's unit.
# TYPE stillwell_interval_low gauge
stillwell_interval_low{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 7.5
stillwell_interval_low{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 0.0074
# HELP stillwell_provisional Value of the estimate over all units seen so far, complete or not; no series where that is stillwell_estimate.
# TYPE stillwell_provisional gauge
stillwell_provisional{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 8.125
stillwell_provisional{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 0.0209
# HELP stillwell_sampling_ratio Probability with which units are admitted at present: 1 unless memory was short.
# TYPE stillwell_sampling_ratio gauge
stillwell_sampling_ratio{arm="",contrast="",estimate="share_slow",segment="",study="checkout-latency"} 1
stillwell_sampling_ratio{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 1
stillwell_sampling_ratio{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 0.5
# HELP stillwell_series_dropped Segments of estimates and watches that are on no series, because more came than the page holds.
# TYPE stillwell_series_dropped gauge
stillwell_series_dropped 0
# HELP stillwell_std_error Standard error of the estimate, in its unit.
# TYPE stillwell_std_error gauge
stillwell_std_error{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 0.25
stillwell_std_error{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 0.0071
# HELP stillwell_units Units that the estimate rests on, by the arm they are in; a contrast counts the baseline's too.
# TYPE stillwell_units gauge
stillwell_units{arm="",contrast="",estimate="share_slow",segment="",study="checkout-latency"} 77
stillwell_units{arm="current",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 20110
stillwell_units{arm="wide",contrast="",estimate="capped_fare",segment="platform=web",study="seat-map"} 1000
stillwell_units{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="",study="seat-map"} 20311
# HELP stillwell_watch_state 1 for the state that a watch is in, 0 for its other ones: waiting, watching, raised, withdrawn.
# TYPE stillwell_watch_state gauge
stillwell_watch_state{arm="wide",segment="",state="raised",study="seat-map",watch="buying-not-worse"} 0
stillwell_watch_state{arm="wide",segment="",state="waiting",study="seat-map",watch="buying-not-worse"} 0
stillwell_watch_state{arm="wide",segment="",state="watching",study="seat-map",watch="buying-not-worse"} 1
stillwell_watch_state{arm="wide",segment="",state="withdrawn",study="seat-map",watch="buying-not-worse"} 0
`)
}

func TestNamesPassTheLinter(t *testing.T) {
	s := started(t, Config{}) // its handler registers a metric of its own
	emit(s, mean("wide", 8), effect("wide"))
	emitWatches(s, watch(online.StateRaised, "wide"))
	s.Observe(fullSnapshot)
	problems, err := testutil.GatherAndLint(s.reg)
	if err != nil || len(problems) > 0 {
		t.Errorf("lint: %v, %+v", err, problems)
	}
	if n, err := testutil.GatherAndCount(s.reg, "go_goroutines", "process_open_fds", "promhttp_metric_handler_errors_total"); n != 4 || err != nil {
		t.Errorf("%d series of the runtime, the process and the page, want 4; %v", n, err)
	}
}

// The metrics of our own are on a registry of our own: several sinks live in a process.
func TestSinksShareNothing(t *testing.T) {
	a, b := started(t, Config{}), started(t, Config{})
	emit(a, mean("wide", 8))
	wantLines(t, b, "estimate", "")
}

func TestNumberThatBecomesNullLosesItsSeries(t *testing.T) {
	s := newSink(t, Config{})
	emit(s, mean("wide", 8))
	for i := range columns {
		if n, err := testutil.GatherAndCount(pedantic(s), metricName(i)); n != 1 || err != nil {
			t.Errorf("%s: %d series of a reading that has it, want 1; %v", metricName(i), n, err)
		}
	}
	bare := mean("wide", 0)
	bare.Value, bare.StdError, bare.Interval, bare.Anytime, bare.Provision, bare.Heaviest = nil, nil, nil, nil, nil, nil
	bare.Units[0].N = 1001
	emit(s, bare)
	for i := range columns {
		want := 0
		if i == unitsColumn || metricName(i) == "stillwell_sampling_ratio" {
			want = 1 // a reading always has them
		}
		if n, err := testutil.GatherAndCount(pedantic(s), metricName(i)); n != want || err != nil {
			t.Errorf("%s: %d series of a reading that lacks it, want %d; %v", metricName(i), n, want, err)
		}
	}
	wantLines(t, s, "units", `
units{arm="wide",contrast="",estimate="capped_fare",segment="",study="seat-map"} 1001
`)
	emit(s, mean("wide", 9))
	wantLines(t, s, "estimate", `
estimate{arm="wide",contrast="",estimate="capped_fare",segment="",study="seat-map"} 9
`)
	null := mean("wide", 9)
	null.Provision.Value, null.Value = nil, p(math.NaN())
	emit(s, null)
	wantLines(t, s, "provisional", "")
	wantLines(t, s, "estimate", "")
}

func metricName(column int) string {
	d := columns[column].desc.String()
	return strings.SplitN(d, `"`, 3)[1]
}

// Two arms are compared with one baseline: its units are there once, and joined with what
// they belong to by equal labels.
func TestUnitsAreOfTheArmOfTheirLabel(t *testing.T) {
	s := newSink(t, Config{})
	emit(s, effect("wide"), effect("tall"))
	wantLines(t, s, "units", `
units{arm="current",contrast="difference",estimate="share_buying",segment="",study="seat-map"} 20110
units{arm="tall",contrast="difference",estimate="share_buying",segment="",study="seat-map"} 20311
units{arm="wide",contrast="difference",estimate="share_buying",segment="",study="seat-map"} 20311
`)
	wantLines(t, s, "estimate", `
estimate{arm="tall",contrast="difference",estimate="share_buying",segment="",study="seat-map"} 0.015625
estimate{arm="wide",contrast="difference",estimate="share_buying",segment="",study="seat-map"} 0.015625
`)
	wantLines(t, s, "sampling_ratio", `
sampling_ratio{arm="tall",contrast="difference",estimate="share_buying",segment="",study="seat-map"} 1
sampling_ratio{arm="wide",contrast="difference",estimate="share_buying",segment="",study="seat-map"} 1
`)
	all := mean("all", 8) // an arm may be called so
	all.Units[0].Name = "all"
	emit(s, all)
	if got := lines(t, s, "units"); !strings.Contains(got, `arm="all"`) {
		t.Errorf("no units of the arm called all:\n%s", got)
	}
}

// Readings hold pointers into what the caller may use again.
func TestEmitKeepsNothingOfTheOutput(t *testing.T) {
	s := newSink(t, Config{})
	o := online.Output{Latest: []online.Reading{mean("wide", 8, platform("web"))}, Watches: []online.WatchReading{watch(online.StateRaised, "wide", platform("web"))}}
	s.Emit(o)
	before := lines(t, s, "estimate") + lines(t, s, "units") + lines(t, s, "alarm")
	*o.Latest[0].Value = -1
	o.Latest[0].Units[0].N = -1
	o.Latest[0].Segment[0].Value = "spoilt"
	o.Watches[0].Segment[0].Value = "spoilt"
	if after := lines(t, s, "estimate") + lines(t, s, "units") + lines(t, s, "alarm"); after != before {
		t.Errorf("the page changed with the output:\n%swas\n%s", after, before)
	}
}

func TestSegmentsBeyondTheBoundAreFoldedAway(t *testing.T) {
	s := newSink(t, Config{MaxSeries: 3})
	for range 2 { // a second round changes nothing
		emit(s, mean("wide", 1))
		for i := range 5 {
			emit(s, mean("wide", float64(i), platform(fmt.Sprintf("p%d", i))))
		}
		emit(s, mean("current", 2), effect("wide", platform("p9")))
	}
	wantLines(t, s, "estimate", `
estimate{arm="current",contrast="",estimate="capped_fare",segment="",study="seat-map"} 2
estimate{arm="wide",contrast="",estimate="capped_fare",segment="",study="seat-map"} 1
estimate{arm="wide",contrast="",estimate="capped_fare",segment="platform=p0",study="seat-map"} 0
estimate{arm="wide",contrast="",estimate="capped_fare",segment="platform=p1",study="seat-map"} 1
`)
	wantLines(t, s, "series_dropped", "series_dropped 4\n")
	wantLines(t, s, "units", `
units{arm="current",contrast="",estimate="capped_fare",segment="",study="seat-map"} 1000
units{arm="wide",contrast="",estimate="capped_fare",segment="",study="seat-map"} 1000
units{arm="wide",contrast="",estimate="capped_fare",segment="platform=p0",study="seat-map"} 1000
units{arm="wide",contrast="",estimate="capped_fare",segment="platform=p1",study="seat-map"} 1000
`)
}

// A contrast at the very bound brings the units of its baseline along.
func TestLastPlaceOfAContrast(t *testing.T) {
	s := newSink(t, Config{MaxSeries: 1})
	emit(s, effect("wide", platform("web")), effect("wide", platform("app")))
	wantLines(t, s, "units", `
units{arm="current",contrast="difference",estimate="share_buying",segment="platform=web",study="seat-map"} 20110
units{arm="wide",contrast="difference",estimate="share_buying",segment="platform=web",study="seat-map"} 20311
`)
	wantLines(t, s, "series_dropped", "series_dropped 1\n")
}
