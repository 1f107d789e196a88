package station

import (
	"encoding/json"
	"errors"
	"fmt"
	"maps"
	"slices"
	"strings"
	"sync"
	"time"

	"go.uber.org/zap"

	"stillwell/config"
	"stillwell/online"
	"stillwell/online/wire"
	filesink "stillwell/sinks/file"
	"stillwell/stream/checkpoint"
	"stillwell/stream/order"
)

// Meta is what a checkpoint says besides its pages.
type Meta struct {
	Version  int                        `json:"version"`
	Step     int64                      `json:"step"`     // end of the last evaluated step, Unix nanoseconds
	Begun    int64                      `json:"begun"`    // time of the earliest delivered event
	Settled  order.Verdicts             `json:"settled"`  // of all events up to Step
	Streams  []order.State              `json:"streams"`  // by partition
	Sink     *filesink.Place            `json:"sink"`     // how far the file sink was good
	Pending  *filesink.Lines            `json:"pending"`  // lines of Step itself that are still to be written
	Prints   map[string]Print           `json:"prints"`   // by study; "" is the stream
	Saved    time.Time                  `json:"saved"`    // by the wall clock, for people
	Outcomes map[string]online.Outcomes `json:"outcomes"` // for people
}

// Print is what of a study or stream decides numbers, as it was when the state was made.
type Print struct {
	Hash  string   `json:"hash"`
	Lines []string `json:"lines"`
}

const metaVersion = 1

// bytes is all of the head that the stream decides.
func (m Meta) bytes() []byte {
	m.Saved = time.Time{}
	b, err := json.Marshal(m)
	if err != nil {
		panic(fmt.Sprintf("station: the head of a checkpoint cannot be written: %v", err)) // it holds numbers and texts only
	}
	return b
}

// keeper writes checkpoints aside while the stream goes on.
type keeper struct {
	store *checkpoint.Store
	every time.Duration
	log   *zap.Logger
	now   func() time.Time
	sink  *filesink.Sink // nil: none
	after func(Meta)     // called when a checkpoint is durable

	unsaved map[string]online.Page // copies taken since the last commit began
	removed []string
	meta    Meta
	have    bool // meta and unsaved hold a step's end that is not yet committed

	taken   time.Time     // of the last copy
	begun   time.Time     // of the last commit
	took    time.Duration // how long it wrote
	writing chan error    // nil: none under way
	under   handover      // what that one writes
	whole   bool          // the next copy holds everything: what the store had is damaged

	mu    sync.Mutex
	stats KeeperStats
}

// handover is what a commit brings to the store.
type handover struct {
	pages   map[string]online.Page
	removed []string
	meta    Meta
	done    bool // the store has it, and will remember it if the commit fails
}

// KeeperStats are a keeper's numbers, for metrics.
type KeeperStats struct {
	Last     time.Time     // when the last checkpoint became durable
	Duration time.Duration // how long it took to write
	Held     time.Duration // how long the last copy held up the stream
	Failed   int64
	Bytes    int64
}

// copyEvery is the least time between two copies of a step's end.
const copyEvery = time.Second

func newKeeper(store *checkpoint.Store, every time.Duration, log *zap.Logger, sink *filesink.Sink, after func(Meta)) *keeper {
	now := time.Now()
	return &keeper{store: store, every: every, log: log, now: time.Now, sink: sink, after: after,
		unsaved: map[string]online.Page{}, begun: now}
}

// due tells whether a copy of the step's end should be taken.
func (k *keeper) due() bool { return k.now().Sub(k.taken) >= min(copyEvery, k.every) }

// take copies what has changed, at a step's end.
func (k *keeper) take(e *engine, meta Meta) {
	start := k.now()
	pages := make([][]online.Page, len(e.shards))
	var wg sync.WaitGroup
	for w := range e.workers {
		wg.Go(func() {
			for i := w; i < len(e.shards); i += e.workers {
				pages[i] = e.shards[i].Snapshot(k.whole)
			}
		})
	}
	wg.Wait()
	for _, ps := range pages {
		for _, p := range ps {
			k.unsaved[p.Name] = p
		}
	}
	for _, p := range e.desk.Snapshot(k.whole) {
		k.unsaved[p.Name] = p
	}
	k.whole = false
	k.meta, k.have = meta, true
	k.taken = k.now()
	k.mu.Lock()
	k.stats.Held = k.taken.Sub(start)
	k.mu.Unlock()
}

// poll begins a commit when it is time for one. Writing takes at most a tenth of the time.
func (k *keeper) poll() error {
	if k.writing != nil {
		select {
		case err := <-k.writing:
			k.writing = nil
			k.done(err)
		default:
			return nil
		}
	}
	if !k.have || k.now().Sub(k.begun) < max(k.every, 10*k.took) {
		return nil
	}
	k.begin()
	return nil
}

func (k *keeper) begin() {
	k.under = handover{pages: k.unsaved, meta: k.meta}
	for _, name := range k.removed {
		if _, again := k.unsaved[name]; !again { // of a study that began anew
			k.under.removed = append(k.under.removed, name)
		}
	}
	k.unsaved, k.have, k.removed = map[string]online.Page{}, false, nil
	k.begun = k.now()
	done := make(chan error, 1)
	k.writing = done
	go func() { done <- k.write(&k.under) }()
}

