package prometheus

import (
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus/testutil"
)

var noon = time.Date(2026, 3, 2, 12, 0, 0, 0, time.UTC)

func fullSnapshot() Snapshot {
	return Snapshot{
		Stream: map[string]int64{"read": 1010, "delivered": 1000, "malformed": 1, "late": 2, "duplicate": 3, "ahead": 4},
		Studies: map[string]map[string]int64{
			"seat-map":         {"applied": 600, "filtered": 300, "outside": 50, "waiting": 40, "conflicting": 9, "unsampled": 1},
			"checkout-latency": {"applied": 1000},
		},
		Watermark: noon.Add(-150 * time.Second), Newest: noon.Add(-30*time.Second + 250*time.Millisecond),
		Lag:          map[string]int64{"harbour.events/0": 12, "harbour.events/1": 0},
		Units:        map[string]UnitCounts{"seat-map": {Open: 3000, Rows: 43111}},
		BytesPerUnit: 96.5, StepDuration: 1500 * time.Microsecond,
		CheckpointDuration: 2 * time.Second, CheckpointHeld: 4 * time.Millisecond, CheckpointLast: noon.Add(-45 * time.Second), CheckpointFailures: 1,
		AuditDifference: map[string]float64{"seat-map": 0},
	}
}

func TestPageOfVitals(t *testing.T) {
	s := newSink(t, Config{})
	s.vitals.now = func() time.Time { return noon }
	s.Observe(fullSnapshot)
	wantPage(t, s, `
# HELP stillwell_audit_difference Largest relative difference between a study's sums as kept and as made anew from its rows. Anything but nil to the last digits is a fault.
# TYPE stillwell_audit_difference gauge
stillwell_audit_difference{study="seat-map"} 0
# HELP stillwell_bytes_per_unit Memory a unit takes, averaged over studies.
# TYPE stillwell_bytes_per_unit gauge
stillwell_bytes_per_unit 96.5
# HELP stillwell_checkpoint_age_seconds Time since the last checkpoint became durable.
# TYPE stillwell_checkpoint_age_seconds gauge
stillwell_checkpoint_age_seconds 45
# HELP stillwell_checkpoint_duration_seconds How long the last checkpoint took, until it was durable.
# TYPE stillwell_checkpoint_duration_seconds gauge
stillwell_checkpoint_duration_seconds 2
# HELP stillwell_checkpoint_failures_total Checkpoints that could not be written.
# TYPE stillwell_checkpoint_failures_total counter
stillwell_checkpoint_failures_total 1
# HELP stillwell_checkpoint_held_seconds How long the last checkpoint held up the stream.
# TYPE stillwell_checkpoint_held_seconds gauge
stillwell_checkpoint_held_seconds 0.004
# HELP stillwell_lag_seconds How far the watermark is behind the clock.
# TYPE stillwell_lag_seconds gauge
stillwell_lag_seconds 150
# HELP stillwell_newest_event_seconds Event time of the newest event, in seconds since the epoch.
# TYPE stillwell_newest_event_seconds gauge
stillwell_newest_event_seconds 1.77245277025e+09
# HELP stillwell_partition_lag_messages Messages of a partition that are still to be read.
# TYPE stillwell_partition_lag_messages gauge
stillwell_partition_lag_messages{partition="harbour.events/0"} 12
stillwell_partition_lag_messages{partition="harbour.events/1"} 0
# HELP stillwell_series_dropped Segments of estimates and watches that are on no series, because more came than the page holds.
# TYPE stillwell_series_dropped gauge
stillwell_series_dropped 0
# HELP stillwell_step_duration_seconds How long the evaluation of the last step took.
# TYPE stillwell_step_duration_seconds gauge
stillwell_step_duration_seconds 0.0015
# HELP stillwell_stream_events_total Events of the stream, by what became of them. The other outcomes add up to "read".
# TYPE stillwell_stream_events_total counter
stillwell_stream_events_total{outcome="ahead"} 4
stillwell_stream_events_total{outcome="delivered"} 1000
stillwell_stream_events_total{outcome="duplicate"} 3
stillwell_stream_events_total{outcome="late"} 2
stillwell_stream_events_total{outcome="malformed"} 1
stillwell_stream_events_total{outcome="read"} 1010
# HELP stillwell_study_events_total Delivered events, by what each study made of them. With those waiting they add up to the stream's delivered ones.
# TYPE stillwell_study_events_total counter
stillwell_study_events_total{outcome="applied",study="checkout-latency"} 1000
stillwell_study_events_total{outcome="applied",study="seat-map"} 600
stillwell_study_events_total{outcome="conflicting",study="seat-map"} 9
stillwell_study_events_total{outcome="filtered",study="seat-map"} 300
stillwell_study_events_total{outcome="outside",study="seat-map"} 50
stillwell_study_events_total{outcome="unsampled",study="seat-map"} 1
# HELP stillwell_study_events_waiting Events held for a unit that may yet enter the study.
# TYPE stillwell_study_events_waiting gauge
stillwell_study_events_waiting{study="seat-map"} 40
# HELP stillwell_study_unit_rows Units of a study with a row in memory, open or complete.
# TYPE stillwell_study_unit_rows gauge
stillwell_study_unit_rows{study="seat-map"} 43111
# HELP stillwell_study_units_open Units of a study that are being followed.
# TYPE stillwell_study_units_open gauge
stillwell_study_units_open{study="seat-map"} 3000
# HELP stillwell_watermark_seconds Event time up to which the stream is taken to be complete, in seconds since the epoch.
# TYPE stillwell_watermark_seconds gauge
stillwell_watermark_seconds 1.77245265e+09
`)
}

// A daemon that has just begun has nothing to say of steps and checkpoints: no time of 1970,
// no age of centuries.
func TestPageBeforeAnythingHappened(t *testing.T) {
	s := newSink(t, Config{})
	const dropped = `
# HELP stillwell_series_dropped Segments of estimates and watches that are on no series, because more came than the page holds.
# TYPE stillwell_series_dropped gauge
stillwell_series_dropped 0
`
	wantPage(t, s, dropped)
	s.Observe(func() Snapshot { return Snapshot{} })
	wantPage(t, s, `
# HELP stillwell_checkpoint_failures_total Checkpoints that could not be written.
# TYPE stillwell_checkpoint_failures_total counter
stillwell_checkpoint_failures_total 0`+dropped)
	s.Observe(nil)
	wantPage(t, s, dropped)
}

// Partitions may be named after files, whose names are any bytes.
func TestVitalsOfHostileNames(t *testing.T) {
	s := newSink(t, Config{})
	s.Observe(func() Snapshot { return Snapshot{Lag: map[string]int64{"bygd\xf8y.jsonl": 1, "bygd\xe5.jsonl": 2}} })
	if n, err := testutil.GatherAndCount(pedantic(s), "stillwell_partition_lag_messages"); n != 2 || err != nil {
		t.Errorf("%d series of two partitions; %v", n, err)
	}
}
