package oracle_test

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"time"
)

// day is when the ferry company's recorded days begin.
var day = time.Date(2026, 5, 4, 0, 0, 0, 0, time.UTC)

// A scribe writes what happens on the ticket site, each event with the time at which it arrives
// and the place where it is recorded: on the site (0) or in the harbour (1).
type scribe struct {
	rng  *rand.Rand
	n    int
	rows []row
}

type row struct {
	arrives time.Time
	part    int
	text    string
}

func (s *scribe) note(at time.Time, fields string) {
	s.n++
	s.put(at, fmt.Sprintf(`{"id":"%c-%03d","ts":%q,%s}`, 'a'+(s.n*11)%26, s.n, at.Format(time.RFC3339Nano), fields))
}

// put records a line; it may come up to the lateness (20m) late, and twice.
func (s *scribe) put(at time.Time, text string) {
	r := row{arrives: at, text: text}
	if s.rng.IntN(4) == 0 {
		r.part = 1
	}
	if s.rng.IntN(3) == 0 {
		r.arrives = at.Add(time.Duration(s.rng.IntN(19)) * time.Minute)
	}
	s.rows = append(s.rows, r)
	if s.rng.IntN(25) == 0 {
		again := r
		again.arrives = at.Add(19 * time.Minute)
		if s.rng.IntN(2) == 0 {
			again.part = 1 - r.part
		}
		s.rows = append(s.rows, again)
	}
}

// amount is a fare, with cents.
func (s *scribe) amount() string { return fmt.Sprint(float64(1500+s.rng.IntN(30000)) / 100) }

// ferryDays are the two partitions' lines.
func ferryDays() [2]string {
	s := &scribe{rng: rand.New(rand.NewPCG(26, 5))}
	s.note(day, `"type":"harbour-light","lamp":1`)
	for i := range 68 {
		s.passenger(i)
	}
	s.edges()
	s.trouble()
	s.note(day.Add(80*time.Hour), `"type":"harbour-light","lamp":2`)
	slices.SortStableFunc(s.rows, func(a, b row) int { return a.arrives.Compare(b.arrives) })
	var parts [2]strings.Builder
	for _, r := range s.rows {
		parts[r.part].WriteString(r.text + "\n")
	}
	return [2]string{parts[0].String(), parts[1].String() + "   \n"}
}

// passenger comes once or twice, is shown an offer, looks around, pays and buys.
func (s *scribe) passenger(i int) {
	key := fmt.Sprintf(`"passenger":"p-%02d"`, i)
	switch i % 13 {
	case 5:
		key = fmt.Sprintf(`"passenger":%d`, 4000+i)
	case 9:
		key = fmt.Sprintf(`"passenger":"\u00c5se %d"`, i)
	}
	entry := day.Add(30*time.Hour + time.Duration(s.rng.IntN(44*3600*1000))*time.Millisecond)
	for range s.rng.IntN(3) {
		s.note(entry.Add(-time.Duration(s.rng.IntN(30*3600))*time.Second), `"type":"ticket",`+key+`,"amount":`+s.amount())
	}
	arm := []string{"plain", "photo", "film"}[s.rng.IntN(3)]
	platform := []string{`"web"`, `"web"`, `"app"`, `"app"`, `"kiosk"`, `"phone"`, `"desk"`}[s.rng.IntN(7)]
	age := fmt.Sprintf(`,"age":%d`, 18+s.rng.IntN(60))
	s.note(entry, fmt.Sprintf(`"type":"assign","trial":"cabin-offer",%s,"arm":%q,"platform":%s%s`, key, arm, platform, age))
	if i%3 != 0 {
		s.note(entry, fmt.Sprintf(`"type":"assign","trial":"deck-notice",%s,"arm":%q,"platform":%s,"country":%q`,
			key, []string{"off", "on"}[s.rng.IntN(2)], platform, []string{"no", "se"}[s.rng.IntN(2)]))
	}
	for range s.rng.IntN(5) {
		at := entry.Add(time.Duration(s.rng.IntN(10*3600)) * time.Second)
		switch s.rng.IntN(4) {
		case 0, 1:
			s.note(at, `"type":"visit",`+key)
		case 2:
			s.note(at, fmt.Sprintf(`"type":"pay",%s,"ms":%d`, key, 150+s.rng.IntN(1100)))
		default:
			s.note(at, `"type":"ticket",`+key+`,"amount":`+s.amount())
		}
	}
}

