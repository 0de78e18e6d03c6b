package studyfile

import (
	"io/fs"
	"strconv"
	"strings"

	"distal/experiments/study"
	"distal/experiments/value"
)

// Locate gives problems that were found after reading, and so have a path only,
// their places in the study file called name in fsys.
func Locate(fsys fs.FS, name string, problems study.Problems) study.Problems {
	text, err := readLimited(fsys, name, maxFileBytes)
	if err != nil {
		return problems
	}
	tree, _ := Parse(text)
	located := append(study.Problems(nil), problems...)
	for i := range located {
		if p := &located[i]; p.Pos.Line == 0 {
			p.Pos = find(tree, p.Path)
			p.Pos.File = name
		}
	}
	return located
}

// find is the place of the value at path, or of the nearest thing around it.
// Items of a list are named by their number, items[2], or their name, items.name.
func find(v value.Value, path string) value.Pos {
	pos := v.Pos
	for _, part := range strings.Split(strings.ReplaceAll(path, "[", ".["), ".") {
		next, ok := step(v, part)
		if !ok {
			break
		}
		v, pos = next, next.Pos
	}
	return pos
}

func step(v value.Value, part string) (value.Value, bool) {
	if next, ok := v.Get(part); ok {
		return next, true
	}
	if n, err := strconv.Atoi(strings.Trim(part, "[]")); err == nil && n >= 1 && n <= len(v.Items) {
		return v.Items[n-1], true
	}
	for _, item := range v.Items {
		if name, ok := item.Get("name"); ok && name.Str == part {
			return item, true
		}
	}
	return value.Value{}, false
}