func (k *keeper) write(h *handover) error {
	meta := h.meta
	if k.sink != nil {
		if err := k.sink.Sync(); err != nil {
			return err
		}
	}
	meta.Saved = k.now().UTC()
	head, err := json.Marshal(meta)
	if err != nil {
		return err
	}
	changed := make([]checkpoint.Page, 0, len(h.pages))
	for _, name := range slices.Sorted(maps.Keys(h.pages)) {
		var w wire.Writer
		h.pages[name].Encode(&w)
		changed = append(changed, checkpoint.Page{Name: name, Data: w.B})
	}
	h.done = true
	if err := k.store.Commit(head, changed, h.removed); err != nil {
		return err
	}
	if k.sink != nil && meta.Sink != nil {
		if err := k.sink.Durable(*meta.Sink); err != nil {
			k.log.Warn("old files of readings could not be removed", zap.Error(err))
		}
	}
	if k.after != nil {
		k.after(meta)
	}
	return nil
}

func (k *keeper) done(err error) {
	k.took = k.now().Sub(k.begun)
	k.mu.Lock()
	defer k.mu.Unlock()
	k.stats.Duration = k.took
	h := k.under
	k.under = handover{}
	if err != nil {
		if !h.done {
			maps.Copy(h.pages, k.unsaved)
			k.unsaved, k.removed = h.pages, append(h.removed, k.removed...)
		}
		k.stats.Failed++
		var lost *checkpoint.LostError
		k.whole = k.whole || errors.As(err, &lost)
		k.log.Error("no checkpoint could be written; the stream goes on, and the next one will hold everything", zap.Error(err))
		return
	}
	k.stats.Last, k.stats.Bytes = k.now(), k.store.Stats().LiveBytes
}

// save writes the last copied step's end, if it is not yet, and waits for it.
func (k *keeper) save() error {
	if k.writing != nil {
		err := <-k.writing
		k.writing = nil
		k.done(err)
		if err != nil && !k.have {
			return err
		}
	}
	if !k.have {
		return nil
	}
	k.begin()
	err := <-k.writing
	k.writing = nil
	k.done(err)
	return err
}

// Stats tells how the last checkpoint went.
func (k *keeper) Stats() KeeperStats {
	k.mu.Lock()
	defer k.mu.Unlock()
	return k.stats
}

// restore brings an engine to the newest checkpoint. fresh are studies to begin anew.
func restore(snap *checkpoint.Snapshot, f *config.File, fresh []string, e *engine) (Meta, []string, error) {
	var m Meta
	if err := json.Unmarshal(snap.Meta, &m); err != nil {
		return m, nil, fmt.Errorf("state: the checkpoint's head cannot be read: %w", err)
	}
	if m.Version != metaVersion {
		return m, nil, fmt.Errorf("state: made by another version of the program (form %d, this one has %d)", m.Version, metaVersion)
	}
	if err := samePrint("the stream", "", f.StreamPrint, m.Prints[""]); err != nil {
		return m, nil, err
	}
	dropped := map[string]bool{}
	for i := range f.Plan.Studies {
		name := f.Plan.Studies[i].Name
		if slices.Contains(fresh, name) {
			dropped[name] = true
			continue
		}
		if was, ok := m.Prints[name]; ok {
			if err := samePrint("study "+name, name, f.StudyPrints[i], was); err != nil {
				return m, nil, err
			}
		}
	}
	var removed []string
	known := map[string]bool{}
	for i := range f.Plan.Studies {
		known[f.Plan.Studies[i].Name] = true
	}
	for name := range snap.Pages {
		if s := online.StudyOf(name); dropped[s] || !known[s] {
			removed = append(removed, name)
			delete(snap.Pages, name)
		}
	}
	slices.Sort(removed)
	for _, sh := range e.shards {
		if err := sh.Restore(snap.Pages); err != nil {
			return m, nil, err
		}
	}
	if err := e.desk.Restore(snap.Pages); err != nil {
		return m, nil, err
	}
	e.seq.Restore(m.Step, m.Settled)
	e.step, e.begun = m.Step, m.Begun
	if e.begun != order.Never {
		e.begin(m.Step) // studies that are new to the state
	}
	return m, removed, nil
}

// ErrEdited is wrapped by the error of Run when the study file no longer fits the state.
var ErrEdited = errors.New("was another when this state was made")

func samePrint(what, study string, now config.Fingerprint, was Print) error {
	if now.Hash == was.Hash {
		return nil
	}
	way := "give the state another folder (state.dir), or move this one away"
	if study != "" {
		way = fmt.Sprintf("run with --fresh %s to begin it anew, or undo the change", study)
	}
	return fmt.Errorf("state: %s %w, and units cannot be counted half by one rule and half by another:\n  %s\n%s",
		what, ErrEdited, strings.Join(now.Changes(was.Lines), "\n  "), way)
}

func prints(f *config.File) map[string]Print {
	out := map[string]Print{"": {f.StreamPrint.Hash, f.StreamPrint.Lines}}
	for i := range f.Plan.Studies {
		out[f.Plan.Studies[i].Name] = Print{f.StudyPrints[i].Hash, f.StudyPrints[i].Lines}
	}
	return out
}
