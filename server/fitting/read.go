// Package fitting is the command that fits psychometric functions to a table: it reads
// trials or counts from CSV, fits them, and writes a table, JSON or a figure.
package fitting

import (
	"bufio"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"

	"distal/experiments/psychometric"
)

// Columns are the names of the columns to read. N and By may be empty.
type Columns struct {
	Level   string
	Correct string // 0 or 1, or with N the number of correct responses
	N       string // number of trials
	By      string // one fit for each value
}

// Group is the data of one value of Columns.By, in the order of first appearance.
type Group struct {
	Name string
	Data psychometric.Data // merged, ascending
	// Blocks are the rows as they stood, one entry each.
	Blocks psychometric.Data
	// Missing is the number of rows without a response (empty or n/a), which count for nothing.
	Missing int
}

// PositionError says where in the table something is wrong. Line and Column count from 1,
// Column in bytes.
type PositionError struct {
	Line, Column int
	Message      string
}

func (e *PositionError) Error() string {
	return fmt.Sprintf("line %d, column %d: %s", e.Line, e.Column, e.Message)
}

// Read reads a table with a header, comma- or (if the header has tabs and no commas)
// tab-separated. Errors are *PositionError unless reading itself fails.
func Read(r io.Reader, c Columns) ([]Group, error) {
	t, err := newTable(r, c)
	if err != nil {
		return nil, err
	}
	for {
		row, err := t.csv.Read()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			return nil, position(err)
		}
		if err := t.add(row); err != nil {
			return nil, err
		}
	}
	for i := range t.groups {
		t.groups[i].Data = t.groups[i].Blocks.Merge()
	}
	if len(t.groups) == 0 {
		return nil, &PositionError{Line: 2, Column: 1, Message: "the table has no rows below its header"}
	}
	return t.groups, nil
}

// table is a table being read.
type table struct {
	csv     *csv.Reader
	columns Columns
	index   struct{ level, correct, n, by int }
	groups  []Group
	byName  map[string]int
}

func newTable(r io.Reader, c Columns) (*table, error) {
	text := bufio.NewReader(r)
	if mark, err := text.Peek(3); err == nil && string(mark) == "\ufeff" {
		_, _ = text.Discard(3)
	}
	t := &table{csv: csv.NewReader(text), columns: c, byName: map[string]int{}}
	t.csv.ReuseRecord = true
	t.csv.TrimLeadingSpace = true
	if separatedByTabs(text) {
		t.csv.Comma = '\t'
	}
	header, err := t.csv.Read()
	if errors.Is(err, io.EOF) {
		return nil, &PositionError{Line: 1, Column: 1, Message: "the table is empty; its first line must name the columns"}
	}
	if err != nil {
		return nil, position(err)
	}
	names := append([]string(nil), header...)
	for _, want := range []struct {
		name  string
		index *int
	}{{c.Level, &t.index.level}, {c.Correct, &t.index.correct}, {c.N, &t.index.n}, {c.By, &t.index.by}} {
		*want.index = -1
		if want.name == "" {
			continue
		}
		if *want.index, err = find(names, want.name); err != nil {
			return nil, err
		}
	}
	return t, nil
}

// separatedByTabs looks at the first line.
func separatedByTabs(r *bufio.Reader) bool {
	start, _ := r.Peek(r.Size())
	line, _, _ := strings.Cut(string(start), "\n")
	return strings.Contains(line, "\t") && !strings.Contains(line, ",")
}

func find(header []string, name string) (int, error) {
	found := -1
	for i, h := range header {
		if strings.TrimSpace(h) != name {
			continue
		}
		if found >= 0 {
			return 0, &PositionError{1, 1, fmt.Sprintf("there are two columns named %q", name)}
		}
		found = i
	}
	if found < 0 {
		return 0, &PositionError{1, 1, fmt.Sprintf("there is no column %q; the columns are %s", name, strings.Join(header, ", "))}
	}
	return found, nil
}

// position turns an error of the CSV reader into one with a position.
func position(err error) error {
	var p *csv.ParseError
	if !errors.As(err, &p) {
		return fmt.Errorf("read table: %w", err)
	}
	message := p.Err.Error()
	switch {
	case errors.Is(p.Err, csv.ErrFieldCount):
		message = "this line has not as many fields as the header"
	case errors.Is(p.Err, csv.ErrBareQuote):
		message = `a quotation mark stands inside a field that is not quoted; write it as "" in a quoted field`
	case errors.Is(p.Err, csv.ErrQuote):
		message = "a quoted field does not end, or something follows its closing quotation mark"
	}
	return &PositionError{p.Line, max(p.Column, 1), message}
}

// add one row.
func (t *table) add(row []string) error {
	g := t.group(row)
	correct := strings.TrimSpace(row[t.index.correct])
	if missing(correct) || missing(row[t.index.level]) {
		g.Missing++
		return nil
	}
	l := psychometric.Level{N: 1}
	var err error
	if l.X, err = t.number(row, t.index.level); err != nil {
		return err
	}
	if t.index.n >= 0 {
		if l.N, err = t.count(row, t.index.n); err != nil {
			return err
		}
		if l.K, err = t.count(row, t.index.correct); err != nil {
			return err
		}
		if l.K > l.N {
			return t.wrong(t.index.correct, fmt.Sprintf("%d correct responses of %d trials", l.K, l.N))
		}
	} else {
		switch strings.ToLower(correct) {
		case "1", "true", "yes":
			l.K = 1
		case "0", "false", "no":
		default:
			return t.wrong(t.index.correct, fmt.Sprintf("%q is neither 0 nor 1; for numbers of correct responses name the column of trials with --n", correct))
		}
	}
	g.Blocks = append(g.Blocks, l)
	return nil
}

func (t *table) group(row []string) *Group {
	name := ""
	if t.index.by >= 0 {
		name = strings.TrimSpace(row[t.index.by])
	}
	i, ok := t.byName[name]
	if !ok {
		i = len(t.groups)
		t.byName[name] = i
		t.groups = append(t.groups, Group{Name: strings.Clone(name)})
	}
	return &t.groups[i]
}

// missing values are empty or n/a, as in BIDS tables.
func missing(s string) bool {
	s = strings.TrimSpace(s)
	return s == "" || strings.EqualFold(s, "n/a") || strings.EqualFold(s, "na")
}

func (t *table) number(row []string, i int) (float64, error) {
	s := strings.TrimSpace(row[i])
	x, err := strconv.ParseFloat(s, 64)
	switch {
	case err != nil && strings.Contains(s, ","):
		return 0, t.wrong(i, fmt.Sprintf("%q is not a number; decimals are written with a point", s))
	case err != nil || math.IsNaN(x) || math.IsInf(x, 0):
		return 0, t.wrong(i, fmt.Sprintf("%q is not a number", s))
	}
	return x, nil
}

// largestCount keeps sums of counts within an int.
const largestCount = 1_000_000_000

func (t *table) count(row []string, i int) (int, error) {
	s := strings.TrimSpace(row[i])
	n, err := strconv.Atoi(s)
	if err != nil || n < 0 || n > largestCount {
		return 0, t.wrong(i, fmt.Sprintf("%q is not a number of trials", s))
	}
	return n, nil
}

// wrong is an error about field i of the row just read.
func (t *table) wrong(i int, message string) error {
	line, column := t.csv.FieldPos(i)
	name := t.columns.Level
	switch i {
	case t.index.correct:
		name = t.columns.Correct
	case t.index.n:
		name = t.columns.N
	}
	return &PositionError{line, column, fmt.Sprintf("%s: %s", name, message)}
}
