package station

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"os"
	"time"

	"go.uber.org/zap"

	"stillwell/config"
	"stillwell/online"
	filesink "stillwell/sinks/file"
	"stillwell/stream"
	"stillwell/stream/checkpoint"
	"stillwell/stream/file"
	"stillwell/stream/kafka"
	"stillwell/stream/order"
)

// RunOptions are settings of a run that are not the file's.
type RunOptions struct {
	Fresh   []string // studies to begin anew
	Workers int      // 0: as many as there are processors
	Log     *zap.Logger
	Source  stream.Source       // nil: the file's
	Watch   func(online.Output) // called with what each step says, from the stream's goroutine; may be nil
}

// A station is a running study file.
type station struct {
	file     *config.File
	log      *zap.Logger
	eng      *engine
	keeper   *keeper
	sink     *filesink.Sink // nil: none
	known    map[string]order.State
	restored []byte      // head of the checkpoint that this run began from; nil: none, or it must be replaced
	last     []time.Time // when each partition last brought something
	silent   bool        // the alarm of silence has been raised
	ending   bool        // the last view: no checkpoint comes after it
	watch    func(online.Output)
	vitals   *vitals
	audit    auditor
}

// patience bounds the events that wait for their step's end, in a run; see engine.
const patience = 2_000_000

// patienceWithGroup is how long the start waits for the group's coordinator.
const patienceWithGroup = 15 * time.Second

// Run is the daemon: it reads the file's stream until that ends, or ctx does, and then
// leaves a checkpoint from which the next Run goes on as if nothing had happened.
func Run(ctx context.Context, f *config.File, opt RunOptions) (err error) {
	if err := f.Plan.Compile(); err != nil {
		return err
	}
	if err := runApart(f); err != nil {
		return err
	}
	store, err := checkpoint.Open(f.State.Dir, checkpoint.Options{Log: opt.Log})
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, store.Close()) }()
	snap, err := store.Load()
	if err != nil {
		return err
	}
	st := &station{file: f, log: opt.Log, watch: opt.Watch, known: map[string]order.State{}}
	st.eng = newEngine(f.Plan, order.New(sequencing(f)), workersOr(opt.Workers), st.step)
	st.eng.patience = patience
	var meta Meta
	var removed []string
	if snap != nil {
		if meta, removed, err = restore(snap, f, opt.Fresh, st.eng); err != nil {
			return err
		}
	}
	for _, s := range meta.Streams {
		st.known[s.Name] = s
	}
	if s := f.Sinks.File; s != nil {
		st.sink, err = filesink.Open(filesink.Config{Readings: s.Path, Alarms: s.Alarms, MaxBytes: s.Rotate.Size, Keep: s.Rotate.Keep}, meta.Sink)
		if err != nil {
			return err
		}
		defer func() { err = errors.Join(err, st.sink.Close()) }()
		if meta.Pending != nil {
			if err := st.sink.Emit(*meta.Pending); err != nil {
				return err
			}
		}
	}
	if st.vitals, err = openVitals(f.Sinks.Prometheus, opt); err != nil {
		return err
	}
	defer func() { err = errors.Join(err, st.vitals.close()) }()
	if snap != nil {
		st.vitals.show(st.eng.desk.Latest(st.eng.step))
	}
	var after func(Meta)
	src := opt.Source
	if src == nil {
		if src, after, err = source(ctx, f, opt.Log); err != nil {
			return err
		}
	}
	st.keeper = newKeeper(store, f.State.Every, opt.Log, st.sink, after)
	st.keeper.removed = removed
	if snap != nil && len(removed) == 0 {
		st.restored = meta.bytes()
	}
	if k, ok := src.(*kafka.Source); ok {
		st.vitals.lag = k.Lag
	}
	return st.run(ctx, src, meta.Streams, workersOr(opt.Workers))
}

func (st *station) run(ctx context.Context, src stream.Source, known []order.State, workers int) (err error) {
	var readers []*reader
	rejects, err := openRejects(st.file, st.log)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, rejects.close()) }()
	var put func(Reject)
	if rejects != nil {
		put = rejects.put
	}
	for range workers {
		r, err := newReader(st.file.Plan, rules(st.file), put)
		if err != nil {
			return err
		}
		readers = append(readers, r)
	}
	if err := flow(ctx, src, newIntake(known), readers, st.handle); err != nil {
		return errors.Join(err, st.keeper.save())
	}
	if m := st.meta(nil); st.eng.clean && (st.restored == nil || !bytes.Equal(m.bytes(), st.restored)) {
		st.keeper.take(st.eng, m)
	}
	if err := st.keeper.save(); err != nil {
		return err
	}
	if ctx.Err() != nil {
		st.log.Info("stopped", zap.Time("step", time.Unix(0, st.eng.step).UTC()))
		return nil
	}
	st.ending = true
	err = st.eng.finish()
	st.vitals.take(st, true)
	if err == nil && st.sink != nil {
		err = st.sink.End()
	}
	return err
}

// handle takes what the source says, one thing at a time.
func (st *station) handle(j *job) error {
	i := j.part.Index
	for len(st.last) <= i {
		st.last = append(st.last, time.Now())
	}
	switch j.kind {
	case jobOpen:
		var state *order.State
		if s, ok := st.known[j.part.Name]; ok {
			state = &s
		}
		st.eng.seq.Open(j.part, state)
		return nil
	case jobChunk:
		if j.batch.Len() > 0 {
			st.last[i] = time.Now()
			st.silent = false
		}
		if err := st.eng.add(j.batch); err != nil {
			return err
		}
	case jobEnd:
		st.eng.seq.End(i)
		if err := st.eng.advance(); err != nil {
			return err
		}
	case jobCaughtUp:
		if err := st.quiet(i); err != nil {
			return err
		}
	case jobGap:
		st.log.Error("events are missing", zap.String("partition", j.part.Name), zap.Int64("from", j.gap[0]), zap.Int64("to", j.gap[1]), zap.String("why", j.why))
		st.eng.seq.Gap(i)
	}
	st.vitals.take(st, false)
	return st.keeper.poll()
}

