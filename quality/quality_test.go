package quality

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
)

var ctx = context.Background()

// number reads JSON null as NaN.
type number float64

func (n *number) UnmarshalJSON(b []byte) error {
	if bytes.Equal(b, []byte("null")) {
		*n = number(math.NaN())
		return nil
	}
	return json.Unmarshal(b, (*float64)(n))
}

func floats(v []number) []float64 {
	f := make([]float64, len(v))
	for i, x := range v {
		f[i] = float64(x)
	}
	return f
}

// golden reads a file that testdata/generate.py wrote.
func golden(t *testing.T, name string, into any) {
	t.Helper()
	data, err := os.ReadFile(filepath.Join("testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	d := json.NewDecoder(bytes.NewReader(data))
	d.DisallowUnknownFields() // a case nobody checks is a defect
	if err := d.Decode(into); err != nil {
		t.Fatal(err)
	}
}

// oracle is the relative difference allowed between two evaluations of one
// formula in float64 that add in another order: a few hundred roundings of
// 1.1e-16 at worst, in sums of up to 35 000 terms of one sign.
const oracle = 1e-13

func near(t *testing.T, what string, got, want []float64, rel float64) {
	t.Helper()
	if d := cmp.Diff(want, got, cmpopts.EquateApprox(rel, 1e-300), cmpopts.EquateNaNs()); d != "" {
		t.Errorf("%s (-want +got):\n%s", what, d)
	}
}

// transpose turns voxel by volume into the layout of a series.
func transpose(y [][]float64) (data []float32, nv, nt int) {
	nv, nt = len(y), len(y[0])
	data = make([]float32, nv*nt)
	for v, row := range y {
		for t, x := range row {
			data[t*nv+v] = float32(x)
		}
	}
	return data, nv, nt
}

func noise(r *rand.Rand, nv, nt int, mean, sd float64) []float32 {
	data := make([]float32, nv*nt)
	for i := range data {
		data[i] = float32(mean + sd*r.NormFloat64())
	}
	return data
}

func mustPanic(t *testing.T, what string, f func()) {
	t.Helper()
	defer func() {
		if recover() == nil {
			t.Errorf("%s: no panic", what)
		}
	}()
	f()
}

func same(a, b float64) bool { return math.Float64bits(a) == math.Float64bits(b) }
