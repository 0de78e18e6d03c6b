package fitting

import (
	"errors"
	"math"
	"reflect"
	"strings"
	"testing"
	"testing/iotest"

	"distal/experiments/psychometric"
)

func TestRead(t *testing.T) {
	t.Parallel()
	data := func(numbers ...float64) (d psychometric.Data) { // level, trials, correct …
		for i := 0; i < len(numbers); i += 3 {
			d = append(d, psychometric.Level{X: numbers[i], N: int(numbers[i+1]), K: int(numbers[i+2])})
		}
		return d
	}
	trials := Columns{Level: "level", Correct: "correct"}
	counts := Columns{Level: "level", Correct: "k", N: "n", By: "who"}
	for _, c := range []struct {
		name    string
		text    string
		columns Columns
		want    []Group
	}{
		{"Trials", "level,correct\n0.1,1\n0.2,0\n0.1,0\n", trials,
			[]Group{{"", data(0.1, 2, 1, 0.2, 1, 0), data(0.1, 1, 1, 0.2, 1, 0, 0.1, 1, 0), 0}}},
		{"CountsByGroup", "who,level,n,k\nb,1,10,5\na,1,10,6\nb,2,10,9\n", counts,
			[]Group{{"b", data(1, 10, 5, 2, 10, 9), data(1, 10, 5, 2, 10, 9), 0}, {"a", data(1, 10, 6), data(1, 10, 6), 0}}},
		{"TabsAndMissing", "\ufefftrial\tlevel\tcorrect\r\n1\t1e-1\tTrue\r\n2\t0.1\tn/a\r\n3\tn/a\t1\r\n4\t0.1\tno\r\n", trials,
			[]Group{{"", data(0.1, 2, 1), data(0.1, 1, 1, 0.1, 1, 0), 2}}},
		{"QuotedAndSpaced", "\"level\", correct\n\"0.5\", 1\n", trials, []Group{{"", data(0.5, 1, 1), data(0.5, 1, 1), 0}}},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			got, err := Read(strings.NewReader(c.text), c.columns)
			if err != nil {
				t.Fatal(err)
			}
			if !reflect.DeepEqual(got, c.want) {
				t.Errorf("got %+v, want %+v", got, c.want)
			}
		})
	}
}

func TestReadErrors(t *testing.T) {
	t.Parallel()
	trials := Columns{Level: "level", Correct: "correct"}
	counts := Columns{Level: "level", Correct: "k", N: "n"}
	for _, c := range []struct {
		name         string
		text         string
		columns      Columns
		line, column int
		says         string
	}{
		{"Empty", "", trials, 1, 1, "is empty"},
		{"NoRows", "level,correct\n", trials, 2, 1, "no rows"},
		{"NoColumn", "coherence,correct\n0.1,1\n", trials, 1, 1, `no column "level"; the columns are coherence, correct`},
		{"TwoColumns", "level,level,correct\n", trials, 1, 1, "two columns"},
		{"Level", "level,correct\n0.1,1\nhalf,1\n", trials, 3, 1, `level: "half" is not a number`},
		{"Infinite", "level,correct\nInf,1\n", trials, 2, 1, "not a number"},
		{"Comma", "level;correct\n", trials, 1, 1, "no column"},
		{"DecimalComma", "level\tcorrect\n0,1\t1\n", trials, 2, 1, "written with a point"},
		{"Response", "level,correct\n0.1, 0.85\n", trials, 2, 6, "neither 0 nor 1"},
		{"Count", "level,n,k\n0.1,ten,3\n", counts, 2, 5, `n: "ten" is not a number of trials`},
		{"Negative", "level,n,k\n0.1,10,-3\n", counts, 2, 8, "k:"},
		{"TooMany", "level,n,k\n0.1,10,11\n", counts, 2, 8, "11 correct responses of 10 trials"},
		{"Huge", "level,n,k\n0.1,99999999999,1\n", counts, 2, 5, "not a number of trials"},
		{"Fields", "level,correct\n0.1,1,2\n", trials, 2, 1, "not as many fields"},
		{"Quote", "level,correct\n0.1,\"1\n", trials, 0, 0, "quoted field"},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			_, err := Read(strings.NewReader(c.text), c.columns)
			var p *PositionError
			if !errors.As(err, &p) || !strings.Contains(p.Message, c.says) {
				t.Fatalf("got %v", err)
			}
			if c.line > 0 && (p.Line != c.line || p.Column != c.column) {
				t.Errorf("at %d:%d, want %d:%d", p.Line, p.Column, c.line, c.column)
			}
		})
	}
	broken := errors.New("broken")
	if _, err := Read(iotest.ErrReader(broken), trials); !errors.Is(err, broken) {
		t.Errorf("got %v", err)
	}
}

// FuzzRead reads anything without panic; what it accepts are counts and finite levels,
// and errors have a place.
func FuzzRead(f *testing.F) {
	for _, seed := range []string{
		"level,correct\n0.1,1\n0.2,0\n", "level\tcorrect\n0.1\t1\n", "\ufefflevel,correct\r\n1e-3,n/a\r\n",
		"level,correct\n\"0.1\n\",1\n", "level,correct\n0.1,\"1", "level,correct,n\n1,2,3\n", "level,correct,level\n", "\n\n", "level,correct\n,\n", "a\"b,correct",
		"level,n,correct,by\n0x1p-2,007,3,\xff\n", "level,correct\n1_0,1\n", "correct,level\n1,0,1\n",
	} {
		f.Add(seed, false, false)
		f.Add(seed, true, true)
	}
	f.Fuzz(func(t *testing.T, text string, counts, by bool) {
		c := Columns{Level: "level", Correct: "correct"}
		if counts {
			c.N = "n"
		}
		if by {
			c.By = "by"
		}
		groups, err := Read(strings.NewReader(text), c)
		if err != nil {
			var p *PositionError
			if !errors.As(err, &p) || p.Line < 1 || p.Column < 1 || p.Message == "" {
				t.Fatalf("no place: %v", err)
			}
			return
		}
		for _, g := range groups {
			for _, l := range g.Blocks {
				if math.IsNaN(l.X) || math.IsInf(l.X, 0) || l.K < 0 || l.K > l.N {
					t.Fatalf("%+v", l)
				}
			}
		}
	})
}
