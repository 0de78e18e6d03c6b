package run_test

import (
	"math"
	"strconv"
	"testing"

	"distal/experiments/run"
	"distal/experiments/value"
)

// Each demand of the study refuses with its own reason, and only beyond its limit.
func TestPersonNotSuitable(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	for _, c := range []struct {
		name   string
		change func(*run.Screening)
		want   string
	}{
		{"fits", func(*run.Screening) {}, ""},
		{"youngest", func(a *run.Screening) { a.AgeYears = 18 }, ""},
		{"oldest", func(a *run.Screening) { a.AgeYears = 70 }, ""},
		{"too young", func(a *run.Screening) { a.AgeYears = 17 }, run.ReasonAge},
		{"too old", func(a *run.Screening) { a.AgeYears = 71 }, run.ReasonAge},
		{"seizures", func(a *run.Screening) { a.Yes[0] = true }, run.ReasonScreening},
		{"cannot read", func(a *run.Screening) { a.Yes[1] = false }, run.ReasonScreening},
		{"a question left out", func(a *run.Screening) { a.Names, a.Yes = a.Names[:1], a.Yes[:1] }, run.ReasonScreening},
		{"cautions not read", func(a *run.Screening) { a.CautionsRead = false }, run.ReasonCautions},
	} {
		p := begin(t, s, run.Assignment{})
		p.apply(p.answer(run.StepConsent))
		a := goodScreening()
		c.change(a)
		p.apply(run.Record{Kind: run.KindScreening, Screening: a})
		step := p.run.Next()
		if want := c.want != ""; (step.Kind == run.StepRefused) != want || step.Code != c.want {
			t.Errorf("%s: %s %q, want %q", c.name, run.StepKindNames[step.Kind], step.Code, c.want)
		}
		if c.want == "" {
			continue
		}
		if err := p.try(p.answer(run.StepCard)); err == nil {
			t.Errorf("%s: the run went on", c.name)
		}
		p.apply(run.Record{Kind: run.KindRefusal, Refusal: &run.Refusal{Step: "screening", Reason: c.want}})
		if step := p.run.Next(); step.Kind != run.StepRefused || step.Code != c.want {
			t.Errorf("%s: after the refusal %s %q", c.name, run.StepKindNames[step.Kind], step.Code)
		}
	}
}

func TestCardNotUsable(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	spread := s.Screen.MaxCardSpread
	density := func(c *run.Card, pxPerMm float64) {
		w := pxPerMm * 85.6
		c.WidthsCSSPx, c.PxPerMm, c.PixelRatio = []float64{w, w, w}, w*3/3/85.6, 1
	}
	for _, c := range []struct {
		name   string
		change func(*run.Card)
		want   string
	}{
		{"fits", func(*run.Card) {}, ""},
		{"too few settings", func(c *run.Card) { c.WidthsCSSPx = c.WidthsCSSPx[:2] }, run.ReasonNotMeasured},
		{"the mean is another", func(c *run.Card) { c.PxPerMm *= 1.00001 }, run.ReasonNotMeasured},
		{"no pixel ratio", func(c *run.Card) { c.PixelRatio = 0 }, run.ReasonNotMeasured},
		{"settings apart", func(c *run.Card) {
			c.WidthsCSSPx = []float64{300, 300 * (1 + spread*1.2), 300}
			c.PxPerMm = (900 + 300*spread*1.2) / 3 / 85.6
		}, run.ReasonCardSpread},
		{"a width of nothing", func(c *run.Card) { c.WidthsCSSPx = []float64{0, 0, 0}; c.PxPerMm = 0 }, run.ReasonCardSpread},
		{"coarser than any screen", func(c *run.Card) { density(c, 1.4) }, run.ReasonCardDensity},
		{"coarse", func(c *run.Card) { density(c, 1.6) }, ""},
		{"fine", func(c *run.Card) { density(c, 31) }, ""},
		{"finer than any screen", func(c *run.Card) { density(c, 33) }, run.ReasonCardDensity},
	} {
		card := goodCard()
		c.change(card)
		if got := run.CheckCard(s, card); got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
	}
}

