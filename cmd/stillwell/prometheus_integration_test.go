//go:build integration

package main

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"net"
	"net/http"
	"net/url"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"
)

// TestPrometheus lets a real Prometheus scrape the daemon, and asks it for the value of an
// estimate: it must be that of the last reading in the file.
func TestPrometheus(t *testing.T) {
	bin, root := binary(t), t.TempDir()
	events := filepath.Join(root, "events.jsonl")
	write(t, events, ferryLines(60_000))
	listen := freeAddress(t)
	file := study(t, root, fmt.Sprintf("  file: {path: %s, follow: true}", events))
	replace(t, file, "sinks: {", "sinks: {prometheus: {listen: "+listen+"}, ")
	d := start(t, bin, file)
	settled(t, filepath.Join(root, "readings.jsonl"))
	want := lastValue(t, filepath.Join(root, "readings.jsonl"), "share_buying")

	body := get(t, "http://"+listen+"/metrics")
	check := exec.Command("promtool", "check", "metrics")
	check.Stdin = strings.NewReader(body)
	if out, err := check.CombinedOutput(); err != nil || len(out) > 0 {
		t.Errorf("promtool check metrics: %v\n%s", err, out)
	}
	if got := get(t, "http://"+listen+"/readyz"); !strings.Contains(got, "ready") {
		t.Errorf("/readyz says %q", got)
	}

	web := freeAddress(t)
	conf := filepath.Join(root, "prometheus.yml")
	write(t, conf, fmt.Appendf(nil, "global: {scrape_interval: 1s}\nscrape_configs:\n  - job_name: harbour\n    static_configs: [{targets: ['%s']}]\n", listen))
	prom := exec.Command("prometheus", "--config.file="+conf, "--storage.tsdb.path="+filepath.Join(root, "tsdb"), "--web.listen-address="+web)
	var log bytes.Buffer
	prom.Stderr = &log
	if err := prom.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = prom.Process.Kill(); _ = prom.Wait() })
	query := "http://" + web + "/api/v1/query?query=" + url.QueryEscape(`stillwell_estimate{estimate="share_buying",segment=""}`)
	for deadline := time.Now().Add(60 * time.Second); ; time.Sleep(500 * time.Millisecond) {
		if got, ok := queried(query); ok {
			if got != want {
				t.Errorf("Prometheus has %v, the last reading %v", got, want)
			}
			break
		}
		if time.Now().After(deadline) {
			t.Fatalf("no answer from Prometheus\n%s", log.String())
		}
	}
	d.terminate(t)
}

func queried(query string) (float64, bool) {
	resp, err := http.Get(query)
	if err != nil {
		return 0, false
	}
	defer resp.Body.Close()
	var answer struct {
		Data struct {
			Result []struct{ Value [2]any }
		}
	}
	if json.NewDecoder(resp.Body).Decode(&answer) != nil || len(answer.Data.Result) != 1 {
		return 0, false
	}
	text, ok := answer.Data.Result[0].Value[1].(string)
	x, err := strconv.ParseFloat(text, 64)
	return x, ok && err == nil
}

func get(t *testing.T, address string) string {
	t.Helper()
	resp, err := http.Get(address)
	if err != nil {
		t.Fatal(err)
	}
	defer resp.Body.Close()
	b, err := io.ReadAll(resp.Body)
	if err != nil || resp.StatusCode != http.StatusOK {
		t.Fatalf("%s: %v, %s\n%s", address, err, resp.Status, b)
	}
	return string(b)
}

func freeAddress(t *testing.T) string {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	return l.Addr().String()
}

// lastValue is the value of an estimate's last reading about everyone.
func lastValue(t *testing.T, path, estimate string) float64 {
	t.Helper()
	var last float64
	found := false
	for _, line := range bytes.Split(read(t, path), []byte("\n")) {
		var r struct {
			Kind, Estimate string
			Segment        map[string]string
			Value          *float64
		}
		if json.Unmarshal(line, &r) == nil && r.Kind == "reading" && r.Estimate == estimate && len(r.Segment) == 0 && r.Value != nil {
			last, found = *r.Value, true
		}
	}
	if !found {
		t.Fatalf("%s has no reading of %s", path, estimate)
	}
	return last
}
