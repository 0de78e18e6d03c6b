//go:build !wasip1

package study

import (
	"math"
	"strings"

	"distal/experiments/display"
	"distal/experiments/value"
)

// Schema collects the JSON Schema of one group of keys.
type Schema struct {
	properties []value.Member
	required   []value.Value
	doc        string
	wrap       func(value.Value) value.Value // from the group's schema to the property's
	children   []child
}

type child struct {
	at     int
	schema *Schema
}

func text(key, s string) value.Member { return value.Member{Key: key, Value: value.String(s)} }

func (s *Schema) add(key string, required bool, doc string, members ...value.Member) {
	if doc != "" {
		members = append(members, text("description", doc))
	}
	s.properties = append(s.properties, value.Member{Key: key, Value: value.Object(members...)})
	if required {
		s.required = append(s.required, value.String(key))
	}
}

func numberMembers(rule num) []value.Member {
	kind := "number"
	if rule.Whole {
		kind = "integer"
	}
	members := []value.Member{text("type", kind)}
	if !math.IsInf(rule.Min, 0) {
		members = append(members, value.Member{Key: "minimum", Value: value.Number(rule.Min)})
	}
	if !math.IsInf(rule.Max, 0) {
		members = append(members, value.Member{Key: "maximum", Value: value.Number(rule.Max)})
	}
	if !rule.Required {
		members = append(members, value.Member{Key: "default", Value: value.Number(rule.Default)})
	}
	return members
}

func (s *Schema) number(key string, rule num, doc string) {
	s.add(key, rule.Required, doc, numberMembers(rule)...)
}

func (s *Schema) text(key string, rule word, doc string) {
	s.add(key, rule.Required, doc, text("type", "string"))
}

func (s *Schema) flag(key string, standard bool, doc string) {
	s.add(key, false, doc, text("type", "boolean"), value.Member{Key: "default", Value: value.Bool(standard)})
}

func (s *Schema) choice(key string, names []string, required bool, doc string) {
	options := make([]value.Value, len(names))
	for i, n := range names {
		options[i] = value.String(n)
	}
	s.add(key, required, doc, value.Member{Key: "enum", Value: value.List(options...)})
}

func (s *Schema) list(key, kind string, required bool, doc string) {
	s.add(key, required, doc, value.Member{Key: "anyOf", Value: value.List(
		value.Object(text("type", kind)),
		value.Object(text("type", "array"), value.Member{Key: "items", Value: value.Object(text("type", kind))}),
	)})
}

func (s *Schema) sentence(key string, required bool, doc string) {
	s.add(key, required, doc, value.Member{Key: "anyOf", Value: value.List(
		value.Object(text("type", "string")),
		value.Object(text("type", "object"), value.Member{Key: "additionalProperties", Value: value.Object(text("type", "string"))}),
	)})
}

// settings describes parameter values, or with many a list of them for each.
func (s *Schema) settings(key string, many bool, doc string) {
	one := value.Member{Key: "type", Value: value.List(value.String("number"), value.String("string"), value.String("boolean"))}
	each := value.Object(one)
	if many {
		each = value.Object(value.Member{Key: "anyOf", Value: value.List(each,
			value.Object(text("type", "array"), value.Member{Key: "minItems", Value: value.Number(1)}, value.Member{Key: "items", Value: each}))})
	}
	s.add(key, false, doc, text("type", "object"), value.Member{Key: "additionalProperties", Value: each})
}

func (s *Schema) open(key string, required bool, doc string, wrap func(value.Value) value.Value) *Schema {
	inner := &Schema{doc: doc, wrap: wrap}
	s.children = append(s.children, child{len(s.properties), inner})
	s.add(key, required, doc)
	return inner
}

func (s *Schema) group(key string, required bool, doc string) *Schema {
	return s.open(key, required, doc, func(v value.Value) value.Value { return v })
}

func (s *Schema) named(key string, required bool, doc string) *Schema {
	return s.open(key, required, doc, func(v value.Value) value.Value {
		return value.Object(text("type", "object"), value.Member{Key: "additionalProperties", Value: v}, text("description", doc))
	})
}

func (s *Schema) listed(key string, required bool, doc string) *Schema {
	return s.open(key, required, doc, func(v value.Value) value.Value {
		return value.Object(text("type", "array"), value.Member{Key: "items", Value: v}, text("description", doc))
	})
}

