package display

import (
	"encoding/csv"
	"math"
	"os"
	"strconv"
	"testing"
)

func readTable(t *testing.T, name string) []map[string]string {
	t.Helper()
	f, err := os.Open("../../testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out []map[string]string
	for _, row := range rows[1:] {
		m := map[string]string{}
		for i, key := range rows[0] {
			m[key] = row[i]
		}
		out = append(out, m)
	}
	return out
}

func num(t *testing.T, row map[string]string, key string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(row[key], 64)
	if err != nil {
		t.Fatalf("%s: %v", key, err)
	}
	return x
}

// The published medians, tabulated to two decimals at every tenth of the cycle
// (Fukuchi, Fukuchi and Duarte 2018; see gait.go).
func TestJointAngles(t *testing.T) {
	t.Parallel()
	rows := readTable(t, "gait_joint_angles.csv")
	if len(rows) < 10 {
		t.Fatal("table is missing")
	}
	for _, row := range rows {
		p := num(t, row, "cycle_percent") / 100
		for key, h := range map[string]*harmonics{
			"adult_hip_flexion_deg": &hipFlexion, "adult_knee_flexion_deg": &kneeFlexion, "adult_pelvis_tilt_deg": &pelvisTilt,
		} {
			if got, want := h.at(p), num(t, row, key); math.Abs(got-want) > 0.0051 {
				t.Errorf("%s at %v: %.3f, want %.2f", key, p, got, want)
			}
		}
	}
}

// Knee and ankle of both legs for a stature of 1.75 m, hip at the origin,
// computed from the same angles by trigonometry and by complex numbers.
func TestLegPoints(t *testing.T) {
	t.Parallel()
	const stature = 1.75
	rows := readTable(t, "gait_leg_points.csv")
	if len(rows) < 10 {
		t.Fatal("table is missing")
	}
	for _, row := range rows {
		p := num(t, row, "cycle_percent") / 100
		if row["side"] == "left" {
			p += 0.5
		}
		kf, ku, af, au := leg(p)
		for key, got := range map[string]float64{"knee_x_m": kf, "knee_y_m": ku, "ankle_x_m": af, "ankle_y_m": au} {
			if want := num(t, row, key); math.Abs(got*stature-want) > 1e-5 {
				t.Errorf("%s %s at %s %%: %.6f, want %.6f", row["side"], key, row["cycle_percent"], got*stature, want)
			}
		}
	}
}

func walkerFrames(set map[int]float64, n int) [][]Dot {
	v := walkerKind.Defaults()
	for i, x := range set {
		v[i][0] = x
	}
	w := newWalker()
	w.Begin(Trial{Values: v, Seed: 4, IntervalMs: 1000.0 / 60})
	l := NewList(w.Size())
	var out [][]Dot
	for i := range n {
		l.Reset()
		w.Step(min(i, 1), l)
		out = append(out, append([]Dot(nil), l.Dots...))
	}
	return out
}

// A scrambled walker keeps every dot's own path and moves only its origin: the
// velocities are unchanged.
func TestScrambledKeepsVelocities(t *testing.T) {
	t.Parallel()
	intact := walkerFrames(map[int]float64{walkerPhase: 0}, 60)
	scrambled := walkerFrames(map[int]float64{walkerPhase: 0, walkerArrangement: 1}, 60)
	moved := 0
	for n := 1; n < 60; n++ {
		for i := range intact[n] {
			a := intact[n][i].XDeg - intact[n-1][i].XDeg
			b := scrambled[n][i].XDeg - scrambled[n-1][i].XDeg
			c := intact[n][i].YDeg - intact[n-1][i].YDeg
			d := scrambled[n][i].YDeg - scrambled[n-1][i].YDeg
			if math.Abs(float64(a-b)) > 2e-6 || math.Abs(float64(c-d)) > 2e-6 {
				t.Fatalf("frame %d, marker %d: velocity changed", n, i)
			}
			if math.Abs(float64(intact[n][i].XDeg-scrambled[n][i].XDeg)) > 0.05 {
				moved++
			}
		}
	}
	if moved == 0 {
		t.Error("no origin moved")
	}
}

// Facing left is the mirror image of facing right with the sides exchanged half
// a cycle later; inverted is upside down.
func TestMirrorAndInversion(t *testing.T) {
	t.Parallel()
	right := walkerFrames(map[int]float64{walkerPhase: 0.1}, 40)
	left := walkerFrames(map[int]float64{walkerPhase: 0.1, walkerFacing: 1}, 40)
	down := walkerFrames(map[int]float64{walkerPhase: 0.1, walkerOrientation: 1}, 40)
	for n := range right {
		for i := range right[n] {
			if math.Abs(float64(right[n][i].XDeg+left[n][i].XDeg)) > 1e-5 || right[n][i].YDeg != left[n][i].YDeg {
				t.Fatalf("frame %d, marker %d: profile facing left is not the mirror image", n, i)
			}
			if math.Abs(float64(right[n][i].YDeg+down[n][i].YDeg)) > 1e-5 {
				t.Fatalf("frame %d, marker %d: inverted is not upside down", n, i)
			}
		}
	}
}

// On the treadmill the stance foot moves backwards at walking speed: between 20
// and 40 % of the cycle the ankle moves like the ground. For a cycle of 1029 ms
// and a stature of 1.75 m the published usual speed is 1.31 m/s (Murtagh et al.
// 2021, Sports Med 51:125); the angles of a median person give it within 15 %.
func TestGroundSpeed(t *testing.T) {
	t.Parallel()
	_, _, a, _ := leg(0.20)
	_, _, b, _ := leg(0.40)
	speed := (a - b) * 1.75 / (0.2 * 1.029)
	if math.Abs(speed/1.31-1) > 0.15 {
		t.Errorf("stance foot moves at %.3f m/s, want about 1.31", speed)
	}
}

func TestMaskHasNoNetDirection(t *testing.T) {
	t.Parallel()
	f := walkerFrames(map[int]float64{walkerMaskDots: 40}, 2)
	if got := len(f[0]); got != markerCount+40 {
		t.Fatalf("%d dots, want 53", got)
	}
	for _, dot := range f[0][markerCount:] {
		if math.Abs(float64(dot.XDeg)) > 4+4 || math.Abs(float64(dot.YDeg)) > 5+2 {
			t.Errorf("mask dot at (%v, %v) is outside the stated extent", dot.XDeg, dot.YDeg)
		}
	}
}
