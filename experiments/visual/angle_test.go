package visual_test

import (
	"encoding/csv"
	"math"
	"os"
	"slices"
	"strconv"
	"testing"

	"pgregory.net/rapid"

	"distal/experiments/visual"
)

// table reads a CSV file of testdata as one map a row; empty and textual fields are NaN.
func table(t *testing.T, name string) []map[string]float64 {
	t.Helper()
	file, err := os.Open("../../testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	rows, err := csv.NewReader(file).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	list := make([]map[string]float64, len(rows)-1)
	for i, row := range rows[1:] {
		list[i] = map[string]float64{}
		for j, key := range rows[0] {
			x, err := strconv.ParseFloat(row[j], 64)
			if err != nil {
				x = math.NaN()
			}
			list[i][key] = x
		}
	}
	return list
}

// The table was computed by tangents and, separately, by double angles; it has eight digits.
func TestVisualAngle(t *testing.T) {
	t.Parallel()
	const tol = 1e-6 // deg
	rows := table(t, "geometry_visual_angle.csv")
	if len(rows) < 8 {
		t.Fatalf("%d rows", len(rows))
	}
	for _, row := range rows {
		size, distance := row["size_mm"], row["distance_mm"]
		if got, want := visual.SizeDeg(size, distance), row["centred_deg_2atan"]; math.Abs(got-want) > tol {
			t.Errorf("%v mm at %v mm: %v deg, want %v", size, distance, got, want)
		}
		if got, want := visual.EccentricityDeg(size, distance), row["from_fixation_deg_atan"]; math.Abs(got-want) > tol {
			t.Errorf("%v mm beside fixation at %v mm: %v deg, want %v", size, distance, got, want)
		}
	}
}

// The CSS reference pixel: 1/96 inch seen from 28 inches is about 0.0213 deg
// (CSS Values and Units, reference pixel). A card drawn 323.5276 px wide means 96 px per inch.
func TestReferencePixelAndCard(t *testing.T) {
	t.Parallel()
	if got := visual.SizeDeg(1.0/96, 28); math.Abs(got-0.0213153) > 1e-7 {
		t.Errorf("reference pixel %v deg", got)
	}
	if got, want := 323.5276/visual.CardWidthMm, 96/25.4; math.Abs(got-want) > 1e-6 {
		t.Errorf("density %v px/mm, want %v", got, want)
	}
	if got := visual.CardWidthMm / visual.CardHeightMm; math.Abs(got-1.585773) > 1e-6 {
		t.Errorf("aspect ratio of the card %v", got)
	}
}

func TestOffsetInvertsEccentricity(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		distance := rapid.Float64Range(100, 3000).Draw(t, "distance")
		e := rapid.Float64Range(-60, 60).Draw(t, "eccentricity")
		if got := visual.EccentricityDeg(visual.OffsetMm(e, distance), distance); math.Abs(got-e) > 1e-12 {
			t.Fatalf("%v deg came back as %v", e, got)
		}
		// A size centred on the line of sight is twice the offset of half of it.
		size := rapid.Float64Range(0.1, 2000).Draw(t, "size")
		if got, want := visual.SizeDeg(size, distance), 2*visual.EccentricityDeg(size/2, distance); got != want {
			t.Fatalf("size %v deg, twice half of it %v", got, want)
		}
	})
}

// Rows of the eccentricity that the calibration uses; Rohrschneider (2004).
func TestBlindSpotDistance(t *testing.T) {
	t.Parallel()
	const tol = 0.01 // mm
	rows := 0
	for _, row := range table(t, "geometry_blind_spot.csv") {
		if row["eccentricity_deg"] != visual.BlindSpotDeg {
			continue
		}
		rows++
		distance, sd := visual.BlindSpotDistance(row["fixation_to_vanish_mm"])
		if math.Abs(distance-row["distance_mm"]) > tol {
			t.Errorf("at %v mm: %v mm, want %v", row["fixation_to_vanish_mm"], distance, row["distance_mm"])
		}
		if got, want := sd/distance, row["relative_sd_of_distance"]; math.Abs(got-want) > 1e-5 {
			t.Errorf("relative sd %v, want %v", got, want)
		}
	}
	if rows != 4 {
		t.Errorf("%d rows", rows)
	}
}

func TestSummaries(t *testing.T) {
	t.Parallel()
	if mean, sd := visual.MeanSD([]float64{2, 4, 4, 4, 5, 5, 7, 9}); mean != 5 || math.Abs(sd-math.Sqrt(32.0/7)) > 1e-15 {
		t.Errorf("mean %v, sd %v", mean, sd)
	}
	if mean, sd := visual.MeanSD([]float64{3}); mean != 3 || sd != 0 {
		t.Errorf("of one: mean %v, sd %v", mean, sd)
	}
	if mean, sd := visual.MeanSD(nil); !math.IsNaN(mean) || !math.IsNaN(sd) {
		t.Errorf("of none: mean %v, sd %v", mean, sd)
	}
	if !math.IsNaN(visual.Median(nil)) {
		t.Error("the median of none must be NaN")
	}
	rapid.Check(t, func(t *rapid.T) {
		x := rapid.SliceOfN(rapid.Float64Range(-1e6, 1e6), 1, 60).Draw(t, "x")
		sorted := slices.Clone(x)
		slices.Sort(sorted)
		n := len(x)
		if got, want := visual.Median(x), (sorted[(n-1)/2]+sorted[n/2])/2; got != want {
			t.Fatalf("median %v, want %v", got, want)
		}
		if !slices.Equal(x, sorted) {
			t.Fatalf("not sorted in place: %v", x)
		}
	})
}
