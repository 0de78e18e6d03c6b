//go:build !wasip1

package main_test

import (
	"context"
	"encoding/binary"
	"encoding/json"
	"math"
	"os"
	"sync"
	"testing"

	"github.com/tetratelabs/wazero"
	"github.com/tetratelabs/wazero/api"
	"github.com/tetratelabs/wazero/imports/wasi_snapshot_preview1"

	"distal/experiments/library"
	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
	"distal/web/build/enginebuild"
)

// compileEngine builds the WebAssembly engine once.
var compileEngine = sync.OnceValues(func() ([]byte, error) {
	dir, err := os.MkdirTemp("", "distal-engine-")
	if err != nil {
		return nil, err
	}
	defer os.RemoveAll(dir)
	path, err := enginebuild.Build(context.Background(), dir)
	if err != nil {
		return nil, err
	}
	return os.ReadFile(path)
})

// engine is the module with its calls, as the browser sees it.
type engine struct {
	t      testing.TB
	module api.Module
}

func startEngine(t testing.TB) *engine {
	t.Helper()
	code, err := compileEngine()
	if err != nil {
		t.Fatal(err)
	}
	ctx := context.Background()
	runtime := wazero.NewRuntime(ctx)
	t.Cleanup(func() { runtime.Close(ctx) })
	wasi_snapshot_preview1.MustInstantiate(ctx, runtime)
	module, err := runtime.InstantiateWithConfig(ctx, code, wazero.NewModuleConfig().WithStartFunctions("_initialize"))
	if err != nil {
		t.Fatal(err)
	}
	return &engine{t, module}
}

func (e *engine) call(name string, args ...uint64) int32 {
	e.t.Helper()
	result, err := e.module.ExportedFunction(name).Call(context.Background(), args...)
	if err != nil {
		e.t.Fatalf("%s: %v", name, err)
	}
	return int32(uint32(result[0]))
}

func (e *engine) put(text []byte) uint64 {
	at := e.call("buffer", uint64(len(text)))
	if !e.module.Memory().Write(uint32(at), text) {
		e.t.Fatal("the buffer is out of range")
	}
	return uint64(len(text))
}

func (e *engine) result() []byte {
	at, n := e.call("result_ptr"), e.call("result_len")
	text, ok := e.module.Memory().Read(uint32(at), uint32(n))
	if !ok {
		e.t.Fatal("the result is out of range")
	}
	return append([]byte(nil), text...)
}

func (e *engine) must(code int32) {
	e.t.Helper()
	if code != 0 {
		e.t.Fatalf("engine: %s", e.result())
	}
}

func (e *engine) open(text []byte, seed uint64) {
	e.t.Helper()
	n := e.put(text)
	e.must(e.call("open", n, seed&0xFFFFFFFF, seed>>32, 0, 0))
}

// frame reads the words of dots and patches that a call of frame describes.
func (e *engine) frame(n int) (dots, patches []byte) {
	memory := e.module.Memory()
	at := uint32(e.call("frame", uint64(n)))
	head, ok := memory.Read(at, 24)
	if !ok {
		e.t.Fatal("the header is out of range")
	}
	words := make([]uint32, 6)
	for i := range words {
		words[i] = binary.LittleEndian.Uint32(head[4*i:])
	}
	dots, _ = memory.Read(words[0], words[1]*16)
	patches, _ = memory.Read(words[2], words[3]*48)
	return dots, patches
}

func canonicalStudy(t testing.TB, name string) (*study.Study, []byte) {
	t.Helper()
	s, problems := library.Read(name)
	if problems.Failed() {
		t.Fatal(problems)
	}
	text, err := value.Canonical(s.Encode())
	if err != nil {
		t.Fatal(err)
	}
	return s, text
}

func observerFor(name string) rehearsal.Observer {
	if name == "walking-direction" {
		return rehearsal.Observer{Threshold: 12, Slope: 2, Lapse: 0.02, Conditions: map[string]float64{"inverted": 2}}
	}
	return rehearsal.Observer{Threshold: 0.2, Slope: 2, Lapse: 0.02}
}

// Whole runs through both engines: every step, every float of every frame and
// every digest is the same, bit for bit, over more than two thousand trials.
func TestNativeAndWebAssemblyAgree(t *testing.T) {
	t.Parallel()
	e := startEngine(t)
	trials, frames := 0, 0
	for _, name := range library.Names() {
		s, text := canonicalStudy(t, name)
		for seed := uint64(1); seed <= runsOf(name); seed++ {
			seed := seed * 0x9E3779B97F4A7C15
			screen := rehearsal.DefaultScreen()
			screen.DropRate, screen.SkipDisplays = 0.02, true
			screen.RefreshMs = []float64{1000.0 / 60, 1000.0 / 144, 1000.0 / 59.94}[seed%3]
			records, err := rehearsal.Observe(s, run.Assignment{Seed: seed}, observerFor(name), screen, "d", 0)
			if err != nil {
				t.Fatal(err)
			}
			e.open(text, seed)
			native, err := run.New(s, run.Assignment{Seed: seed})
			if err != nil {
				t.Fatal(err)
			}
			for i := range records {
				want, err := value.Canonical(native.Next().Encode(s))
				if err != nil {
					t.Fatal(err)
				}
				e.must(e.call("next"))
				if got := e.result(); string(got) != string(want) {
					t.Fatalf("%s: step before record %d:\n%s\nwant\n%s", name, i+1, got, want)
				}
				if records[i].Kind == run.KindTrial {
					trials++
					frames += compareTrial(t, e, native, records[i].Trial)
					records[i].Trial.Digest = native.Digest()
				}
				body, err := value.Canonical(records[i].Encode())
				if err != nil {
					t.Fatal(err)
				}
				n := e.put(body)
				e.must(e.call("apply", n))
				if err := native.Apply(&records[i]); err != nil {
					t.Fatal(err)
				}
			}
		}
	}
	t.Logf("%d trials, %d frames", trials, frames)
	if trials < 2000 {
		t.Errorf("only %d trials were compared", trials)
	}
}

