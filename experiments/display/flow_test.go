package display

import (
	"encoding/json"
	"math"
	"os"
	"testing"

	"distal/experiments/exact"
)

// The published equations, tabulated from numerically moved and reprojected points.
func TestFlowVelocity(t *testing.T) {
	t.Parallel()
	text, err := os.ReadFile("../../testdata/optic_flow_examples.json")
	if err != nil {
		t.Fatal(err)
	}
	var examples []struct {
		Name                  string
		Translation, Rotation [3]float64
		Points                []struct{ X, Y, Z, U, V float64 }
	}
	if err := json.Unmarshal(text, &examples); err != nil || len(examples) < 4 {
		t.Fatal(err, len(examples))
	}
	for _, e := range examples {
		for _, p := range e.Points {
			u, v := FlowVelocity(p.X, p.Y, p.Z, e.Translation, e.Rotation)
			if math.Abs(u-p.U) > 1e-9 || math.Abs(v-p.V) > 1e-9 {
				t.Errorf("%s at (%v, %v, %v): (%v, %v), want (%v, %v)", e.Name, p.X, p.Y, p.Z, u, v, p.U, p.V)
			}
		}
	}
}

func flowValues(set map[int]float64) Values {
	v := flowKind.Defaults()
	for i, x := range set {
		v[i][0] = x
	}
	return v
}

// Every dot of every scene moves by the equations: a step of 10 µs against the
// velocity of Longuet-Higgins and Prazdny at the dot's place and depth.
func TestFlowFollowsTheEquations(t *testing.T) {
	t.Parallel()
	const seconds = 1e-5
	for scene := sceneCloud; scene <= scenePlane; scene++ {
		v := flowValues(map[int]float64{
			flowScene: float64(scene), flowHeadingX: 6, flowHeadingY: -2, flowSpeed: 2, flowYaw: 5, flowPitch: 3, flowRoll: -8,
		})
		f := &flow{}
		f.Begin(Trial{Values: v, Seed: 6, IntervalMs: 1000 * seconds})
		sinX, cosX := math.Sincos(6 * math.Pi / 180)
		sinY, cosY := math.Sincos(-2 * math.Pi / 180)
		translation := [3]float64{2 * sinX * cosY, 2 * sinY, 2 * cosX * cosY}
		rotation := [3]float64{-3 * math.Pi / 180, 5 * math.Pi / 180, -8 * math.Pi / 180}
		before := f.dots
		f.advance()
		moved := 0
		for i := range f.n {
			a, b := before[i], f.dots[i]
			x, y := a.x/a.z, a.y/a.z
			u, w := FlowVelocity(x, y, a.z, translation, rotation)
			du, dv := (b.x/b.z-x)/seconds, (b.y/b.z-y)/seconds
			if math.Hypot(du-u, dv-w) > 1e-3*math.Hypot(u, w)+1e-6 {
				if math.Hypot(du, dv) > 100 {
					continue // it left the field and came back
				}
				t.Fatalf("scene %d, dot %d: (%v, %v), want (%v, %v)", scene, i, du, dv, u, w)
			}
			moved++
		}
		if moved < f.n-3 {
			t.Errorf("scene %d: only %d of %d dots were compared", scene, moved, f.n)
		}
	}
}

// After half a second of heading and rotation the dots of a surface still lie on it.
func TestFlowSurfacesStayRigid(t *testing.T) {
	t.Parallel()
	for _, scene := range []int{sceneGround, sceneTunnel, scenePlane} {
		f := &flow{}
		f.Begin(Trial{Values: flowValues(map[int]float64{
			flowScene: float64(scene), flowHeadingX: 4, flowHeadingY: 1, flowYaw: 6, flowRoll: 10, flowLifetime: 200,
		}), Seed: 2, IntervalMs: 1000.0 / 60})
		for range 30 {
			f.advance()
		}
		for i := range f.n {
			p := f.dots[i].vector
			if p.z < 0 {
				t.Fatalf("scene %d: dot %d is out of sight", scene, i)
			}
			off := f.normal.dot(p) - f.offset
			if scene == sceneTunnel {
				r := p.plus(f.origin, -1)
				r = r.plus(f.normal, -r.dot(f.normal))
				off = math.Sqrt(r.dot(r)) - 1
			}
			if math.Abs(off) > 1e-9 {
				t.Fatalf("scene %d: dot %d is off the surface by %v", scene, i, off)
			}
		}
	}
}