func TestDistanceNotUsable(t *testing.T) {
	t.Parallel()
	blind := readStudy(t, motley)
	stated := changed(t, "distance_method: blind_spot", "distance_method: stated\n  stated_distance_mm: 570")
	good := func() *run.Distance { return goodDistance() }
	said := func() *run.Distance { return &run.Distance{Method: "stated", DistanceMm: 570, SDMm: 57} }
	if got := run.CheckDistance(stated, said()); got != "" {
		t.Errorf("stated: %q", got)
	}
	if got := run.CheckDistance(stated, good()); got != run.ReasonNotMeasured {
		t.Errorf("measured where it is stated: %q", got)
	}
	if got := run.CheckDistance(blind, said()); got != run.ReasonNotMeasured {
		t.Errorf("stated where it is measured: %q", got)
	}
	apart := 159 * blind.Screen.MaxDistanceSpread * 1.1
	for _, c := range []struct {
		name   string
		change func(*run.Distance)
		want   string
	}{
		{"fits", func(*run.Distance) {}, ""},
		{"too few settings", func(d *run.Distance) { d.OffsetsMm = d.OffsetsMm[:2] }, run.ReasonNotMeasured},
		{"settings apart", func(d *run.Distance) { d.OffsetsMm = []float64{159 - apart, 159, 159 + apart} }, run.ReasonSpread},
		{"settings together", func(d *run.Distance) { d.OffsetsMm = []float64{159 - apart/1.3, 159, 159 + apart/1.3} }, ""},
		{"no offsets", func(d *run.Distance) { d.OffsetsMm = []float64{0, 0, 0} }, run.ReasonSpread},
		{"too near", func(d *run.Distance) { d.DistanceMm = blind.Screen.MinDistanceMm - 1 }, run.ReasonDistance},
		{"nearest", func(d *run.Distance) { d.DistanceMm = blind.Screen.MinDistanceMm }, ""},
		{"too far", func(d *run.Distance) { d.DistanceMm = blind.Screen.MaxDistanceMm + 1 }, run.ReasonDistance},
	} {
		d := good()
		c.change(d)
		if got := run.CheckDistance(blind, d); got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
	}
}

func TestDisplayNotUsable(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	hz := func(x float64) func(*run.DisplayCheck) {
		return func(c *run.DisplayCheck) { c.RefreshMs = 1000 / x }
	}
	for _, c := range []struct {
		name   string
		change func(*run.DisplayCheck)
		want   string
	}{
		{"fits", func(*run.DisplayCheck) {}, ""},
		{"30 Hz", hz(30), run.ReasonRefreshLow},
		{"47 Hz", hz(47), run.ReasonRefreshLow},
		{"nominally 50 Hz", hz(48), ""},
		{"nominally 150 Hz", hz(156), ""},
		{"165 Hz", hz(165), run.ReasonRefreshHigh},
		{"a clock that stands", hz(5), run.ReasonNotMeasured},
		{"a clock that runs away", hz(1e9), run.ReasonNotMeasured},
		{"hardly measured", func(c *run.DisplayCheck) { c.Frames = 29 }, run.ReasonNotMeasured},
		{"no interval", func(c *run.DisplayCheck) { c.RefreshMs = math.NaN() }, run.ReasonNotMeasured},
		{"jitter", func(c *run.DisplayCheck) { c.JitterMs = 2.1 }, run.ReasonJitter},
		{"dropped frames", func(c *run.DisplayCheck) { c.DroppedPercent = 5.1 }, run.ReasonDropped},
		{"narrow", func(c *run.DisplayCheck) { c.WidthDeg = 8.9 }, run.ReasonFieldSmall},
		{"low", func(c *run.DisplayCheck) { c.HeightDeg = 8.9 }, run.ReasonFieldSmall},
		{"no float target", func(c *run.DisplayCheck) { c.FloatTarget = false }, ""},
		{"just large enough", func(c *run.DisplayCheck) { c.WidthDeg, c.HeightDeg = 9, 9 }, ""},
	} {
		check := goodCheck()
		c.change(check)
		if got := run.CheckDisplay(s, check); got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
		p := begin(t, s, run.Assignment{})
		p.untilKind(run.StepDisplayCheck)
		if err := p.try(run.Record{Kind: run.KindDisplayCheck, Check: check}); (err == nil) != (c.want == "") {
			t.Errorf("%s: %v", c.name, err)
		}
	}
}

// A study can refuse browsers that blend in 8 bits.
func TestDisplayWithoutFloatTarget(t *testing.T) {
	t.Parallel()
	s := changed(t, "  min_width_deg: 9\n", "  min_width_deg: 9\n  float_target: true\n")
	check := goodCheck()
	if got := run.CheckDisplay(s, check); got != "" {
		t.Errorf("with a float target: %q", got)
	}
	check.FloatTarget = false
	if got := run.CheckDisplay(s, check); got != run.ReasonNoFloat {
		t.Errorf("without a float target: %q, want %q", got, run.ReasonNoFloat)
	}
}

func TestAnswersRefused(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	for _, c := range []struct {
		name   string
		change func(*run.Answers)
		want   string
	}{
		{"fits", func(*run.Answers) {}, ""},
		{"optional left out", func(a *run.Answers) { a.Names, a.Values = a.Names[:4], a.Values[:4] }, ""},
		{"optional given", func(a *run.Answers) { a.Values[4] = run.Answer{IsText: true, Text: "none"} }, ""},
		{"left out", func(a *run.Answers) { a.Names, a.Values = a.Names[1:], a.Values[1:] }, "question eyes is not answered"},
		{"null", func(a *run.Answers) { a.Values[3] = run.Answer{Null: true} }, "question glasses is not answered"},
		{"no option", func(a *run.Answers) { a.Values[0].Text = "three" }, "answer to question eyes is not one of its options"},
		{"below", func(a *run.Answers) { a.Values[1].Number = -0.5 }, "answer to question hours is not a number in its range"},
		{"above", func(a *run.Answers) { a.Values[2].Number = 8 }, "answer to question effort is not a number in its range"},
		{"a yes as a number", func(a *run.Answers) { a.Values[1].IsBool = true }, "answer to question hours is not a number in its range"},
		{"a number as a yes", func(a *run.Answers) { a.Values[3].IsBool = false }, "answer to question glasses is not yes or no"},
		{"a number as text", func(a *run.Answers) { a.Values[4] = run.Answer{Number: 1} }, "answer to question remarks is not text"},
		{"another question", func(a *run.Answers) { a.Names[4] = "mood" }, `there is no question "mood"`},
	} {
		a := goodAnswers()
		c.change(a)
		got := ""
		if err := run.CheckAnswers(s, a); err != nil {
			got = err.Error()
		}
		if got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
	}
}