// value is the schema of the group itself.
func (s *Schema) value() value.Value {
	properties := append([]value.Member(nil), s.properties...)
	for _, c := range s.children {
		properties[c.at].Value = c.schema.wrap(c.schema.value())
	}
	members := []value.Member{
		text("type", "object"),
		{Key: "properties", Value: value.Object(properties...)},
		{Key: "additionalProperties", Value: value.Bool(false)},
	}
	if len(s.required) > 0 {
		members = append(members, value.Member{Key: "required", Value: value.List(s.required...)})
	}
	if s.doc != "" {
		members = append(members, text("description", s.doc))
	}
	return value.Object(members...)
}

// JSONSchema is the JSON Schema (draft 2020-12) of study files, from the same
// walk that reads them.
func JSONSchema() value.Value {
	s := &Schema{}
	walkStudy(&codec{mode: describing, schema: s}, &Study{})
	v := s.value()
	for i := range v.Members {
		if v.Members[i].Key == "properties" {
			describeDisplays(v.Members[i].Value.Members)
		}
	}
	v.Members = append([]value.Member{
		text("$schema", "https://json-schema.org/draft/2020-12/schema"), text("title", "Distal study file"),
	}, v.Members...)
	return v
}

// describeDisplays puts one alternative for each kind of display in place of the common keys.
func describeDisplays(properties []value.Member) {
	for i := range properties {
		if properties[i].Key != "displays" {
			continue
		}
		var kinds []value.Value
		for _, k := range display.Kinds() {
			s := &Schema{doc: k.Doc}
			c := &codec{mode: describing, schema: s}
			walkDisplayPlace(c, &DisplaySpec{})
			s.add("kind", true, k.Doc, value.Member{Key: "const", Value: value.String(k.Name)})
			for j := range k.Params {
				describeParam(s, &k.Params[j])
			}
			kinds = append(kinds, s.value())
		}
		properties[i].Value = value.Object(text("type", "object"),
			value.Member{Key: "additionalProperties", Value: value.Object(value.Member{Key: "oneOf", Value: value.List(kinds...)})})
	}
}

func describeParam(s *Schema, p *display.Param) {
	doc := p.Doc
	if p.Unit != "" {
		doc += " [" + p.Unit + "]"
	}
	switch {
	case p.Type == display.Choice:
		s.choice(p.Key, p.Options, p.Required, doc)
	case p.Type == display.Boolean:
		s.flag(p.Key, len(p.Default) > 0 && p.Default[0] != 0, doc)
	case p.MaxCount > 1:
		s.list(p.Key, "number", p.Required, doc)
	default:
		rule := num{Min: p.Min, Max: p.Max, Required: p.Required, Whole: p.Type == display.Integer}
		if len(p.Default) > 0 {
			rule.Default = p.Default[0]
		}
		s.number(p.Key, rule, doc)
	}
}

// Reference is the documentation of every key of study files, in Markdown.
func Reference() string {
	var b strings.Builder
	b.WriteString("# Keys of a study file\n")
	writeReference(&b, "", JSONSchema())
	return b.String()
}

func writeReference(b *strings.Builder, path string, schema value.Value) {
	properties, ok := schema.Get("properties")
	if !ok {
		for _, inner := range []string{"additionalProperties", "items"} {
			if v, ok := schema.Get(inner); ok && v.Kind == value.Mapping {
				writeReference(b, path+".*", v)
			}
		}
		if v, ok := schema.Get("oneOf"); ok {
			for _, kind := range v.Items {
				writeReference(b, path, kind)
			}
		}
		return
	}
	if path != "" {
		b.WriteString("\n## " + strings.TrimPrefix(path, ".") + "\n\n")
	}
	if doc, ok := schema.Get("description"); ok {
		b.WriteString(doc.Str + "\n\n")
	}
	for _, m := range properties.Members {
		line := "- `" + m.Key + "`"
		if doc, ok := m.Value.Get("description"); ok {
			line += ": " + doc.Str
		}
		if enum, ok := m.Value.Get("enum"); ok {
			var options []string
			for _, o := range enum.Items {
				options = append(options, o.Str)
			}
			line += " One of " + strings.Join(options, ", ") + "."
		}
		low, hasLow := m.Value.Get("minimum")
		high, hasHigh := m.Value.Get("maximum")
		if hasLow && hasHigh {
			line += " From " + formatNumber(low.Num) + " to " + formatNumber(high.Num) + "."
		}
		if d, ok := m.Value.Get("default"); ok && d.Kind == value.Numeric {
			line += " Default " + formatNumber(d.Num) + "."
		}
		b.WriteString(line + "\n")
	}
	for _, m := range properties.Members {
		writeReference(b, path+"."+m.Key, m.Value)
	}
}