// Without rotation every dot moves along the line through the focus of
// expansion, away from it, or towards it in contraction; opposite senses mirror each other.
func TestFlowFocus(t *testing.T) {
	t.Parallel()
	for sense, sign := range []float64{1, -1} {
		f := &flow{}
		f.Begin(Trial{Values: flowValues(map[int]float64{flowHeadingX: 8, flowHeadingY: 3, flowSense: float64(sense)}), Seed: 4, IntervalMs: 1})
		focus := map[string]float64{}
		f.Truths(func(name string, x float64) { focus[name] = x })
		fx, fy := math.Tan(focus["focus_x_deg"]*math.Pi/180), math.Tan(focus["focus_y_deg"]*math.Pi/180)
		if math.Abs(focus["focus_x_deg"]-8) > 1e-9 {
			t.Fatalf("focus: %v", focus)
		}
		before := f.dots
		f.advance()
		for i := range f.n {
			a, b := before[i], f.dots[i]
			rx, ry := a.x/a.z-fx, a.y/a.z-fy
			dx, dy := b.x/b.z-a.x/a.z, b.y/b.z-a.y/a.z
			if math.Hypot(dx, dy) > 0.01 {
				continue // came back elsewhere
			}
			if math.Abs(rx*dy-ry*dx) > 1e-12 || sign*(rx*dx+ry*dy) < 0 {
				t.Fatalf("sense %d, dot %d moves (%v, %v) at (%v, %v) from the focus", sense, i, dx, dy, rx, ry)
			}
		}
	}
}

// An object that keeps the observer's own velocity stays where it is in the
// field, and it hides the dots behind it.
func TestFlowObject(t *testing.T) {
	t.Parallel()
	v := flowValues(map[int]float64{
		flowSpeed: 2, flowObjectDots: 40, flowObjectX: 3, flowObjectY: -2, flowObjectVZ: 2, flowObjectSize: 6, flowNear: 12, flowFar: 20,
	})
	f := &flow{}
	f.Begin(Trial{Values: v, Seed: 4, IntervalMs: 1000.0 / 60})
	f.near = 1 // the object is nearer than the scene
	l := NewList(f.Size())
	f.Step(0, l)
	first := append([]Dot(nil), l.Dots[len(l.Dots)-40:]...)
	l.Reset()
	f.Step(30, l)
	for i, d := range l.Dots[len(l.Dots)-40:] {
		if math.Abs(float64(d.XDeg-first[i].XDeg)) > 1e-4 || math.Abs(float64(d.YDeg-first[i].YDeg)) > 1e-4 {
			t.Fatalf("object dot %d moved from %+v to %+v", i, first[i], d)
		}
	}
	for _, d := range l.Dots[:len(l.Dots)-40] {
		x, y := exact.Tan(exact.Radians(float64(d.XDeg)))-exact.Tan(exact.Radians(3)), exact.Tan(exact.Radians(float64(d.YDeg)))-exact.Tan(exact.Radians(-2))
		if math.Hypot(x, y) < exact.Tan(exact.Radians(3))-1e-6 {
			t.Fatalf("a dot of the scene shows through the object at (%v, %v)", d.XDeg, d.YDeg)
		}
	}
}

// Noise dots keep the speed of their flow in the image and lose its direction.
func TestFlowNoise(t *testing.T) {
	t.Parallel()
	f := &flow{}
	f.Begin(Trial{Values: flowValues(map[int]float64{flowNoise: 1, flowDots: 2000, flowNear: 5}), Seed: 1, IntervalMs: 1})
	before := f.dots
	f.advance()
	outward, n := 0.0, 0.0
	for i := range f.n {
		a, b := before[i], f.dots[i]
		dx, dy := b.x/b.z-a.x/a.z, b.y/b.z-a.y/a.z
		u, v := FlowVelocity(a.x/a.z, a.y/a.z, a.z, [3]float64{0, 0, 1.5}, [3]float64{})
		want := math.Hypot(u, v) / 1000
		if math.Hypot(dx, dy) > 0.01 {
			continue
		}
		if math.Abs(math.Hypot(dx, dy)/want-1) > 0.01 {
			t.Fatalf("dot %d: speed %v, want %v", i, math.Hypot(dx, dy), want)
		}
		outward += (dx*u + dy*v) / 1000 / want / want
		n++
	}
	// The mean of a random direction's cosine over 2000 dots has standard error 1/√(2n).
	if got := outward / n; n < 1900 || math.Abs(got) > 4/math.Sqrt(2*n) {
		t.Errorf("mean cosine with the flow %.4f over %v dots", got, n)
	}
}
