package prometheus_test

import (
	"context"
	"fmt"
	"io"
	"net/http"

	"stillwell/online"
	"stillwell/sinks/prometheus"
)

func Example() {
	sink, err := prometheus.New(prometheus.Config{Listen: "127.0.0.1:0"})
	if err != nil {
		panic(err)
	}
	if err := sink.Start(); err != nil {
		panic(err)
	}
	defer func() { _ = sink.Close(context.Background()) }()

	effect := 0.0213
	sink.Emit(online.Output{Latest: []online.Reading{{
		Study: "seat-map", Estimate: "fare_per_passenger", Contrast: "relative", Arm: "wide", Baseline: "current",
		Segment: online.Segment{{Field: "platform", Value: "web"}},
		Value:   &effect, Units: online.Counts{{Name: "current", N: 20110}, {Name: "wide", N: 20311}},
	}}})

	client := http.Client{Transport: &http.Transport{DisableKeepAlives: true}}
	page, err := client.Get("http://" + sink.Addr() + "/metrics?name[]=stillwell_estimate&name[]=stillwell_units")
	if err != nil {
		panic(err)
	}
	defer func() { _ = page.Body.Close() }()
	text, err := io.ReadAll(page.Body)
	if err != nil {
		panic(err)
	}
	fmt.Print(string(text))
	// Output:
	// # HELP stillwell_estimate Value of the estimate over complete units, in its own unit; for a contrast, what the arm differs by from the baseline.
	// # TYPE stillwell_estimate gauge
	// stillwell_estimate{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="platform=web",study="seat-map"} 0.0213
	// # HELP stillwell_units Units that the estimate rests on, by the arm they are in; a contrast counts the baseline's too.
	// # TYPE stillwell_units gauge
	// stillwell_units{arm="current",contrast="relative",estimate="fare_per_passenger",segment="platform=web",study="seat-map"} 20110
	// stillwell_units{arm="wide",contrast="relative",estimate="fare_per_passenger",segment="platform=web",study="seat-map"} 20311
}
