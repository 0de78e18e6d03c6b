package planning

import (
	"fmt"
	"io"
	"math"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"

	"distal/server/fitting"
)

// WriteFigure draws two panels, the error of a run's threshold and the hours of all
// participants over the number of trials, in a format of fitting.FigureFormats.
func (p *Plan) WriteFigure(w io.Writer, format string) error {
	precision := fitting.Panel("trials of a threshold", "root mean square error (log10 units)")
	hours := fitting.Panel("trials of a threshold", "participant hours, both groups")
	hours.Y.Min = 0
	precision.Y.Min = 0
	for _, panel := range []*plot.Plot{precision, hours} {
		panel.X.Min, panel.X.Tick.Marker = 0, trialTicks(p.MostTrials)
	}
	for i, l := range p.Lines {
		var errs, cost plotter.XYs
		for _, m := range l.Marks {
			if m.RMSELog10 > 0 {
				errs = append(errs, plotter.XY{X: float64(m.Trials), Y: m.RMSELog10})
			}
			if m.Hours > 0 {
				cost = append(cost, plotter.XY{X: float64(m.Trials), Y: m.Hours})
			}
		}
		if err := add(precision, errs, i, l.Procedure); err != nil {
			return err
		}
		if err := add(hours, cost, i, l.Procedure); err != nil {
			return err
		}
	}
	wanted, err := plotter.NewLine(plotter.XYs{{X: precision.X.Min, Y: p.Precision}, {X: precision.X.Max, Y: p.Precision}})
	if err != nil {
		return err
	}
	wanted.LineStyle = fitting.Dashed()
	precision.Add(wanted)
	precision.Legend.Top, hours.Legend.Top = true, false
	precision.Legend.Add(fmt.Sprintf("asked for: %.3g", p.Precision), wanted)
	return fitting.WritePanels(w, format, []*plot.Plot{precision, hours})
}

// trialTicks are four to eight round numbers of trials from 0 on.
func trialTicks(most int) plot.ConstantTicks {
	step := 10
	for _, s := range []int{20, 50, 100, 200} {
		if most/step > 8 {
			step = s
		}
	}
	var list plot.ConstantTicks
	for n := 0; n <= most; n += step {
		list = append(list, plot.Tick{Value: float64(n), Label: fmt.Sprint(n)})
	}
	return list
}

// add draws one procedure's curve: dashes tell the procedures apart.
func add(p *plot.Plot, points plotter.XYs, which int, name string) error {
	if len(points) == 0 {
		return nil
	}
	line, err := plotter.NewLine(points)
	if err != nil {
		return err
	}
	line.LineStyle = fitting.Stroke(which)
	p.Add(line)
	p.Legend.Add(name, line)
	p.X.Min, p.X.Max = math.Min(p.X.Min, points[0].X), math.Max(p.X.Max, points[len(points)-1].X)
	p.Legend.ThumbnailWidth = 8 * vg.Millimeter
	return nil
}
