package study

import (
	"strconv"
	"strings"
)

// unit is a unit that keys can end in, with its size in the base unit of its dimension.
type unit struct {
	suffix    string
	dimension string
	size      float64
}

var units = []unit{
	{"_arcmin_per_s", "speed", 1.0 / 60}, {"_arcsec_per_s", "speed", 1.0 / 3600}, {"_deg_per_s", "speed", 1},
	{"_px_per_s", "screen speed", 1}, {"_per_deg2", "density", 1}, {"_cpd", "frequency", 1},
	{"_arcmin", "angle", 1.0 / 60}, {"_arcsec", "angle", 1.0 / 3600}, {"_deg", "angle", 1}, {"_rad", "angle", 57.29577951308232},
	{"_px", "pixels", 1}, {"_minutes", "time", 60000}, {"_min", "time", 60000},
	{"_ms", "time", 1}, {"_s", "time", 1000}, {"_frames", "frames", 1}, {"_khz", "rate", 1000}, {"_hz", "rate", 1},
	{"_cm", "length", 10}, {"_mm", "length", 1}, {"_m", "length", 1000}, {"_inch", "length", 25.4},
	{"_percent", "share", 0.01}, {"_fraction", "share", 1}, {"_years", "age", 1},
}

func unitOf(key string) (stem string, u unit, ok bool) {
	for _, u := range units {
		if stem, found := strings.CutSuffix(key, u.suffix); found && stem != "" {
			return stem, u, true
		}
	}
	return key, unit{}, false
}

// wrongUnit explains an unknown key that is a known one with another unit, and
// says which, "" if it is not.
func wrongUnit(key string, known []string, number float64, isNumber bool) (message, meant string) {
	stem, given, ok := unitOf(key)
	if !ok {
		stem = key
	}
	for _, k := range known {
		knownStem, wanted, has := unitOf(k)
		if !has || knownStem != stem || k == key {
			continue
		}
		message = "wrong unit: it is given as " + k
		if !ok {
			message = "the unit belongs in the key: " + k
		} else if given.dimension == wanted.dimension && isNumber {
			message += "; " + formatNumber(number) + strings.ReplaceAll(given.suffix, "_", " ") +
				" is " + k + ": " + formatNumber(number*given.size/wanted.size)
		}
		return message, k
	}
	return "", ""
}

// quantityText splits "5 deg/s" into number and unit.
func quantityText(s string) (number string, rest string, ok bool) {
	s = strings.TrimSpace(s)
	i := 0
	for i < len(s) && strings.IndexByte("0123456789.+-eE", s[i]) >= 0 {
		i++
	}
	if _, err := strconv.ParseFloat(s[:i], 64); err != nil || i == len(s) {
		return "", "", false
	}
	return s[:i], strings.TrimSpace(s[i:]), true
}

func formatNumber(x float64) string { return strconv.FormatFloat(x, 'g', 6, 64) }
