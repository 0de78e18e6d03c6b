package studyfile

import (
	"fmt"
	"io"
	"io/fs"
	"strings"
	"unicode/utf8"

	"distal/experiments/study"
)

// Print writes each problem as file:line:column: key: message, followed by the
// line of the file in fsys that it is about and a mark under its place.
func Print(w io.Writer, fsys fs.FS, problems study.Problems) error {
	files := map[string][]string{}
	for _, p := range problems {
		if _, err := fmt.Fprintln(w, p.String()); err != nil {
			return err
		}
		lines, ok := files[p.Pos.File]
		if !ok {
			text, err := readLimited(fsys, p.Pos.File, maxFileBytes)
			if err == nil {
				lines = strings.Split(string(text), "\n")
			}
			files[p.Pos.File] = lines
		}
		if p.Pos.Line < 1 || p.Pos.Line > len(lines) {
			continue
		}
		line := strings.TrimSuffix(lines[p.Pos.Line-1], "\r")
		if _, err := fmt.Fprintf(w, "    %s\n    %s\n", line, underline(line, p)); err != nil {
			return err
		}
	}
	return nil
}

// underline marks the offending text of p in line, or its first character.
func underline(line string, p study.Problem) string {
	var b strings.Builder
	rest := line
	for column := 1; column < p.Pos.Column && rest != ""; column++ {
		r, size := utf8.DecodeRuneInString(rest)
		rest = rest[size:]
		if r != '\t' {
			r = ' '
		}
		b.WriteRune(r)
	}
	width := 1
	if p.Offending != "" && strings.HasPrefix(rest, p.Offending) {
		width = utf8.RuneCountInString(p.Offending)
	}
	return b.String() + strings.Repeat("^", width)
}