// quiet leaves a partition out of the watermark when it has been silent for long enough, and
// raises an alarm when all have.
func (st *station) quiet(i int) error {
	seq := st.eng.seq
	if !seq.Idle(i) && time.Since(st.last[i]) >= st.file.Stream.Idle {
		st.log.Info("partition is silent and left out of the watermark", zap.Int("partition", i))
		seq.SetIdle(i)
		if err := st.eng.advance(); err != nil {
			return err
		}
	}
	if st.silent || seq.Newest() == order.Never {
		return nil
	}
	for _, t := range st.last {
		if time.Since(t) < st.file.Stream.Silent {
			return nil
		}
	}
	st.silent = true
	return st.emit(online.Output{Alarms: []online.Alarm{online.SilentAlarm(seq.Newest(), time.Now(), st.file.Stream.Silent)}})
}

// step takes what the desk says at a step's end.
func (st *station) step(out online.Output) error {
	if st.watch != nil {
		st.watch(out)
	}
	st.vitals.show(out)
	st.audit.look(st.eng, st.log)
	lines, err := filesink.Encode(out)
	if err != nil {
		return err
	}
	if st.eng.seq.AnyIdle() && !st.ending {
		// That a partition was left out must be durable before anything that depends on
		// it is seen: after a crash what it brings for this step is late all the same.
		st.keeper.take(st.eng, st.meta(&lines))
		if err := st.keeper.save(); err != nil {
			return err
		}
		return st.write(lines)
	}
	if err := st.write(lines); err != nil {
		return err
	}
	if !st.ending && st.keeper.due() {
		st.keeper.take(st.eng, st.meta(nil))
	}
	return nil
}

func (st *station) write(lines filesink.Lines) error {
	if st.sink == nil {
		return nil
	}
	return st.sink.Emit(lines)
}

// emit writes what is said between steps.
func (st *station) emit(out online.Output) error {
	st.vitals.show(out)
	lines, err := filesink.Encode(out)
	if err != nil {
		return err
	}
	if err := st.write(lines); err != nil {
		return err
	}
	if st.eng.clean {
		st.keeper.take(st.eng, st.meta(nil))
		return st.keeper.save()
	}
	return nil
}

// meta is the head of a checkpoint of the state as it is.
func (st *station) meta(pending *filesink.Lines) Meta {
	m := Meta{Version: metaVersion, Step: st.eng.step, Begun: st.eng.begun, Settled: st.eng.seq.Settled(),
		Streams: st.eng.seq.States(), Pending: pending, Prints: prints(st.file), Outcomes: map[string]online.Outcomes{}}
	if st.sink != nil {
		place := st.sink.Place()
		m.Sink = &place
	}
	for i := range st.file.Plan.Studies {
		m.Outcomes[st.file.Plan.Studies[i].Name] = st.eng.outcomes(i)
	}
	return m
}

// source opens the file's stream; after is told of each durable checkpoint.
func source(ctx context.Context, f *config.File, log *zap.Logger) (stream.Source, func(Meta), error) {
	if s := f.Stream.File; s != nil {
		cfg := file.Config{Paths: []string{s.Path}, Follow: s.Follow, CSV: f.Stream.CSV, MaxLine: f.Stream.MaxLine, Log: log}
		if s.Path == file.StdinName {
			cfg.Stdin = os.Stdin
		}
		src, err := file.New(cfg)
		return renamed{src, written(f)}, nil, err
	}
	s := f.Stream.Kafka
	if s == nil {
		return nil, nil, errors.New("the study file names no stream to run on")
	}
	cfg := kafka.Config{Brokers: s.Brokers, Topics: s.Topics, Group: s.Group, Log: log}
	switch {
	case s.Latest:
		cfg.From = kafka.Latest()
	case s.Since != online.NoTime:
		cfg.From = kafka.At(time.Unix(0, s.Since))
	}
	if t := s.TLS; t != nil {
		cfg.TLS = &kafka.TLS{CAFile: t.CAFile, CertFile: t.CertFile, KeyFile: t.KeyFile}
	}
	if a := s.SASL; a != nil {
		password, ok := os.LookupEnv(a.PasswordEnv)
		if !ok {
			return nil, nil, fmt.Errorf("the environment variable %s, which stream.kafka.sasl.password_env names, is not set", a.PasswordEnv)
		}
		cfg.SASL = &kafka.SASL{Mechanism: a.Mechanism, User: a.User, Password: password}
	}
	src, err := kafka.New(cfg)
	if err != nil {
		return nil, nil, err
	}
	if s.Group == "" {
		return src, nil, nil
	}
	asking, cancel := context.WithTimeout(ctx, patienceWithGroup)
	defer cancel()
	switch err := src.CheckGroup(asking); {
	case errors.Is(err, kafka.ErrGroupInUse):
		return nil, nil, err
	case err != nil && ctx.Err() == nil:
		log.Warn("whether the group has another member is not known; the group is only told of offsets", zap.Error(err))
	}
	return src, func(m Meta) {
		offsets := map[string]int64{}
		for _, p := range m.Streams {
			offsets[p.Name] = p.At.Offset
		}
		if err := src.Commit(ctx, offsets); err != nil && ctx.Err() == nil {
			log.Warn("offsets were not committed to the group; only lag monitors miss them", zap.Error(err))
		}
	}, nil
}
