package studyfile

import (
	"io/fs"
	"path"
	"strings"

	"distal/experiments/study"
	"distal/experiments/value"
)

// textKinds are the files of each language: folder/kind.language.md.
var textKinds = []string{"information", "consent", "instructions", "debrief"}

// absent stands for a text that cannot be read, so that it is reported once.
const absent = "- not there"

// texts are where the texts of a study are, as the study file says it.
type texts struct {
	fsys     fs.FS
	dir      string // of the study file
	folder   string
	version  string
	at       value.Member // the key texts
	problems study.Problems
}

// withTexts replaces texts: {folder, version} by the texts themselves.
func withTexts(fsys fs.FS, dir string, tree value.Value) (value.Value, study.Problems) {
	for i, m := range tree.Members {
		if m.Key != "texts" || m.Value.Kind != value.Mapping {
			continue
		}
		t := texts{fsys: fsys, dir: dir, at: m}
		t.where()
		members := append([]value.Member(nil), tree.Members...)
		members[i].Value = t.read(languages(tree))
		tree.Members = members
		return tree, t.problems
	}
	return tree, nil
}

// where reads folder and version.
func (t *texts) where() {
	t.folder, t.version = "texts", ""
	for _, m := range t.at.Value.Members {
		switch {
		case m.Key == "folder" && m.Value.Kind == value.Text:
			t.folder = m.Value.Str
			if !fs.ValidPath(path.Join(t.dir, t.folder)) {
				t.problem(m.Value.Pos, "folder", m.Value.Raw, "the folder of the texts must lie beside the study file, e.g. texts")
			}
		case m.Key == "version" && (m.Value.Kind == value.Text || m.Value.Kind == value.Numeric):
			t.version = m.Value.Raw
			if m.Value.Kind == value.Text {
				t.version = m.Value.Str
			}
		case m.Key == "folder" || m.Key == "version":
			t.problem(m.Value.Pos, m.Key, m.Value.Raw, "text is expected, not "+value.KindNames[m.Value.Kind])
			t.version = absent
		default:
			t.problem(m.KeyPos, m.Key, m.Key, "here only folder and version are given; the texts are Markdown files such as "+path.Join(t.folder, "consent.en.md"))
		}
	}
	if strings.TrimSpace(t.version) == "" {
		t.problem(t.at.KeyPos, "", t.at.Key, "the key version is missing: it says which consent text people agreed to, e.g. its date")
		t.version = absent
	}
}

func (t *texts) problem(pos value.Pos, key, offending, message string) {
	p := "texts"
	if key != "" {
		p += "." + key
	}
	t.problems = append(t.problems, study.Problem{Pos: pos, Path: p, Offending: offending, Message: message})
}

// read reads the texts of all languages.
func (t *texts) read(languages []value.Value) value.Value {
	sets := value.Object()
	sets.Pos = t.at.Value.Pos
	for _, language := range languages {
		if _, twice := sets.Get(language.Str); twice || !study.ValidLanguage(language.Str) {
			continue // reported by the study itself
		}
		set := value.Object(value.Member{Key: "version", KeyPos: t.at.KeyPos, Value: value.String(t.version)})
		set.Pos = t.at.Value.Pos
		for _, kind := range textKinds {
			text := value.String(t.text(path.Join(t.dir, t.folder, kind+"."+language.Str+".md"), language))
			text.Pos = t.at.KeyPos
			set.Members = append(set.Members, value.Member{Key: kind, KeyPos: t.at.KeyPos, Value: text})
		}
		sets.Members = append(sets.Members, value.Member{Key: language.Str, KeyPos: t.at.KeyPos, Value: set})
	}
	return sets
}

func (t *texts) text(name string, language value.Value) string {
	if !fs.ValidPath(name) {
		return absent // the folder was reported
	}
	text, err := readLimited(t.fsys, name, maxTextBytes)
	switch {
	case err != nil:
		t.problems = append(t.problems, study.Problem{Pos: language.Pos, Path: "about.languages", Offending: language.Raw, Message: err.Error()})
	case strings.TrimSpace(string(text)) == "":
		t.problem(t.at.KeyPos, "", t.at.Key, name+" is empty")
	default:
		return string(text)
	}
	return absent
}

// languages looks ahead to about.languages; without any it is English.
func languages(tree value.Value) []value.Value {
	about, _ := tree.Get("about")
	list, ok := about.Get("languages")
	switch {
	case !ok:
		english := value.String("en")
		english.Pos = tree.Pos
		return []value.Value{english}
	case list.Kind == value.Sequence:
		return list.Items
	}
	return []value.Value{list}
}
