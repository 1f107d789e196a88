package online

import "encoding/json"

// A Reading is one emitted value of an estimate, with its error, interval and
// evidence. Its JSON is the contract users script against.
type Reading struct {
	Kind      string             `json:"kind"` // "reading"
	Study     string             `json:"study"`
	Estimate  string             `json:"estimate"`
	Contrast  string             `json:"contrast,omitempty"`
	Arm       string             `json:"arm,omitempty"`
	Baseline  string             `json:"baseline,omitempty"`
	Segment   Segment            `json:"segment"`
	Time      string             `json:"time"` // RFC 3339, UTC
	Value     *float64           `json:"value"`
	StdError  *float64           `json:"std_error"`
	Units     Counts             `json:"units"`
	Level     float64            `json:"level"`
	Interval  *[2]float64        `json:"interval"`
	Anytime   *[2]float64        `json:"anytime"`
	Why       map[string]string  `json:"why,omitempty"` // field -> why it is null
	Method    string             `json:"method,omitempty"`
	Error     float64            `json:"error,omitempty"`
	PNow      Maybe              `json:"p_now,omitzero"` // contrasts only
	PAnytime  Maybe              `json:"p_anytime,omitzero"`
	EValue    *float64           `json:"e_value,omitempty"` // where the method has one
	Provision *Provisional       `json:"provisional,omitempty"`
	Sampling  float64            `json:"sampling"`
	Heaviest  *float64           `json:"heaviest,omitempty"`
	Assumes   string             `json:"assumes,omitempty"`
	Present   map[string]float64 `json:"present,omitempty"` // among: present: its share by arm
	Dropped   []string           `json:"dropped,omitempty"` // collinear covariates left out
	Gap       []string           `json:"gap,omitempty"`     // [from, to]
	AtAlarm   bool               `json:"at_alarm,omitempty"`
	Final     bool               `json:"final,omitempty"`
}

// Maybe is a number that an output may lack (the zero value), or have as null.
type Maybe struct {
	Has   bool
	Value *float64
}

// MarshalJSON writes the number or null.
func (m Maybe) MarshalJSON() ([]byte, error) { return json.Marshal(m.Value) }

// IsZero tells that the output lacks it.
func (m Maybe) IsZero() bool { return !m.Has }

// Provisional is a value over all units seen so far, complete or not.
type Provisional struct {
	Value    *float64 `json:"value"`
	StdError *float64 `json:"std_error"`
	Units    Counts   `json:"units"`
}

// Segment is a set of field=value pairs; empty is everyone. Marshals in the
// order of the file's `by`.
type Segment []Pair

// A Pair is one field of a segment with its value.
type Pair struct{ Field, Value string }

// Counts are numbers of units by arm, in the order of the arms.
type Counts []Named

// Named is a count with its arm's name.
type Named struct {
	Name string
	N    int64
}

// A WatchReading is what a watch says of itself at a step: its interval at its own error.
type WatchReading struct {
	Kind     string            `json:"kind"` // "watch"
	Study    string            `json:"study"`
	Watch    string            `json:"watch"`
	Estimate string            `json:"estimate"`
	Arm      string            `json:"arm,omitempty"`
	Segment  Segment           `json:"segment"`
	Time     string            `json:"time"`
	State    string            `json:"state"` // one of the State constants
	Bound    *[2]*float64      `json:"bound"`
	Why      map[string]string `json:"why,omitempty"`
	Method   string            `json:"method,omitempty"`
	Error    float64           `json:"error"`
	Evidence *Evidence         `json:"evidence"`
	Final    bool              `json:"final,omitempty"`
}

// Evidence is what a watch's rule compares: an e-value or a p-value with its threshold.
type Evidence struct {
	EValue    *float64 `json:"e_value,omitempty"`
	PAnytime  *float64 `json:"p_anytime,omitempty"`
	Threshold float64  `json:"threshold"`
}

// An Alarm is what a watch, an allocation check or a silent stream raises.
type Alarm struct {
	Kind     string       `json:"kind"` // "alarm"
	ID       string       `json:"id"`   // stable: the same event of the same study always has it
	Study    string       `json:"study,omitempty"`
	Watch    string       `json:"watch"`
	State    string       `json:"state"` // "raised", "withdrawn"
	Time     string       `json:"time"`
	Words    string       `json:"words"` // one sentence for a person
	Evidence *Evidence    `json:"evidence,omitempty"`
	Bound    *[2]*float64 `json:"bound,omitempty"`
	Reading  *Reading     `json:"reading,omitempty"`
	AtAlarm  bool         `json:"at_alarm"`
	Final    bool         `json:"final,omitempty"`
}
