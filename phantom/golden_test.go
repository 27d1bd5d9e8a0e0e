package phantom

import (
	"encoding/json"
	"math"
	"os"
	"testing"
)

// golden is testdata/golden.json, made by testdata/generate.py with scipy.
type golden struct {
	DoubleGamma struct {
		T, H         []float64
		Peak, Trough float64
		PeakT        float64 `json:"peak_t"`
		TroughT      float64 `json:"trough_t"`
	} `json:"double_gamma"`
	Response struct {
		Events [][2]float64
		T      []float64
		Value  []float64
	}
	Turns []struct {
		XYZ    [3]float64
		Matrix [9]float64
	}
	Rice []struct{ Ratio, Mean, SD float64 }
}

func readGolden(t *testing.T) (g golden) {
	t.Helper()
	b, err := os.ReadFile("testdata/golden.json")
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(b, &g); err != nil {
		t.Fatal(err)
	}
	if len(g.DoubleGamma.T) == 0 || len(g.Response.T) == 0 || len(g.Turns) == 0 || len(g.Rice) == 0 {
		t.Fatal("testdata/golden.json: a table is empty")
	}
	return g
}

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: got %.12g, want %.12g within %.3g", what, got, want, tolerance)
	}
}
