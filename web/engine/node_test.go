//go:build !wasip1

package main_test

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"testing"

	"github.com/evanw/esbuild/pkg/api"

	"distal/experiments/display"
	"distal/experiments/library"
	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
)

// nodeTask is what testdata/host.mjs is asked to do.
type nodeTask struct {
	Study   string            `json:"study"`
	Seed    string            `json:"seed"`
	Group   int               `json:"group"`
	Order   int               `json:"order"`
	Repeat  int               `json:"repeat"`
	Weigh   int               `json:"weigh"`
	Records []json.RawMessage `json:"records"`
}

// nodeLine is one line of its answer.
type nodeLine struct {
	Step     json.RawMessage
	Sum      uint32
	Finished json.RawMessage
	Times    []float64
	Dots     int
	Same     bool
	Memory   int // bytes
	Heap     int
}

// inNode runs the participant's class Engine in Node's JavaScript engine, the
// one of Chromium.
func inNode(t testing.TB, task nodeTask) []nodeLine {
	t.Helper()
	code, err := compileEngine()
	if err != nil {
		t.Fatal(err)
	}
	built := api.Build(api.BuildOptions{
		EntryPoints: []string{"../participant/engine.ts"}, Bundle: true, Format: api.FormatESModule, Target: api.ES2022,
	})
	if len(built.Errors) > 0 {
		t.Fatal(built.Errors[0].Text)
	}
	text, err := json.Marshal(task)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	for name, content := range map[string][]byte{"engine.mjs": built.OutputFiles[0].Contents, "engine.wasm": code, "task.json": text} {
		if err := os.WriteFile(filepath.Join(dir, name), content, 0o600); err != nil {
			t.Fatal(err)
		}
	}
	var complaint bytes.Buffer
	command := exec.Command("node", "--expose-gc", "testdata/host.mjs", filepath.Join(dir, "engine.mjs"), filepath.Join(dir, "engine.wasm"), filepath.Join(dir, "task.json"))
	command.Stderr = &complaint
	out, err := command.Output()
	if err != nil {
		t.Fatalf("node: %v\n%s", err, complaint.String())
	}
	var lines []nodeLine
	for decoder := json.NewDecoder(bytes.NewReader(out)); decoder.More(); {
		var line nodeLine
		if err := decoder.Decode(&line); err != nil {
			t.Fatal(err)
		}
		lines = append(lines, line)
	}
	return lines
}

func recordTexts(t testing.TB, records []run.Record) []json.RawMessage {
	t.Helper()
	list := make([]json.RawMessage, len(records))
	for i := range records {
		text, err := value.Canonical(records[i].Encode())
		if err != nil {
			t.Fatal(err)
		}
		list[i] = text
	}
	return list
}

// checksum is the host's: FNV-1a, 32 bits, over 32-bit words.
type checksum uint32

func (c *checksum) word(w uint32) { *c = (*c ^ checksum(w)) * 16777619 }

func (c *checksum) list(l *display.List) {
	for _, d := range l.Dots {
		for _, x := range [4]float32{d.XDeg, d.YDeg, d.DiameterDeg, d.Contrast} {
			c.word(math.Float32bits(x))
		}
	}
	for _, p := range l.Patches {
		for _, x := range [12]float32{
			p.XDeg, p.YDeg, p.WidthDeg, p.HeightDeg, p.OrientationDeg, p.SpatialFrequencyCPD,
			p.PhaseRad, p.Contrast, p.RampDeg, p.Carrier, p.Window, p.Mode,
		} {
			c.word(math.Float32bits(x))
		}
	}
	for _, b := range l.Batches {
		c.word(uint32(b.Kind))
		c.word(uint32(b.First))
		c.word(uint32(b.Count))
	}
}

// Whole runs through class Engine in Node: every step text, every word of every
// list and every record that finishTrial gives are those of the native engine,
// also when the module's memory grows in the middle of a trial.
func TestNodeAgrees(t *testing.T) {
	t.Parallel()
	for i, name := range library.Names() {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			s, text := canonicalStudy(t, name)
			a := run.Assignment{Seed: 0xFEDCBA9876543210 + uint64(i), Order: i}
			screen := rehearsal.DefaultScreen()
			screen.DropRate = 0.03
			records, err := rehearsal.Observe(s, a, observerFor(name), screen, "d", 1.7e12)
			if err != nil {
				t.Fatal(err)
			}
			lines := inNode(t, nodeTask{Study: string(text), Seed: fmt.Sprintf("%016x", a.Seed), Order: a.Order, Records: recordTexts(t, records)})
			if len(lines) != len(records) {
				t.Fatalf("%d lines for %d records", len(lines), len(records))
			}
			compareLines(t, s, a, records, lines)
		})
	}
}

