package dataset

import (
	"fmt"
	"slices"
	"strings"
)

// Entity is one key-label pair of a name, such as {"sub", "01"}.
type Entity struct{ Key, Label string }

// String gives the pair as it stands in a name: "sub-01".
func (e Entity) String() string { return e.Key + "-" + e.Label }

// Entities are kept in the standard's order.
type Entities []Entity

// Order lists the entity keys of BIDS 1.11.1 in the order in which they must
// appear in a name (schema rules/entities; desc is always the last).
var Order = []string{
	"sub", "tpl", "ses", "cohort", "sample", "task", "tracksys", "acq", "nuc", "voi", "ce", "trc", "stain", "rec", "dir",
	"run", "mod", "echo", "flip", "inv", "mt", "part", "proc", "hemi", "space", "split", "recording", "chunk", "atlas", "seg",
	"scale", "res", "den", "label", "desc",
}

// indexKeys are the entities whose value is an index, a non-negative whole
// number possibly padded with zeros (schema objects/entities, format index).
// The value of every other entity is a label.
var indexKeys = map[string]bool{"run": true, "echo": true, "flip": true, "inv": true, "split": true, "chunk": true}

var orderOf = func() map[string]int {
	m := make(map[string]int, len(Order))
	for i, k := range Order {
		m[k] = i
	}
	return m
}()

// Get returns the label of an entity.
func (e Entities) Get(key string) (label string, ok bool) {
	for _, x := range e {
		if x.Key == key {
			return x.Label, true
		}
	}
	return "", false
}

// Without returns a copy that lacks the entity.
func (e Entities) Without(key string) Entities {
	out := make(Entities, 0, len(e))
	for _, x := range e {
		if x.Key != key {
			out = append(out, x)
		}
	}
	return out
}

// With returns a copy in which the entity has that label, in its place in the
// standard's order. An unknown key is a mistake of ours and panics.
func (e Entities) With(key, label string) Entities {
	rank, ok := orderOf[key]
	if !ok {
		panic("dataset: unknown entity " + key)
	}
	out := e.Without(key)
	at := len(out)
	for i, x := range out {
		if orderOf[x.Key] > rank {
			at = i
			break
		}
	}
	return slices.Insert(out, at, Entity{key, label})
}

// Within reports whether every entity of e stands in other with the same,
// whole label: "x+y" is not "x" (BIDS, inheritance principle, rule 2c).
func (e Entities) Within(other Entities) bool {
	for _, x := range e {
		if label, ok := other.Get(x.Key); !ok || label != x.Label {
			return false
		}
	}
	return true
}

// String joins the entities as in a name: "sub-01_task-rest".
func (e Entities) String() string {
	parts := make([]string, len(e))
	for i, x := range e {
		parts[i] = x.String()
	}
	return strings.Join(parts, "_")
}

// ParseEntities reads a name part such as a run's stem, "sub-01_task-rest".
// The empty string has no entities. The error says which rule is broken.
func ParseEntities(s string) (Entities, error) {
	if s == "" {
		return nil, nil
	}
	fields := strings.Split(s, "_")
	out := make(Entities, 0, min(len(fields), len(Order)))
	last := ""
	for _, f := range fields {
		key, label, dash := strings.Cut(f, "-")
		if !dash {
			return nil, fmt.Errorf("%s is not a key-label pair", quoted(f))
		}
		rank, known := orderOf[key]
		if !known {
			return nil, fmt.Errorf("%s is no entity of the standard", quoted(key))
		}
		if reason := checkLabel(key, label); reason != "" {
			return nil, fmt.Errorf("%s of entity %s %s", quoted(label), key, reason)
		}
		if last != "" {
			switch r := orderOf[last]; {
			case rank == r:
				return nil, fmt.Errorf("entity %s stands there twice", key)
			case rank < r:
				// A key that came earlier is a repetition, not only out of order.
				if _, twice := out.Get(key); twice {
					return nil, fmt.Errorf("entity %s stands there twice", key)
				}
				return nil, fmt.Errorf("entity %s stands after %s, which the standard's order puts later", key, last)
			}
		}
		last = key
		out = append(out, Entity{key, label})
	}
	return out, nil
}

// checkLabel returns what is wrong with a label, or "". The formats are those
// of schema objects/formats: label [0-9a-zA-Z+]+, index [0-9]+.
func checkLabel(key, label string) string {
	if label == "" {
		return "is empty"
	}
	for i := 0; i < len(label); i++ {
		c := label[i]
		digit := '0' <= c && c <= '9'
		if indexKeys[key] {
			if !digit {
				return "is not a whole number"
			}
			continue
		}
		if !digit && !alphabetic(c) && c != '+' {
			return "may hold only letters, digits and +"
		}
	}
	return ""
}

func alphabetic(c byte) bool { return 'a' <= c && c <= 'z' || 'A' <= c && c <= 'Z' }

// quoted makes a name fit for a message whatever it holds: in quotes, control
// characters escaped, and cut when very long.
func quoted(s string) string {
	const longest = 80
	if len(s) > longest {
		return fmt.Sprintf("%q...", s[:longest])
	}
	return fmt.Sprintf("%q", s)
}
