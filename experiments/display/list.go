package display

// A List is what one frame consists of, in degrees of visual angle about
// fixation (x to the right, y upwards) and contrast about the background.
// It is painted in the order of Batches. Everything that moves is made of
// dots and patches.
//
// A List is made once by NewList and refilled every frame; filling it never
// allocates. Its arrays are contiguous so that a renderer can read them from
// WebAssembly memory without a copy.
type List struct {
	Dots    []Dot
	Patches []Patch
	Batches []Batch
}

// Dot is a filled disc with an anti-aliased edge. It covers what is below it:
// inside, luminance = background × (1 + Contrast) (Weber contrast, −1 is black).
type Dot struct {
	XDeg, YDeg  float32
	DiameterDeg float32
	Contrast    float32
}

// Patch is a windowed carrier. A patch with Mode PatchAdd adds
//
//	background × Contrast × Window(x,y) × carrier(x,y)
//
// to the luminance below it, so that superimposed patches make plaids; with
// Mode PatchCover it replaces what is below it, weighted by the window, with
// background × (1 + Contrast × carrier): a bar, an occluder or an opening's surround.
//
// With u = (x−XDeg)·cos(OrientationDeg) + (y−YDeg)·sin(OrientationDeg) and v at
// right angles, the carrier is a function of 2π·SpatialFrequencyCPD·u + PhaseRad:
// its bars run at right angles to OrientationDeg, which is therefore the
// direction in which a rising −PhaseRad moves them.
// WidthDeg is the extent along u, HeightDeg along v (full widths; for WindowGauss
// they are 2 standard deviations; the window is cut at 3 standard deviations).
// RampDeg is the width of the raised-cosine edge (WindowDisc, WindowRect), inside
// the nominal extent. WindowSurround is 1 − disc: it covers everything outside.
type Patch struct {
	XDeg, YDeg          float32
	WidthDeg, HeightDeg float32
	OrientationDeg      float32
	SpatialFrequencyCPD float32
	PhaseRad            float32
	Contrast            float32
	RampDeg             float32
	Carrier             float32 // CarrierPlain, CarrierSine, ...
	Window              float32 // WindowDisc, WindowRect, ...
	Mode                float32 // PatchAdd or PatchCover
}

// Carriers of a patch. CarrierMissing is a square wave without its fundamental.
const (
	CarrierPlain   = 0
	CarrierSine    = 1
	CarrierSquare  = 2
	CarrierMissing = 3
)

// Windows of a patch.
const (
	WindowDisc         = 0 // ellipse with WidthDeg × HeightDeg
	WindowRect         = 1
	WindowGauss        = 2
	WindowSurround     = 3 // everything outside the ellipse
	WindowRectSurround = 4 // everything outside the rectangle
)

// How a patch combines with what is below it.
const (
	PatchAdd   = 0
	PatchCover = 1
)

// Batch is a run of dots or patches that are painted together.
type Batch struct {
	Kind  int32 // BatchDots or BatchPatches
	First int32
	Count int32
}

// Kinds of batch.
const (
	BatchDots    = 0
	BatchPatches = 1
)

// NewList makes a list with room for the given numbers of items.
func NewList(dots, patches, batches int) *List {
	return &List{
		Dots:    make([]Dot, 0, dots),
		Patches: make([]Patch, 0, patches),
		Batches: make([]Batch, 0, batches),
	}
}

// Reset empties the list and keeps its memory.
func (l *List) Reset() {
	l.Dots, l.Patches, l.Batches = l.Dots[:0], l.Patches[:0], l.Batches[:0]
}

// AddDot appends a dot, joining the current batch of dots or opening one.
// The list must have room: displays declare their Size beforehand.
func (l *List) AddDot(d Dot) {
	l.extend(BatchDots, len(l.Dots))
	l.Dots = append(l.Dots, d)
}

// AddPatch appends a patch, joining the current batch of patches or opening one.
func (l *List) AddPatch(p Patch) {
	l.extend(BatchPatches, len(l.Patches))
	l.Patches = append(l.Patches, p)
}

func (l *List) extend(kind int32, at int) {
	if n := len(l.Batches); n > 0 && l.Batches[n-1].Kind == kind {
		l.Batches[n-1].Count++
		return
	}
	l.Batches = append(l.Batches, Batch{Kind: kind, First: int32(at), Count: 1})
}
