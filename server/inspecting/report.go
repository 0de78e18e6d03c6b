package inspecting

import (
	_ "embed"
	"fmt"
	"html/template"
	"io"
	"math"
	"strings"
)

//go:embed report.html
var reportText string

var reportPage = template.Must(template.New("report").Funcs(template.FuncMap{
	"number": number, "unit": unit, "percent": func(x float64) string { return fmt.Sprintf("%.0f", 100*x) },
	"data": func(s string) template.URL { return template.URL(s) }, // made here, of base64 alone
	"plot": energyPlot, "hazard": (*Rate).hazard, "seconds": func(ms float64) string { return number(ms / 1000) },
}).Parse(reportText))

// Write writes the inspection as one page that needs nothing else.
func (in *Inspection) Write(w io.Writer) error { return reportPage.Execute(w, in) }

func number(x float64) string {
	if math.IsNaN(x) {
		return "–"
	}
	return fmt.Sprintf("%.4g", x+0) // no negative zero
}

// unit is a parameter's name with its unit.
func unit(parameter, unit string) string {
	name := strings.ReplaceAll(strings.TrimSuffix(strings.TrimSuffix(parameter, "_deg_per_s"), "_deg"), "_", " ")
	if unit == "" {
		return name
	}
	return name + " (" + unit + ")"
}

// energyPlot draws net motion energy over the level, with one standard deviation between trials.
func energyPlot(f Finding, r Rate) template.HTML {
	const width, height, left, right, top, bottom = 420.0, 220.0, 50.0, 12.0, 10.0, 40.0
	first, last := r.Levels[0].Level, r.Levels[len(r.Levels)-1].Level
	logarithmic := first > 0 && last/first > 4
	x := func(level float64) float64 {
		share := 0.5
		if last != first {
			share = (level - first) / (last - first)
			if logarithmic {
				share = math.Log(level/first) / math.Log(last/first)
			}
		}
		return left + share*(width-left-right)
	}
	y := func(e float64) float64 { return top + (1-(e+1)/2)*(height-top-bottom) }
	var b strings.Builder
	fmt.Fprintf(&b, `<svg viewBox="0 0 %g %g" width="%g" height="%g" role="img" aria-label="Net motion energy over %s"><g class="axis"><path d="M%g %gV%gH%g"/><path class="zero" d="M%g %.1fH%g"/></g>`,
		width, height, width, height, template.HTMLEscapeString(f.Parameter), left, top, height-bottom, width-right, left, y(0), width-right)
	for _, e := range []float64{-1, -0.5, 0, 0.5, 1} {
		fmt.Fprintf(&b, `<text x="%g" y="%.1f" text-anchor="end">%g</text>`, left-6, y(e)+4, e)
	}
	var path strings.Builder
	for i, l := range r.Levels {
		command := "L"
		if i == 0 {
			command = "M"
		}
		fmt.Fprintf(&path, "%s%.1f %.1f", command, x(l.Level), y(l.Energy))
		fmt.Fprintf(&b, `<path class="bar" d="M%.1f %.1fV%.1f"/><circle cx="%.1f" cy="%.1f" r="3.5"/><text x="%.1f" y="%g" text-anchor="middle">%s</text>`,
			x(l.Level), y(math.Max(-1, l.Energy-l.EnergySD)), y(math.Min(1, l.Energy+l.EnergySD)), x(l.Level), y(l.Energy), x(l.Level), height-bottom+16, number(l.Level))
	}
	fmt.Fprintf(&b, `<path class="line" d="%s"/><text x="%g" y="%g" text-anchor="middle">%s</text></svg>`, path.String(), (left+width-right)/2, height-6, template.HTMLEscapeString(unit(f.Parameter, f.Unit)))
	return template.HTML(b.String()) // numbers and escaped names alone
}
