package fitting

import (
	"fmt"
	"io"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/text"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
)

// Panel is an empty plot in the look of the figures.
func Panel(xLabel, yLabel string) *plot.Plot {
	p := plot.New()
	p.X.Label.Text, p.Y.Label.Text = xLabel, yLabel
	style := lettering()
	styleAxes(p, style)
	p.Legend.TextStyle.Font, p.Legend.TextStyle.Color = style.Font, ink
	return p
}

// Stroke is the line of the i-th of several curves: the first has the accent,
// dashes tell the others apart in print.
func Stroke(i int) draw.LineStyle {
	if i == 0 {
		return draw.LineStyle{Color: accent, Width: 1.4 * curveLine}
	}
	dashes := [][]vg.Length{nil, {vg.Points(5), vg.Points(2)}, {vg.Points(1.5), vg.Points(1.5)}, {vg.Points(6), vg.Points(2), vg.Points(1.5), vg.Points(2)}}
	return draw.LineStyle{Color: ink, Width: curveLine, Dashes: dashes[(i-1)%len(dashes)]}
}

// Dashed is the line of what is asked for.
func Dashed() draw.LineStyle {
	return draw.LineStyle{Color: quiet, Width: hairline, Dashes: []vg.Length{vg.Points(2), vg.Points(2)}}
}

// WritePanels writes panels side by side in a format of FigureFormats.
func WritePanels(w io.Writer, format string, panels []*plot.Plot) error {
	c, err := canvas(format, panelWide*vg.Length(len(panels)), panelHigh)
	if err != nil {
		return err
	}
	return writeTiles(w, c, [][]*plot.Plot{panels})
}

func writeTiles(w io.Writer, c vg.CanvasWriterTo, panels [][]*plot.Plot) error {
	tiles := draw.Tiles{Rows: len(panels), Cols: len(panels[0]), PadX: vg.Millimeter, PadY: vg.Millimeter, PadTop: vg.Millimeter, PadBottom: vg.Millimeter, PadLeft: vg.Millimeter, PadRight: 2 * vg.Millimeter}
	cells := plot.Align(panels, tiles, draw.New(c))
	for i, row := range panels {
		for j, p := range row {
			if p != nil {
				p.Draw(cells[i][j])
			}
		}
	}
	if _, err := c.WriteTo(w); err != nil {
		return fmt.Errorf("write figure: %w", err)
	}
	return nil
}

func lettering() text.Style {
	style := text.Style{Color: ink, Font: font.From(plot.DefaultFont, textSize), Handler: plot.DefaultTextHandler, XAlign: draw.XCenter, YAlign: draw.YCenter}
	style.Font.Typeface, style.Font.Variant = "Liberation", "Sans"
	return style
}

func styleAxes(p *plot.Plot, style text.Style) {
	for _, a := range []*plot.Axis{&p.X, &p.Y} {
		a.LineStyle = draw.LineStyle{Color: quiet, Width: hairline}
		a.Tick.LineStyle = a.LineStyle
		a.Tick.Length = vg.Points(3)
		a.Padding = vg.Points(2)
		angle, across := a.Label.TextStyle.Rotation, a.Label.TextStyle
		a.Label.TextStyle = style
		a.Label.TextStyle.Rotation, a.Label.TextStyle.XAlign, a.Label.TextStyle.YAlign = angle, across.XAlign, across.YAlign
		labels := a.Tick.Label
		a.Tick.Label = style
		a.Tick.Label.XAlign, a.Tick.Label.YAlign = labels.XAlign, labels.YAlign
	}
}
