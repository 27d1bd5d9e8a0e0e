package pipeline

import (
	"bytes"
	"encoding/json"
	"math"
	"strconv"
)

// An object is a JSON object that keeps the order of its members, so that files
// read well and have the same bytes each time.
type object []member

type member struct {
	key   string
	value any
}

func (o *object) add(key string, value any) { *o = append(*o, member{key, value}) }

func (o object) MarshalJSON() ([]byte, error) {
	var b bytes.Buffer
	b.WriteByte('{')
	for i, m := range o {
		if i > 0 {
			b.WriteByte(',')
		}
		k, err := json.Marshal(m.key)
		if err != nil {
			return nil, err
		}
		v, err := json.Marshal(m.value)
		if err != nil {
			return nil, err
		}
		b.Write(k)
		b.WriteByte(':')
		b.Write(v)
	}
	b.WriteByte('}')
	return b.Bytes(), nil
}

// file writes the object with one member a line: long arrays stay on their line.
func (o object) file() []byte {
	var b bytes.Buffer
	b.WriteString("{\n")
	for i, m := range o {
		k, _ := json.Marshal(m.key)
		v, err := json.Marshal(m.value)
		if err != nil {
			panic("pipeline: value of " + m.key + " cannot be written as JSON: " + err.Error())
		}
		b.WriteString("  ")
		b.Write(k)
		b.WriteString(": ")
		b.Write(v)
		if i < len(o)-1 {
			b.WriteByte(',')
		}
		b.WriteByte('\n')
	}
	b.WriteString("}\n")
	return b.Bytes()
}

// A num is a number that may be undefined: null in JSON, n/a in tables.
type num float64

func (n num) MarshalJSON() ([]byte, error) {
	v := float64(n)
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return []byte("null"), nil
	}
	if v == 0 {
		v = 0 // no negative zero
	}
	return strconv.AppendFloat(nil, v, 'g', -1, 64), nil
}

// UnmarshalJSON reads null as NaN.
func (n *num) UnmarshalJSON(b []byte) error {
	if string(b) == "null" {
		*n = num(math.NaN())
		return nil
	}
	v, err := strconv.ParseFloat(string(b), 64)
	*n = num(v)
	return err
}

// rounded keeps that many digits after the point: figures say no more than
// their tables do.
func rounded(v float64, digits int) num {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return num(math.NaN())
	}
	r, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'f', digits, 64), 64)
	return num(r)
}

func roundedAll(v []float64, digits int) []num {
	out := make([]num, len(v))
	for i, x := range v {
		out[i] = rounded(x, digits)
	}
	return out
}