func compareTrial(t *testing.T, e *engine, native *run.Run, trial *run.TrialRecord) int {
	t.Helper()
	e.must(e.call("begin_trial"))
	native.BeginTrial()
	for i := range trial.Steps {
		for _, x := range adjustedAt(trial, i) {
			if _, err := e.module.ExportedFunction("adjust").Call(context.Background(), math.Float64bits(x)); err != nil {
				t.Fatal(err)
			}
			native.Adjust(x)
		}
		step := trial.Steps[max(i-1, 0)]
		dots, patches := e.frame(step)
		l := native.Frame(step)
		if len(dots) != 16*len(l.Dots) || len(patches) != 48*len(l.Patches) {
			t.Fatalf("trial %d, frame %d: the lists differ in length", trial.Trial, i)
		}
		for j, d := range l.Dots {
			for k, x := range [4]float32{d.XDeg, d.YDeg, d.DiameterDeg, d.Contrast} {
				if got := binary.LittleEndian.Uint32(dots[16*j+4*k:]); got != math.Float32bits(x) {
					t.Fatalf("trial %d, frame %d, dot %d, value %d: %x, want %x", trial.Trial, i, j, k, got, math.Float32bits(x))
				}
			}
		}
	}
	body, err := json.Marshal(map[string]any{
		"response": "left", "rt_ms": 500, "input": "keyboard", "onset_ms": 1, "offset_ms": 2,
		"frame_steps": trial.Steps, "intervals_ms": trial.IntervalsMs, "interrupted": "",
	})
	if err != nil {
		t.Fatal(err)
	}
	n := e.put(body)
	e.must(e.call("finish_trial", n))
	var record struct{ Digest string }
	if err := json.Unmarshal(e.result(), &record); err != nil {
		t.Fatal(err)
	}
	if record.Digest != native.Digest() {
		t.Fatalf("trial %d: digest %s, want %s", trial.Trial, record.Digest, native.Digest())
	}
	return len(trial.Steps)
}

// adjustedAt are the settings that frame i is the first to show.
func adjustedAt(trial *run.TrialRecord, i int) (list []float64) {
	if trial.Given == nil {
		return nil
	}
	for k, at := range trial.Given.AdjustFrames {
		if int(at) == i {
			list = append(list, trial.Given.AdjustValues[k])
		}
	}
	return list
}

// Hostile texts give a message, and the engine goes on.
func TestEngineRefuses(t *testing.T) {
	t.Parallel()
	e := startEngine(t)
	for name, text := range map[string]string{"open": `{"distal":1}`, "apply": `{}`, "finish_trial": `[`, "calibrate": `{"of":"moon"}`} {
		n := e.put([]byte(text))
		args := []uint64{n}
		if name == "open" {
			args = append(args, 0, 0, 0, 0)
		}
		if e.call(name, args...) == 0 || len(e.result()) == 0 {
			t.Errorf("%s accepted %s", name, text)
		}
	}
	_, text := canonicalStudy(t, "motion-coherence")
	e.open(text, 1)
	if e.call("frame", 0) != 0 {
		t.Error("a frame without a trial")
	}
	e.must(e.call("next"))
}

// A thousand dots a frame. The share of a 240 Hz frame (4.167 ms) is reported.
func BenchmarkThousandDots(b *testing.B) {
	s, _ := canonicalStudy(b, "motion-coherence")
	kind := s.Displays[0].Kind
	set := func(key string, x float64) { s.Displays[0].Values[kind.Index(key)] = []float64{x} }
	set("aperture", 0)
	set("width_deg", 11.283792)
	set("density_per_deg2", 10)
	s.Screen.MinWidthDeg, s.Screen.MinHeightDeg = 12, 12
	text, err := value.Canonical(s.Encode())
	if err != nil {
		b.Fatal(err)
	}
	e := startEngine(b)
	e.open(text, 7)
	records, err := rehearsal.Observe(s, run.Assignment{Seed: 7}, observerFor("motion-coherence"), rehearsal.DefaultScreen(), "d", 0)
	if err != nil {
		b.Fatal(err)
	}
	for i := range records {
		if records[i].Kind == run.KindTrial {
			break
		}
		body, _ := value.Canonical(records[i].Encode())
		n := e.put(body)
		e.must(e.call("apply", n))
	}
	e.must(e.call("begin_trial"))
	if dots, _ := e.frame(0); len(dots)/16 < 1000 {
		b.Fatalf("%d dots", len(dots)/16)
	}
	frame := e.module.ExportedFunction("frame")
	ctx := context.Background()
	for b.Loop() {
		if _, err := frame.Call(ctx, 1); err != nil {
			b.Fatal(err)
		}
	}
	ms := float64(b.Elapsed().Nanoseconds()) / float64(b.N) / 1e6
	b.ReportMetric(ms, "ms/frame")
	b.ReportMetric(100*ms/(1000.0/240), "%of240Hz")
}

// runsOf is how many runs of a study are compared: many of the two that everybody
// uses, two of the others.
func runsOf(study string) uint64 {
	if study == "motion-coherence" || study == "walking-direction" {
		return 10
	}
	return 2
}
