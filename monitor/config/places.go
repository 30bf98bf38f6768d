package config

import (
	"fmt"
	"strings"

	"github.com/pelletier/go-toml/v2/unstable"
)

// places finds where each key of a TOML text stands: the dotted path of a key, with the number
// of an element in [[arrays]], to the place of its value, or of the name of a table. The text
// must be valid TOML. This is the only use of the library's unstable parser.
func places(src *sourceText, text []byte) map[string]place {
	found := map[string]place{}
	counts := map[string]int{}
	var p unstable.Parser
	p.Reset(text)
	at := func(r unstable.Range) place {
		shape := p.Shape(r)
		return place{shape.Start.Line, src.characters(shape.Start.Line, shape.Start.Column)}
	}
	prefix := ""
	for p.NextExpression() {
		e := p.Expression()
		switch e.Kind {
		case unstable.Table, unstable.ArrayTable:
			path, where := keyOf(e, at)
			if e.Kind == unstable.ArrayTable {
				counts[path]++
				path = fmt.Sprintf("%s[%d]", path, counts[path]-1)
			}
			prefix = path + "."
			found[path] = where
		case unstable.KeyValue:
			keyValue(prefix, e, at, found)
		}
	}
	return found
}

// keyOf is the dotted path of a table or a key, and where its last part stands.
func keyOf(e *unstable.Node, at func(unstable.Range) place) (string, place) {
	var parts []string
	var where place
	for it := e.Key(); it.Next(); {
		parts = append(parts, string(it.Node().Data))
		where = at(it.Node().Raw)
	}
	return strings.Join(parts, "."), where
}

// keyValue notes a key, and what inline tables within its value hold.
func keyValue(prefix string, e *unstable.Node, at func(unstable.Range) place, found map[string]place) {
	path, where := keyOf(e, at)
	path = prefix + path
	value := e.Value()
	if value.Raw.Length > 0 {
		where = at(value.Raw)
	}
	found[path] = where
	if value.Kind != unstable.InlineTable {
		return
	}
	for it := value.Children(); it.Next(); {
		keyValue(path+".", it.Node(), at, found)
	}
}