func compareLines(t *testing.T, s *study.Study, a run.Assignment, records []run.Record, lines []nodeLine) {
	t.Helper()
	native, err := run.New(s, a)
	if err != nil {
		t.Fatal(err)
	}
	trials, frames := 0, 0
	for i := range records {
		want, err := value.Canonical(native.Next().Encode(s))
		if err != nil {
			t.Fatal(err)
		}
		// Canonical JSON is what ECMAScript writes, so the text survives parsing.
		if string(lines[i].Step) != string(want) {
			t.Fatalf("step before record %d:\n%s\nwant\n%s", i+1, lines[i].Step, want)
		}
		if rec := &records[i]; rec.Kind == run.KindTrial {
			trials++
			native.BeginTrial()
			sum := checksum(0)
			sum.list(native.FixationList())
			for k := range rec.Trial.Steps {
				for _, x := range adjustedAt(rec.Trial, k) {
					native.Adjust(x)
				}
				frames++
				sum.list(native.Frame(rec.Trial.Steps[max(k-1, 0)]))
			}
			if uint32(sum) != lines[i].Sum {
				t.Fatalf("trial %d: checksum %08x, want %08x", rec.Trial.Trial, lines[i].Sum, uint32(sum))
			}
			finished := run.Record{Kind: run.KindTrial, Trial: rec.Trial}
			want, err := value.Canonical(finished.Encode())
			if err != nil {
				t.Fatal(err)
			}
			if string(lines[i].Finished) != string(want) {
				t.Fatalf("trial %d:\n%s\nwant\n%s", rec.Trial.Trial, lines[i].Finished, want)
			}
		}
		if err := native.Apply(&records[i]); err != nil {
			t.Fatal(err)
		}
	}
	if trials < 8 || frames < 700 {
		t.Errorf("only %d trials with %d frames", trials, frames)
	}
}

// thousandDots is the motion-coherence study with 1000 dots a frame and the
// records that lead to its first trial.
func thousandDots(t testing.TB) (text []byte, records []run.Record) {
	t.Helper()
	s, _ := canonicalStudy(t, "motion-coherence")
	kind := s.Displays[0].Kind
	set := func(key string, x float64) { s.Displays[0].Values[kind.Index(key)] = []float64{x} }
	set("aperture", 0)
	set("width_deg", 11.283792) // 100 square degrees
	set("density_per_deg2", 10)
	s.Screen.MinWidthDeg, s.Screen.MinHeightDeg = 12, 12
	text, err := value.Canonical(s.Encode())
	if err != nil {
		t.Fatal(err)
	}
	records, err = rehearsal.Observe(s, run.Assignment{Seed: 7}, observerFor("motion-coherence"), rehearsal.DefaultScreen(), "d", 0)
	if err != nil {
		t.Fatal(err)
	}
	first := slices.IndexFunc(records, func(r run.Record) bool { return r.Kind == run.KindTrial })
	return text, records[:first]
}

// While a list keeps its length the same view is given again: no garbage in the frame loop.
func TestViewsStay(t *testing.T) {
	t.Parallel()
	text, records := thousandDots(t)
	lines := inNode(t, nodeTask{Study: string(text), Seed: "0000000000000007", Repeat: 50, Records: recordTexts(t, records)})
	if last := lines[len(lines)-1]; !last.Same || last.Dots < 1000 || len(last.Times) != 50 {
		t.Errorf("%d dots, the same view: %v", last.Dots, last.Same)
	}
}

// A run as long as an hour of trials needs no more memory at its end than after
// a sixth of it, neither in the module nor in the script.
func TestMemoryStaysFlat(t *testing.T) {
	t.Parallel()
	s, _ := canonicalStudy(t, "motion-coherence")
	s.Procedures[0].MaxTrials = 1200 // of 3 s each
	text, err := value.Canonical(s.Encode())
	if err != nil {
		t.Fatal(err)
	}
	records, err := rehearsal.Observe(s, run.Assignment{Seed: 3}, observerFor("motion-coherence"), rehearsal.DefaultScreen(), "d", 1.7e12)
	if err != nil {
		t.Fatal(err)
	}
	lines := inNode(t, nodeTask{Study: string(text), Seed: "0000000000000003", Weigh: 200, Records: recordTexts(t, records)})
	if len(lines) < 6 || len(records) < 1200 {
		t.Fatalf("%d weighings of %d records", len(lines), len(records))
	}
	first, last := lines[0], lines[len(lines)-1]
	t.Logf("%d records: module %d kB, then %d kB; script %d kB, then %d kB", len(records), first.Memory/1000, last.Memory/1000, first.Heap/1000, last.Heap/1000)
	if last.Memory != first.Memory || last.Heap > first.Heap+first.Heap/20 {
		t.Errorf("the memory grows: %+v", lines)
	}
}

// The median time of a frame of 1000 dots in Node, through class Engine.
func BenchmarkThousandDotsInNode(b *testing.B) {
	text, records := thousandDots(b)
	task := nodeTask{Study: string(text), Seed: "0000000000000007", Repeat: 4000, Records: recordTexts(b, records)}
	var times []float64
	for b.Loop() {
		lines := inNode(b, task)
		times = append(times, lines[len(lines)-1].Times...)
	}
	slices.Sort(times)
	b.ReportMetric(times[len(times)/2], "ms/frame-median")
	b.ReportMetric(times[len(times)*99/100], "ms/frame-p99")
	b.ReportMetric(0, "ns/op")
}
