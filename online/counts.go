package online

// Outcomes count what became of the events that the stream delivered, for one study.
// The parts add up to all delivered events.
type Outcomes struct {
	Applied     int64 `json:"applied"`     // tallied, or admitted a unit
	Filtered    int64 `json:"filtered"`    // matches nothing, lacks the key, or brings only absent values
	Outside     int64 `json:"outside"`     // matches, but outside its unit's follow-up or past
	Waiting     int64 `json:"waiting"`     // held for a unit that may yet enter
	Conflicting int64 `json:"conflicting"` // a contrary entry, or of a unit that left for one
	Unsampled   int64 `json:"unsampled"`   // of a unit that was not admitted for want of memory
}

// Add adds up.
func (o *Outcomes) Add(p Outcomes) {
	o.Applied += p.Applied
	o.Filtered += p.Filtered
	o.Outside += p.Outside
	o.Waiting += p.Waiting
	o.Conflicting += p.Conflicting
	o.Unsampled += p.Unsampled
}

// Total is all that is counted here.
func (o Outcomes) Total() int64 {
	return o.Applied + o.Filtered + o.Outside + o.Waiting + o.Conflicting + o.Unsampled
}
