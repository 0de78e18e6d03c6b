package study

import (
	"slices"
	"strconv"
	"strings"

	"distal/experiments/value"
)

// Problem is one thing that is wrong in a study, or worth a second look.
type Problem struct {
	Pos       value.Pos
	Path      string // e.g. displays.field.speed_deg_per_s
	Offending string // the text at fault, as written
	Message   string // what is wrong and what would be right
	Warning   bool   // the study can be used all the same
}

// String is the problem in the form file:line:column: path: message.
func (p Problem) String() string {
	var b strings.Builder
	if p.Pos.Line > 0 {
		if p.Pos.File != "" {
			b.WriteString(p.Pos.File + ":")
		}
		b.WriteString(strconv.Itoa(p.Pos.Line) + ":" + strconv.Itoa(p.Pos.Column) + ": ")
	}
	if p.Warning {
		b.WriteString("warning: ")
	}
	if p.Path != "" {
		b.WriteString(p.Path + ": ")
	}
	b.WriteString(p.Message)
	return b.String()
}

// Problems are all problems of one study, in the order of the text.
type Problems []Problem

// InOrder gives the problems in the order of the text, each once.
func (p Problems) InOrder() Problems {
	sorted := slices.Clone(p)
	slices.SortStableFunc(sorted, func(a, b Problem) int {
		if a.Pos.Line != b.Pos.Line {
			return a.Pos.Line - b.Pos.Line
		}
		return a.Pos.Column - b.Pos.Column
	})
	var out Problems
	from := 0 // first one of the same place
	for _, problem := range sorted {
		if from < len(out) && out[from].Pos != problem.Pos {
			from = len(out)
		}
		if !slices.Contains(out[from:], problem) {
			out = append(out, problem)
		}
	}
	return out
}

// Failed tells whether any problem is more than a warning.
func (p Problems) Failed() bool {
	for i := range p {
		if !p[i].Warning {
			return true
		}
	}
	return false
}

// Error joins the problems, one a line.
func (p Problems) Error() string {
	lines := make([]string, len(p))
	for i := range p {
		lines[i] = p[i].String()
	}
	return strings.Join(lines, "\n")
}

// nearest finds the candidate that word was most likely meant to be, "" if none is near.
func nearest(word string, candidates []string) string {
	best, limit := "", 1+len(word)/4
	for _, c := range candidates {
		if d := editDistance(strings.ToLower(word), strings.ToLower(c)); d <= limit {
			best, limit = c, d-1
		}
	}
	return best
}

// editDistance counts insertions, deletions, substitutions and swaps of
// neighbours (Damerau 1964, Commun ACM 7:171; restricted form).
func editDistance(a, b string) int {
	before := make([]int, len(b)+1)
	last := make([]int, len(b)+1)
	row := make([]int, len(b)+1)
	for j := range last {
		last[j] = j
	}
	for i := 1; i <= len(a); i++ {
		row[0] = i
		for j := 1; j <= len(b); j++ {
			cost := 1
			if a[i-1] == b[j-1] {
				cost = 0
			}
			row[j] = min(last[j]+1, row[j-1]+1, last[j-1]+cost)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				row[j] = min(row[j], before[j-2]+1)
			}
		}
		before, last, row = last, row, before
	}
	return last[len(b)]
}