// edges are events at the edges of every window, and units that are seen twice.
func (s *scribe) edges() {
	offer := func(at time.Time, who, arm, platform string) {
		s.note(at, fmt.Sprintf(`"type":"assign","trial":"cabin-offer","passenger":%q,"arm":%s,"platform":%s,"age":40`, who, arm, platform))
	}
	ticket := func(at time.Time, who, amount string) {
		s.note(at, fmt.Sprintf(`"type":"ticket","passenger":%q,"amount":%s`, who, amount))
	}
	at := day.Add(40*time.Hour + 7*time.Minute)
	ticket(at.Add(-24*time.Hour), "edge", "11")    // the past begins
	ticket(at.Add(-24*time.Hour-1), "edge", "500") // a moment too early
	ticket(at.Add(-1), "edge", "7.5")              // the past ends
	ticket(at, "edge", "20")                       // at entry: whatever its id, it counts
	offer(at, "edge", `"photo"`, `"web"`)
	ticket(at.Add(8*time.Hour-1), "edge", "30.25")
	ticket(at.Add(8*time.Hour), "edge", "900") // complete: too late
	offer(at.Add(8*time.Hour), "edge", `"film"`, `"web"`)
	offer(at.Add(38*time.Hour-1), "edge", `"photo"`, `"web"`) // a moment too early to enter anew
	offer(at.Add(38*time.Hour), "edge", `"film"`, `"app"`)    // enters anew, in another arm

	at = day.Add(35 * time.Hour)
	offer(at, "two-arms", `"plain"`, `"app"`)
	ticket(at.Add(time.Hour), "two-arms", "44")
	offer(at.Add(2*time.Hour), "two-arms", `"film"`, `"app"`)
	ticket(at.Add(3*time.Hour), "two-arms", "55")
	s.note(at, `"type":"assign","trial":"deck-notice","passenger":"leaver","arm":"on","platform":"web","country":"no"`)
	ticket(at.Add(time.Hour), "leaver", "66")
	s.note(at.Add(2*time.Hour), `"type":"assign","trial":"deck-notice","passenger":"leaver","arm":"off","platform":"web","country":"no"`)
	ticket(at.Add(3*time.Hour), "leaver", "77")

	offer(at, "undeclared", `"velvet"`, `"web"`)
	offer(at, "armless", `null`, `"web"`)
	offer(at.Add(time.Hour), "armless", `"plain"`, `"web"`)
	offer(at.Add(2*time.Hour), "armless", `"plain"`, `"web"`) // entered already, in the same arm
	offer(at.Add(3*time.Hour), "nowhere", `"plain"`, `null`)
	offer(day.Add(24*time.Hour-1), "too-early", `"plain"`, `"web"`)
	offer(day.Add(36*time.Hour), "too-early", `"plain"`, `"web"`)
	offer(day.Add(24*time.Hour), "first", `"plain"`, `"web"`)
	offer(day.Add(76*time.Hour-1), "last", `"film"`, `"web"`)
	offer(day.Add(76*time.Hour), "too-late", `"film"`, `"web"`)
	for i := range 6 {
		ticket(day.Add(time.Duration(20+9*i)*time.Hour), "never-asked", s.amount())
	}
}

// trouble is what arrives broken, too late, without a key, or with values of another type.
func (s *scribe) trouble() {
	at := day.Add(50 * time.Hour)
	for _, text := range []string{
		`{"id":"t-1","ts":"2026-05-06T02:00:00Z","type":"visit"`,
		`["2026-05-06T02:00:00Z"]`,
		`{"id":"t-2","ts":"last Tuesday","type":"visit","passenger":"p-01"}`,
		`{"id":"t-3","type":"visit","passenger":"p-01"}`,
		`{"id":"t-4","ts":"1999-12-31T23:59:59Z","type":"visit","passenger":"p-01"}`,
		`{"id":"t-5","ts":"2026-05-06T02:00:00Z","type":"ticket","passenger":"p-01","amount":"forty"}`,
		`{"id":"t-6","ts":"2026-05-06T02:00:00Z","type":"ticket","passenger":"p-01","amount":1e999}`,
		`{"id":"t-7","ts":"2026-05-06T02:00:00Z","type":"pay","passenger":"p-01","ms":"NaN"}`,
		"{\"id\":\"t-8\",\"ts\":\"2026-05-06T02:00:00Z\",\"type\":\"visit\",\"passenger\":\"\xc3\"}",
	} {
		s.rows = append(s.rows, row{arrives: at, text: text})
		at = at.Add(time.Minute)
	}
	s.note(at, `"type":"ticket","passenger":"p-02","amount":null`)
	s.note(at, `"type":"ticket","passenger":"p-03"`)
	s.note(at, `"type":"ticket","amount":12`)
	s.note(at, `"type":"visit","passenger":null`)
	s.note(at, `"type":"visit","amount":"not asked for, so of no harm","passenger":"p-04"`)
	s.note(at, `"type":"pay","passenger":"p-04"`)
	late := fmt.Sprintf(`{"id":"t-9","ts":%q,"type":"visit","passenger":"p-05"}`, at.Add(-3*time.Hour).Format(time.RFC3339))
	s.rows = append(s.rows, row{arrives: at.Add(time.Hour), text: late})
	s.rows = append(s.rows, row{arrives: at.Add(time.Hour), text: `{"ts":"2026-05-06T03:30:00+00:15","type":"visit","passenger":"p-06"}`})
}
