package display_test

import (
	"hash/fnv"
	"math"
	"testing"

	"distal/experiments/display"
)

// Digests (FNV-1a) of 60 frames of each display with its defaults. They are the
// same on every platform and in WebAssembly, where this test also runs:
//
//	GOOS=js GOARCH=wasm go test -exec="$(go env GOROOT)/lib/wasm/go_js_wasm_exec" -run TestFramesNeverChange
//
// A change here means that recorded trials of that display can no longer be re-created.
var digests = map[string]uint64{
	"dots":        0x5b02b104c9e61658,
	"walker":      0xc6319a4caa51484c,
	"grating":     0xc5aad1efafecc1ee,
	"plaid":       0x359712cad94c8c36,
	"fields":      0x8871995a99f1758f,
	"motion_form": 0x3aee92f2ef287706,
	"flow":        0x7b5db9e94525ef6d,
	"structure":   0x03eb265e4c9ef33f,
	"apparent":    0x7fd8aa78b2e7798d,
	"opening":     0x7fa8bee658baafe7,
	"adaptation":  0x6c5a8fc8704bb3a2,
	"induced":     0x3452ee00ae5ff83f,
	"pursuit":     0x655297910b6af3d5,
	"gaze_shift":  0x0ce6a67ceec49fa5,
}

func TestFramesNeverChange(t *testing.T) {
	t.Parallel()
	for _, k := range display.Kinds() {
		v := k.Defaults()
		d := k.New(v)
		h := fnv.New64a()
		write := func(x ...float32) {
			for _, x := range x {
				b := math.Float32bits(x)
				_, _ = h.Write([]byte{byte(b), byte(b >> 8), byte(b >> 16), byte(b >> 24)})
			}
		}
		for _, l := range lists(t, d, display.Trial{Values: v, Seed: 0x123456789ABCDEF0, Number: 3, Place: 1, IntervalMs: 1000.0 / 144}, 60) {
			for _, x := range l.Dots {
				write(x.XDeg, x.YDeg, x.DiameterDeg, x.Contrast)
			}
			for _, p := range l.Patches {
				write(p.XDeg, p.YDeg, p.WidthDeg, p.HeightDeg, p.OrientationDeg, p.SpatialFrequencyCPD, p.PhaseRad, p.Contrast, p.RampDeg, p.Carrier, p.Window, p.Mode)
			}
		}
		if got := h.Sum64(); got != digests[k.Name] {
			t.Errorf("%q: 0x%016x, // want 0x%016x", k.Name, got, digests[k.Name])
		}
	}
}
