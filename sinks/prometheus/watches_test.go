package prometheus

import (
	"testing"

	"stillwell/online"
)

func TestAlarmFollowsItsWatch(t *testing.T) {
	for _, tt := range []struct {
		state string
		alarm string
	}{
		{online.StateWaiting, "0"}, {online.StateWatching, "0"}, {online.StateRaised, "1"}, {online.StateWithdrawn, "0"},
	} {
		s := newSink(t, Config{})
		emitWatches(s, watch(online.StateWaiting, "wide"))
		emitWatches(s, watch(tt.state, "wide"))
		wantLines(t, s, "alarm", `
alarm{arm="wide",segment="",study="seat-map",watch="buying-not-worse"} `+tt.alarm+"\n")
		want := ""
		for _, state := range []string{"raised", "waiting", "watching", "withdrawn"} {
			x := "0"
			if state == tt.state {
				x = "1"
			}
			want += `watch_state{arm="wide",segment="",state="` + state + `",study="seat-map",watch="buying-not-worse"} ` + x + "\n"
		}
		wantLines(t, s, "watch_state", want)
	}
}

// A watch and the alarm it raises are one series, whichever comes in a step.
func TestAlarmOfAWatchIsItsSeries(t *testing.T) {
	s := newSink(t, Config{})
	reading := effect("wide", platform("web"))
	raised := online.Alarm{Study: "seat-map", Watch: "buying-not-worse", State: online.StateRaised, Reading: &reading}
	emitWatches(s, watch(online.StateWatching, "wide", platform("web")))
	s.Emit(online.Output{Alarms: []online.Alarm{raised}})
	wantLines(t, s, "alarm", `
alarm{arm="wide",segment="platform=web",study="seat-map",watch="buying-not-worse"} 1
`)
	s.Emit(online.Output{Alarms: []online.Alarm{raised}, Watches: []online.WatchReading{watch(online.StateRaised, "wide", platform("web"))}})
	wantLines(t, s, "alarm", `
alarm{arm="wide",segment="platform=web",study="seat-map",watch="buying-not-worse"} 1
`)
	withdrawn := raised
	withdrawn.State = online.StateWithdrawn
	s.Emit(online.Output{Alarms: []online.Alarm{withdrawn}})
	wantLines(t, s, "alarm", `
alarm{arm="wide",segment="platform=web",study="seat-map",watch="buying-not-worse"} 0
`)
}

// Silence and allocation checks are no watches, and have no state of one.
func TestAlarmsWithoutAWatch(t *testing.T) {
	s := newSink(t, Config{})
	s.Emit(online.Output{Alarms: []online.Alarm{
		{Watch: "silent", State: online.StateRaised},
		{Study: "seat-map", Watch: "allocation: units entered", State: online.StateRaised},
	}})
	s.Emit(online.Output{Alarms: []online.Alarm{{Watch: "silent", State: online.StateWithdrawn}}})
	wantLines(t, s, "alarm", `
alarm{arm="",segment="",study="",watch="silent"} 0
alarm{arm="",segment="",study="seat-map",watch="allocation: units entered"} 1
`)
	wantLines(t, s, "watch_state", "")
}

// A segment without a place gets one as soon as its alarm is raised, and keeps it.
func TestRaisedAlarmIsShownBeyondTheBound(t *testing.T) {
	s := newSink(t, Config{MaxSeries: 1})
	emitWatches(s, watch(online.StateWatching, "wide", platform("web")), watch(online.StateWatching, "wide", platform("app")),
		watch(online.StateWatching, "wide", platform("kiosk")))
	wantLines(t, s, "series_dropped", "series_dropped 2\n")
	emitWatches(s, watch(online.StateRaised, "wide", platform("app")))
	wantLines(t, s, "alarm", `
alarm{arm="wide",segment="platform=app",study="seat-map",watch="buying-not-worse"} 1
alarm{arm="wide",segment="platform=web",study="seat-map",watch="buying-not-worse"} 0
`)
	wantLines(t, s, "series_dropped", "series_dropped 1\n")
	emitWatches(s, watch(online.StateWithdrawn, "wide", platform("app")))
	wantLines(t, s, "alarm", `
alarm{arm="wide",segment="platform=app",study="seat-map",watch="buying-not-worse"} 0
alarm{arm="wide",segment="platform=web",study="seat-map",watch="buying-not-worse"} 0
`)
	reading := effect("wide", platform("kiosk"))
	s.Emit(online.Output{Alarms: []online.Alarm{{Study: "seat-map", Watch: "buying-not-worse", State: online.StateRaised, Reading: &reading}}})
	wantLines(t, s, "series_dropped", "series_dropped 0\n")
}
