package inspecting

import (
	"bytes"
	"encoding/base64"
	"image"
	"image/color"
	"image/gif"
	"image/png"
	"math"

	"distal/experiments/display"
	"distal/experiments/inspection"
)

// Pictures of a condition as data URIs, "" where there is none.
type Pictures struct {
	Level      float64 // shown; NaN where nothing is varied
	RefreshHz  float64
	WidthDeg   float64 // of a cut
	DurationMs float64 // of the pictures
	Along      string  // space–time picture along the motion: time runs down
	Across     string
	Film       string // frames from onset on, side by side
	FilmMs     []float64
	Moving     string // GIF
}

const (
	pictureMs  = 1000.0 // shown of a longer stimulus
	filmFrames = 6
	filmPx     = 150.0 // side of a frame
	gifMs      = 40.0  // between its frames: what browsers keep
)

// pictures draws a trial of one level.
func (c *Condition) pictures(screen inspection.Screen, level, hz, directionDeg float64) Pictures {
	v := c.at(level)
	width, height := c.kind.Extent(v)
	n := min(mostSteps, max(8, int(math.Max(width, height)/cutDeg)))
	raster := inspection.NewRaster(screen)
	grey := make([]uint8, len(raster.Light))
	var along, across [][]float64
	var film []*image.Gray
	p := Pictures{Level: level, RefreshHz: hz, WidthDeg: float64(n) * cutDeg}
	every := max(1, int(math.Min(pictureMs, c.durationMs)*hz/1000)/filmFrames)
	moving := &gif.GIF{}
	nextMs := 0.0
	c.frames(v, 1, hz, func(i int, atMs float64, l *display.List) {
		if atMs >= pictureMs {
			return
		}
		raster.Draw(l)
		along = append(along, raster.Cut(0, 0, directionDeg, cutDeg, n))
		across = append(across, raster.Cut(0, 0, directionDeg+90, cutDeg, n))
		p.DurationMs = atMs + 1000/hz
		wanted := i%every == 0 && len(film) < filmFrames
		if !wanted && atMs < nextMs {
			return
		}
		raster.Grey(grey)
		small := shrink(grey, screen.WidthPx, screen.HeightPx)
		if wanted {
			film = append(film, small)
			p.FilmMs = append(p.FilmMs, atMs)
		}
		if atMs >= nextMs {
			nextMs += gifMs
			moving.Image = append(moving.Image, paletted(small))
			moving.Delay = append(moving.Delay, int(gifMs/10))
		}
	})
	p.Along, p.Across = c.spaceTime(along, screen.BackgroundFraction), c.spaceTime(across, screen.BackgroundFraction)
	p.Film = strip(film)
	if len(moving.Image) > 1 {
		var b bytes.Buffer
		if gif.EncodeAll(&b, moving) == nil {
			p.Moving = "data:image/gif;base64," + base64.StdEncoding.EncodeToString(b.Bytes())
		}
	}
	return p
}

// spaceTime draws rows of light, each several pixels high so that the picture is
// about as high as it is wide.
func (c *Condition) spaceTime(rows [][]float64, background float64) string {
	if len(rows) == 0 {
		return ""
	}
	high := max(1, 240/len(rows))
	m := image.NewGray(image.Rect(0, 0, len(rows[0]), high*len(rows)))
	for y := range high * len(rows) {
		for x, l := range rows[y/high] {
			m.SetGray(x, y, greyOf(l*background))
		}
	}
	return asPNG(m)
}

func greyOf(light float64) color.Gray {
	light = math.Max(0, math.Min(1, light))
	v := 12.92 * light
	if light > 0.0031308 {
		v = 1.055*math.Pow(light, 1/2.4) - 0.055
	}
	return color.Gray{Y: uint8(math.Round(255 * v))}
}

// shrink averages pixels so that the longer side is about filmPx.
func shrink(grey []uint8, width, height int) *image.Gray {
	k := max(1, int(math.Ceil(float64(max(width, height))/filmPx)))
	out := image.NewGray(image.Rect(0, 0, width/k, height/k))
	for y := range height / k {
		for x := range width / k {
			sum := 0
			for dy := range k {
				for dx := range k {
					sum += int(grey[(y*k+dy)*width+x*k+dx])
				}
			}
			out.Pix[y*out.Stride+x] = uint8(sum / (k * k))
		}
	}
	return out
}

// strip puts frames side by side with a gap.
func strip(film []*image.Gray) string {
	if len(film) == 0 {
		return ""
	}
	const gap = 4
	size := film[0].Bounds().Size()
	m := image.NewGray(image.Rect(0, 0, (size.X+gap)*len(film)-gap, size.Y))
	for i := range m.Pix {
		m.Pix[i] = 255
	}
	for i, f := range film {
		for y := range size.Y {
			copy(m.Pix[y*m.Stride+i*(size.X+gap):], f.Pix[y*f.Stride:y*f.Stride+size.X])
		}
	}
	return asPNG(m)
}

var greys = func() color.Palette {
	p := make(color.Palette, 256)
	for i := range p {
		p[i] = color.Gray{Y: uint8(i)}
	}
	return p
}()

func paletted(g *image.Gray) *image.Paletted {
	return &image.Paletted{Pix: append([]uint8(nil), g.Pix...), Stride: g.Stride, Rect: g.Rect, Palette: greys}
}

func asPNG(m image.Image) string {
	var b bytes.Buffer
	if err := png.Encode(&b, m); err != nil {
		return ""
	}
	return "data:image/png;base64," + base64.StdEncoding.EncodeToString(b.Bytes())
}
