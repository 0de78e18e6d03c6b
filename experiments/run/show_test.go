package run_test

import (
	"fmt"
	"math"
	"testing"

	"distal/experiments/display"
	"distal/experiments/library"
	"distal/experiments/run"
)

// fnv is the digest written down a second time, over whole frames.
type fnv uint64

func (h *fnv) word(w uint32) {
	*h = (*h ^ fnv(w)) * 0x100000001b3 // the 64-bit FNV prime, RFC 9923
}

func (h *fnv) frame(interval int, l *display.List) {
	h.word(uint32(interval))
	h.word(uint32(len(l.Dots)))
	h.word(uint32(len(l.Patches)))
	for _, d := range l.Dots {
		for _, x := range []float32{d.XDeg, d.YDeg, d.DiameterDeg, d.Contrast} {
			h.word(math.Float32bits(x))
		}
	}
	for _, p := range l.Patches {
		for _, x := range []float32{
			p.XDeg, p.YDeg, p.WidthDeg, p.HeightDeg, p.OrientationDeg, p.SpatialFrequencyCPD,
			p.PhaseRad, p.Contrast, p.RampDeg, p.Carrier, p.Window, p.Mode,
		} {
			h.word(math.Float32bits(x))
		}
	}
}

func TestDigest(t *testing.T) {
	t.Parallel()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 12})
	p.untilBlock("tracks")
	show := func(steps []int) (string, string) {
		h := fnv(0xcbf29ce484222325) // the 64-bit FNV offset basis, RFC 9923
		p.run.BeginTrial()
		at := 0
		for i, n := range steps {
			if i > 0 {
				at += n
			}
			h.frame(at, p.run.Frame(n))
		}
		return p.run.Digest(), fmt.Sprintf("%016x", uint64(h))
	}
	seen := map[string]bool{}
	for _, steps := range [][]int{{}, {0}, {0, 1}, {0, 2}, {0, 1, 1}, {0, 3, 1, 1, 2}} {
		got, want := show(steps)
		if got != want {
			t.Errorf("steps %v: digest %s, want %s", steps, got, want)
		}
		if seen[got] {
			t.Errorf("steps %v: the digest of other steps", steps)
		}
		seen[got] = true
	}
	// The first frame is the onset frame, whatever is asked for.
	first, _ := show([]int{7})
	if onset, _ := show([]int{0}); first != onset {
		t.Error("the first frame depends on its step")
	}
}

// A late frame shows what would have been shown at that time.
func TestLateFramesShowTheSame(t *testing.T) {
	t.Parallel()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 13})
	p.untilBlock("tracks")
	last := func(steps ...int) []display.Dot {
		p.run.BeginTrial()
		var dots []display.Dot
		for _, n := range steps {
			dots = append(dots[:0], p.run.Frame(n).Dots...)
		}
		return dots
	}
	one, late := last(0, 1, 1, 1, 1, 1), last(0, 1, 3, 1)
	for i := range one {
		if one[i] != late[i] {
			t.Fatalf("dot %d: %v, want %v", i, late[i], one[i])
		}
	}
}

// Raised-cosine ramps of 3 frames at onset and offset of 12: gain
// (1 − cos(π (k + ½)/3))/2 at frame k and, mirrored, at the end.
func TestRamps(t *testing.T) {
	t.Parallel()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 14, Group: 1})
	plan := p.untilKind(run.StepTrial).Trial
	if plan.StimulusFrames != 12 || plan.RampFrames != 3 {
		t.Fatalf("%+v", plan)
	}
	p.run.BeginTrial()
	for k := range plan.StimulusFrames {
		l := p.run.Frame(1)
		gain := 1.0
		if edge := min(k, plan.StimulusFrames-1-k); edge < 3 {
			gain = (1 - math.Cos(math.Pi*(float64(edge)+0.5)/3)) / 2
		}
		// One unit in the last place of a float32 contrast.
		if got, want := float64(l.Dots[0].Contrast), 0.9*gain; math.Abs(got-want) > 1e-7 {
			t.Errorf("frame %d: contrast %g, want %g", k, got, want)
		}
	}
}

// The fixation mark is there in both phases, over the display, and no ramp touches it.
func TestFixationMark(t *testing.T) {
	t.Parallel()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 15})
	if l := p.run.Frame(0); l != nil {
		t.Error("a frame before any trial")
	}
	p.untilKind(run.StepTrial)
	p.run.BeginTrial()
	fixation := p.run.FixationList()
	if len(fixation.Dots) != 1 || len(fixation.Patches) != 0 {
		t.Fatalf("fixation: %+v", fixation)
	}
	mark := fixation.Dots[0]
	l := p.run.Frame(0)
	if got := l.Dots[len(l.Dots)-1]; got != mark || mark.XDeg != 0 || mark.YDeg != 0 || mark.DiameterDeg <= 0 {
		t.Errorf("mark %v, in the fixation phase %v", got, mark)
	}
	p.apply(p.trial("left", ""))
	if l := p.run.Frame(1); l != nil {
		t.Error("a frame after the trial's record")
	}
	if p.run.FinishTrial(run.Measurement{}) != nil {
		t.Error("a record without a trial")
	}
}

// No frame of any library study allocates.
func TestFramesDoNotAllocate(t *testing.T) {
	for _, name := range library.Names() {
		s, problems := library.Read(name)
		if problems.Failed() {
			t.Fatal(problems)
		}
		p := begin(t, s, run.Assignment{Seed: 16})
		for p.run.Next().Kind != run.StepTrial {
			step := p.run.Next().Kind
			rec := p.answer(step)
			if step == run.StepDistance && s.Screen.Distance != 0 {
				rec = run.Record{Kind: run.KindDistance, Distance: &run.Distance{Method: "stated", DistanceMm: s.Screen.StatedDistanceMm, SDMm: 50}}
			}
			if step == run.StepDistance && s.Screen.Distance == 0 {
				rec.Distance.OffsetsMm = []float64{159, 158, 160, 159, 158}
			}
			p.apply(rec)
		}
		p.run.BeginTrial()
		p.run.Frame(0)
		if n := testing.AllocsPerRun(200, func() { p.run.Frame(1) }); n != 0 {
			t.Errorf("%s: a frame allocates %g times", name, n)
		}
		if n := testing.AllocsPerRun(200, func() { p.run.FixationList() }); n != 0 {
			t.Errorf("%s: a fixation frame allocates %g times", name, n)
		}
	}
}
