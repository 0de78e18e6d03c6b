//go:build !wasip1

package study

import (
	"strings"

	"distal/experiments/value"
)

// Reference is the documentation of every key of study files, in Markdown: a
// table for each group of keys, from the same walk that reads them.
func Reference() string {
	var b strings.Builder
	b.WriteString("# Keys of a study file\n\n" +
		"A key in *italics* must be given. A range holds for numbers; words are those that can be chosen from.\n" +
		"A `*` in a heading stands for a name of your own, `[]` for the items of a list.\n")
	writeGroup(&b, "", JSONSchema())
	return b.String()
}

// writeGroup writes the table of the group of keys at path and those inside it.
func writeGroup(b *strings.Builder, path string, schema value.Value) {
	properties, ok := schema.Get("properties")
	if !ok {
		writeInside(b, path, schema)
		return
	}
	if kind, ok := constantKind(properties); ok {
		path += " with kind: " + kind
	}
	if path != "" {
		b.WriteString("\n## " + strings.TrimPrefix(path, ".") + "\n")
	}
	if doc, ok := schema.Get("description"); ok {
		b.WriteString("\n" + sentenceCase(doc.Str) + "\n")
	}
	b.WriteString("\n| Key | Unit | Range | Default | Meaning |\n| --- | --- | --- | --- | --- |\n")
	required, _ := schema.Get("required")
	for _, m := range properties.Members {
		writeKey(b, m, required)
	}
	for _, m := range properties.Members {
		writeGroup(b, path+"."+m.Key, m.Value)
	}
}

// writeInside goes on to what names, items or kinds are made of.
func writeInside(b *strings.Builder, path string, schema value.Value) {
	if v, ok := schema.Get("additionalProperties"); ok && v.Kind == value.Mapping {
		writeGroup(b, path+".*", v)
	}
	if v, ok := schema.Get("items"); ok {
		writeGroup(b, path+"[]", v)
	}
	if v, ok := schema.Get("oneOf"); ok {
		for _, kind := range v.Items {
			writeGroup(b, path, kind)
		}
	}
}

func constantKind(properties value.Value) (string, bool) {
	kind, _ := properties.Get("kind")
	name, ok := kind.Get("const")
	return name.Str, ok
}

func writeKey(b *strings.Builder, m value.Member, required value.Value) {
	key := "`" + m.Key + "`"
	for _, r := range required.Items {
		if r.Str == m.Key {
			key = "*" + key + "*"
		}
	}
	doc := ""
	if d, ok := m.Value.Get("description"); ok {
		doc = d.Str
	}
	cells := []string{key, unitCell(m.Key, doc), rangeCell(m.Value), defaultCell(m.Value), withoutUnit(doc)}
	for i := range cells {
		cells[i] = strings.ReplaceAll(cells[i], "|", "\\|")
	}
	b.WriteString("| " + strings.Join(cells, " | ") + " |\n")
}

// unitCell is the unit that a parameter's doc ends in, or that the key names.
func unitCell(key, doc string) string {
	if i := strings.LastIndex(doc, " ["); i >= 0 && strings.HasSuffix(doc, "]") {
		return doc[i+2 : len(doc)-1]
	}
	if _, u, ok := unitOf(key); ok {
		return strings.ReplaceAll(strings.ReplaceAll(strings.TrimPrefix(u.suffix, "_"), "_per_", "/"), "hz", "Hz")
	}
	if key == "minutes" {
		return "min"
	}
	return ""
}

func withoutUnit(doc string) string {
	if i := strings.LastIndex(doc, " ["); i >= 0 && strings.HasSuffix(doc, "]") {
		return doc[:i]
	}
	return doc
}

func rangeCell(schema value.Value) string {
	if options, ok := schema.Get("anyOf"); ok { // one, or a list of them
		schema = options.Items[0]
	}
	if enum, ok := schema.Get("enum"); ok {
		var names []string
		for _, o := range enum.Items {
			names = append(names, o.Str)
		}
		return strings.Join(names, ", ")
	}
	if c, ok := schema.Get("const"); ok {
		return c.Str
	}
	low, hasLow := schema.Get("minimum")
	high, hasHigh := schema.Get("maximum")
	kind, _ := schema.Get("type")
	switch {
	case hasLow && hasHigh && low.Num == high.Num:
		return formatNumber(low.Num)
	case hasLow && hasHigh:
		return formatNumber(low.Num) + " to " + formatNumber(high.Num)
	case hasLow:
		return formatNumber(low.Num) + " or more"
	case hasHigh:
		return formatNumber(high.Num) + " or less"
	case kind.Str == "boolean":
		return "true, false"
	case kind.Str == "string":
		return "text"
	case kind.Str == "number" || kind.Str == "integer":
		return "any number"
	}
	return ""
}

func defaultCell(schema value.Value) string {
	v, ok := schema.Get("default")
	switch {
	case !ok:
		return ""
	case v.Kind == value.Sequence:
		var list []string
		for _, item := range v.Items {
			list = append(list, formatNumber(item.Num))
		}
		return strings.Join(list, ", ")
	case v.Kind == value.Boolean && v.Bool:
		return "true"
	case v.Kind == value.Boolean:
		return "false"
	case v.Kind == value.Numeric:
		return formatNumber(v.Num)
	}
	return v.Str
}

func sentenceCase(s string) string {
	if s == "" {
		return s
	}
	return strings.ToUpper(s[:1]) + s[1:]
}