// Calibrate gives what the records need: its answers are accepted as records.
func TestCalibrate(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	ask := func(text string) value.Value {
		tree, err := value.ParseJSON([]byte(text))
		if err != nil {
			t.Fatal(err)
		}
		v, err := run.Calibrate(s, tree)
		if err != nil {
			t.Fatalf("%s: %v", text, err)
		}
		return v
	}
	number := func(v value.Value, key string) float64 {
		x, ok := v.Get(key)
		if !ok || x.Kind != value.Numeric {
			t.Fatalf("%s is no number", key)
		}
		return x.Num
	}
	accepted := func(v value.Value) bool { x, _ := v.Get("accepted"); return x.Bool }

	card := ask(`{"of":"card","widths_css_px":[300,302,301],"device_pixel_ratio":1.5}`)
	c := goodCard()
	c.PxPerMm = number(card, "css_px_per_mm")
	if !accepted(card) || run.CheckCard(s, c) != "" || math.Abs(c.PxPerMm-301/85.6) > 1e-12 {
		t.Errorf("card: %+v", card)
	}
	// The sample standard deviation of 300, 301 and 302 is 1.
	if sd := number(card, "sd_css_px_per_mm"); math.Abs(sd-1/85.6) > 1e-12 {
		t.Errorf("card: sd %g", sd)
	}
	// Offset of the blind spot at 15.5 deg: D = d / tan 15.5°.
	distance := ask(`{"of":"distance","offsets_mm":[158,160,159]}`)
	if got, want := number(distance, "distance_mm"), 159/math.Tan(15.5*math.Pi/180); !accepted(distance) || math.Abs(got-want) > 1e-9 {
		t.Errorf("distance: %g, want %g", got, want)
	}
	// 2 atan(250/570) = 47.3633…° and 2 atan(150/570) = 29.4887…°, from the formula.
	field := ask(`{"of":"field","width_mm":500,"height_mm":300,"distance_mm":570}`)
	for key, mm := range map[string]float64{"width_deg": 500, "height_deg": 300} {
		if got, want := number(field, key), 2*math.Atan(mm/2/570)*180/math.Pi; math.Abs(got-want) > 1e-9 {
			t.Errorf("field: %s %g, want %g", key, got, want)
		}
	}
	// A wandering eye in one setting: the median stays; its standard error is √(π/2) sd ÷ √n with sd = 9.53502316 (R: sd(c(158,160,159,140))
	// for four settings), beside the spread from eye to eye, 2 · 1.1° ÷ sin 31°.
	distance = ask(`{"of":"distance","offsets_mm":[160,140,158,159]}`)
	d := 158.5 / math.Tan(15.5*math.Pi/180)
	if got := number(distance, "distance_mm"); !accepted(distance) || math.Abs(got-d) > 1e-9 {
		t.Errorf("distance with a wandering eye: %g, want %g", got, d)
	}
	sd := math.Hypot(d*2*1.1*math.Pi/180/math.Sin(31*math.Pi/180), d*math.Sqrt(math.Pi/2)*9.53502316/2/158.5)
	if got := number(distance, "sd_mm"); math.Abs(got-sd) > 1e-5 {
		t.Errorf("distance with a wandering eye: sd %g, want %g", got, sd)
	}
	intervals := ""
	for i := range 60 {
		if i > 0 {
			intervals += ","
		}
		intervals += strconv.FormatFloat(1000.0/60, 'g', -1, 64)
	}
	refresh := ask(`{"of":"refresh","intervals_ms":[` + intervals + `]}`)
	if got := number(refresh, "refresh_ms"); math.Abs(got-1000.0/60) > 1e-9 || number(refresh, "frames") != 60 || number(refresh, "dropped_percent") != 0 {
		t.Errorf("refresh: %+v", refresh)
	}
	for _, bad := range []string{`{"of":"moon"}`, `{}`, `{"of":"card"}`, `{"of":"field","width_mm":-1,"height_mm":1,"distance_mm":1}`} {
		tree, err := value.ParseJSON([]byte(bad))
		if err != nil {
			t.Fatal(err)
		}
		if _, err := run.Calibrate(s, tree); err == nil {
			t.Errorf("%s was accepted", bad)
		}
	}
}
