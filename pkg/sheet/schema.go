package sheet

import (
	"bytes"
	"encoding/json"
	"fmt"
	"net/url"
	"reflect"
	"strconv"
	"strings"

	reflector "github.com/invopop/jsonschema"
	"github.com/santhosh-tekuri/jsonschema/v6"
)

// Schema is a JSON Schema ready to check a file with. It is safe for use by
// several goroutines at once.
type Schema struct {
	id       string
	root     any // as decoded
	compiled *jsonschema.Schema
}

// SchemaOf returns the JSON Schema (draft 2020-12) of v's type as text with a
// trailing newline: a struct with json tags. Fields without omitempty are
// required, keys that the struct lacks are refused, and a pointer without
// omitempty may be null, as may a pointer in a list. The tag jsonschema carries limits (minimum=1,
// enum=a,enum=b, minItems=2), jsonschema_description what a key means. The same
// type gives the same bytes. The id is an absolute URI.
func SchemaOf(v any, id, title string) ([]byte, error) {
	return schemaOf(v, id, title, false)
}

// OpenSchemaOf is SchemaOf for a form that later versions may add keys to:
// keys that the struct lacks are allowed.
func OpenSchemaOf(v any, id, title string) ([]byte, error) {
	return schemaOf(v, id, title, true)
}

func schemaOf(v any, id, title string, open bool) ([]byte, error) {
	if u, err := url.Parse(id); err != nil || !u.IsAbs() {
		return nil, fmt.Errorf("sheet: schema id %q: want an absolute uri", id)
	}
	r := reflector.Reflector{Anonymous: true, ExpandedStruct: true, AllowAdditionalProperties: open}
	s := r.Reflect(v)
	s.ID = reflector.ID(id)
	s.Title = title
	allowNull(s, reflect.TypeOf(v))
	text, err := json.Marshal(s)
	if err != nil {
		return nil, fmt.Errorf("sheet: schema %s: %w", id, err)
	}
	var out bytes.Buffer
	if err := json.Indent(&out, text, "", "  "); err != nil {
		return nil, fmt.Errorf("sheet: schema %s: %w", id, err)
	}
	out.WriteByte('\n')
	return out.Bytes(), nil
}

// allowNull lets the properties of a reflected schema be null where the Go
// field is a pointer that is written even when it is nil, and the entries of a
// list of pointers: a quantity that could not be measured is there and null.
func allowNull(root *reflector.Schema, t reflect.Type) {
	for t.Kind() == reflect.Pointer {
		t = t.Elem()
	}
	seen := map[reflect.Type]bool{}
	var visit func(t reflect.Type, s *reflector.Schema)
	visit = func(t reflect.Type, s *reflector.Schema) {
		for t.Kind() == reflect.Pointer || t.Kind() == reflect.Slice || t.Kind() == reflect.Array || t.Kind() == reflect.Map {
			t = t.Elem()
		}
		if t.Kind() != reflect.Struct || seen[t] {
			return
		}
		seen[t] = true
		if s == nil {
			s = root.Definitions[t.Name()]
		}
		for i := range t.NumField() {
			f := t.Field(i)
			name, options, _ := strings.Cut(f.Tag.Get("json"), ",")
			if name == "-" || !f.IsExported() {
				continue
			}
			if s != nil && s.Properties != nil && f.Type.Kind() == reflect.Pointer && !strings.Contains(options, "omit") {
				if p, ok := s.Properties.Get(name); ok {
					either := &reflector.Schema{AnyOf: []*reflector.Schema{p, {Type: "null"}}, Description: p.Description}
					p.Description = ""
					s.Properties.Set(name, either)
				}
			}
			if s != nil && s.Properties != nil && f.Type.Kind() == reflect.Slice && f.Type.Elem().Kind() == reflect.Pointer {
				if p, ok := s.Properties.Get(name); ok && p.Items != nil {
					p.Items = &reflector.Schema{AnyOf: []*reflector.Schema{p.Items, {Type: "null"}}}
				}
			}
			visit(f.Type, nil)
		}
	}
	visit(t, root)
}

// NewSchema reads a JSON Schema. It must carry an absolute $id and refer to
// nothing outside itself.
func NewSchema(text []byte) (*Schema, error) {
	root, err := jsonschema.UnmarshalJSON(bytes.NewReader(text))
	if err != nil {
		return nil, fmt.Errorf("sheet: schema: %w", err)
	}
	object, _ := root.(map[string]any)
	id, _ := object["$id"].(string)
	if u, err := url.Parse(id); err != nil || !u.IsAbs() {
		return nil, fmt.Errorf("sheet: schema: $id %q: want an absolute uri", id)
	}
	c := jsonschema.NewCompiler()
	c.UseLoader(noLoader{})
	if err := c.AddResource(id, root); err != nil {
		return nil, fmt.Errorf("sheet: schema %s: %w", id, err)
	}
	compiled, err := c.Compile(id)
	if err != nil {
		return nil, fmt.Errorf("sheet: schema %s: %w", id, err)
	}
	return &Schema{id: id, root: root, compiled: compiled}, nil
}

// noLoader keeps a schema from reaching for files or the network.
type noLoader struct{}

func (noLoader) Load(url string) (any, error) {
	return nil, fmt.Errorf("%s lies outside the schema", url)
}

// ID returns the $id of the schema.
func (s *Schema) ID() string { return s.id }

// keysAt returns the keys that the object at a place of the schema knows, in
// no particular order. The place is the URL of a violation: id#/pointer.
func (s *Schema) keysAt(schemaURL string) []string {
	_, fragment, _ := strings.Cut(schemaURL, "#")
	at := s.root
	for _, part := range strings.Split(strings.TrimPrefix(fragment, "/"), "/") {
		if part == "" {
			continue
		}
		part, err := url.PathUnescape(part)
		if err != nil {
			return nil
		}
		part = strings.NewReplacer("~1", "/", "~0", "~").Replace(part)
		switch x := at.(type) {
		case map[string]any:
			at = x[part]
		case []any:
			i, err := strconv.Atoi(part)
			if err != nil || i < 0 || i >= len(x) {
				return nil
			}
			at = x[i]
		default:
			return nil
		}
	}
	object, _ := at.(map[string]any)
	properties, _ := object["properties"].(map[string]any)
	var keys []string
	for k := range properties {
		keys = append(keys, k)
	}
	return keys
}
