package run

import (
	"errors"
	"math"
	"strconv"

	"distal/experiments/study"
	"distal/experiments/visual"
)

// Reasons why a person or screen is not suitable, as stored with a refusal.
const (
	ReasonAge          = "age"
	ReasonScreening    = "screening"
	ReasonCautions     = "cautions"
	ReasonCardSpread   = "card_spread"
	ReasonCardDensity  = "card_density"
	ReasonDistance     = "distance"
	ReasonSpread       = "distance_spread"
	ReasonRefreshLow   = "refresh_low"
	ReasonRefreshHigh  = "refresh_high"
	ReasonJitter       = "jitter"
	ReasonDropped      = "dropped"
	ReasonFieldSmall   = "field_small"
	ReasonNoFloat      = "no_float"
	ReasonNotMeasured  = "not_measured"
	ReasonPractice     = "practice"
	ReasonUnsuitable   = "unsuitable"
	ReasonNotConsented = "not_consented"
)

// screen gives the reason why a person cannot take part, "" if they can.
func screen(s *study.Study, a *Screening) string {
	p := s.Participants
	if !a.CautionsRead {
		return ReasonCautions
	}
	if a.AgeYears < p.MinAgeYears || p.MaxAgeYears > 0 && a.AgeYears > p.MaxAgeYears {
		return ReasonAge
	}
	for i := range p.Screening {
		j := indexOf(a.Names, p.Screening[i].Name)
		if j < 0 || a.Yes[j] != p.Screening[i].Admits {
			return ReasonScreening
		}
	}
	return ""
}

// CheckCard gives the reason why card settings must be made again, "" if they are good.
func CheckCard(s *study.Study, c *Card) string {
	if len(c.WidthsCSSPx) < s.Screen.CardRepeats || !(c.PixelRatio > 0) {
		return ReasonNotMeasured
	}
	low, high := math.Inf(1), math.Inf(-1)
	for _, w := range c.WidthsCSSPx {
		low, high = min(low, w), max(high, w)
	}
	mean, _ := visual.MeanSD(c.WidthsCSSPx)
	if !(low > 0) || (high-low)/mean > s.Screen.MaxCardSpread {
		return ReasonCardSpread
	}
	density := mean / visual.CardWidthMm
	if math.Abs(density-c.PxPerMm) > 1e-9*density {
		return ReasonNotMeasured
	}
	if device := float64(density * c.PixelRatio); device < visual.MinDevicePxPerMm || device > visual.MaxDevicePxPerMm {
		return ReasonCardDensity
	}
	return ""
}

// CheckDistance gives the reason why a distance must be measured again, "" if it is good.
func CheckDistance(s *study.Study, d *Distance) string {
	screen := &s.Screen
	if d.Method != study.DistanceNames[screen.Distance] {
		return ReasonNotMeasured
	}
	if screen.Distance == study.BlindSpot {
		if len(d.OffsetsMm) < screen.DistanceRepeats {
			return ReasonNotMeasured
		}
		mean, sd := visual.MeanSD(d.OffsetsMm)
		if !(mean > 0) || sd/mean > screen.MaxDistanceSpread {
			return ReasonSpread
		}
	}
	if d.DistanceMm < screen.MinDistanceMm || d.DistanceMm > screen.MaxDistanceMm {
		return ReasonDistance
	}
	return ""
}

// Refresh rates outside these are errors of measurement (common practice, no source).
const (
	minPlausibleHz = 10
	maxPlausibleHz = 1000
)

// CheckDisplay gives the reason why a screen cannot show the study, "" if it can.
// A twentieth of the refresh rate is allowed for, since screens are rarely at
// their nominal rate (common practice, no source).
func CheckDisplay(s *study.Study, c *DisplayCheck) string {
	screen := &s.Screen
	hz := 1000 / c.RefreshMs
	switch {
	case c.Frames < 30 || !(hz >= minPlausibleHz && hz <= maxPlausibleHz):
		return ReasonNotMeasured
	case hz < screen.MinRefreshHz*0.95:
		return ReasonRefreshLow
	case screen.MaxRefreshHz > 0 && hz > screen.MaxRefreshHz*1.05:
		return ReasonRefreshHigh
	case c.JitterMs > screen.MaxJitterMs:
		return ReasonJitter
	case c.DroppedPercent > screen.MaxDroppedPercent:
		return ReasonDropped
	case c.WidthDeg < screen.MinWidthDeg || c.HeightDeg < screen.MinHeightDeg:
		return ReasonFieldSmall
	case screen.FloatTarget && !c.FloatTarget:
		return ReasonNoFloat
	}
	return ""
}

// CheckAnswers compares answers with the study's questions.
func CheckAnswers(s *study.Study, a *Answers) error {
	for i := range s.Questions {
		q := &s.Questions[i]
		j := indexOf(a.Names, q.Name)
		if j < 0 || a.Values[j].Null {
			if !q.Optional {
				return errors.New("question " + q.Name + " is not answered")
			}
			continue
		}
		if bad := badAnswer(q, a.Values[j]); bad != "" {
			return errors.New("answer to question " + q.Name + " " + bad)
		}
	}
	for _, name := range a.Names {
		known := false
		for i := range s.Questions {
			known = known || s.Questions[i].Name == name
		}
		if !known {
			return errors.New("there is no question " + strconv.Quote(name))
		}
	}
	return nil
}

func badAnswer(q *study.Question, x Answer) string {
	switch q.Type {
	case study.ChoiceQuestion:
		for i := range q.Options {
			if x.IsText && q.Options[i].Name == x.Text {
				return ""
			}
		}
		return "is not one of its options"
	case study.NumberQuestion, study.ScaleQuestion:
		if x.IsText || x.IsBool || x.Number < q.Min || x.Number > q.Max {
			return "is not a number in its range"
		}
	case study.YesNoQuestion:
		if !x.IsBool {
			return "is not yes or no"
		}
	case study.TextQuestion:
		if !x.IsText {
			return "is not text"
		}
	}
	return ""
}
