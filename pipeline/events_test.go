package pipeline

import (
	"strings"
	"testing"
)

func TestMoveEvents(t *testing.T) {
	in := "onset\tduration\ttrial_type\n0\t2\tflash\n12.5\t2\tflash, long\nn/a\t0\tn/a\n4.9666666667\t1.0\tdark\n"
	// 4.966... - 4.966... is 0 to six digits, and not -0.
	want := "onset\tduration\ttrial_type\n-4.966667\t2\tflash\n7.533333\t2\tflash, long\nn/a\t0\tn/a\n0\t1.0\tdark\n"
	got, faults := moveEvents("e.tsv", []byte(in), 4.9666666667)
	if len(faults) > 0 || string(got) != want {
		t.Errorf("got %q %v\nwant %q", got, faults, want)
	}
	// The column may stand anywhere; nothing else moves.
	got, faults = moveEvents("e.tsv", []byte("trial_type\tonset\r\na\t1\r\n"), 0.25)
	if len(faults) > 0 || string(got) != "trial_type\tonset\na\t0.75\n" {
		t.Errorf("got %q %v", got, faults)
	}
}

func TestEventsRefused(t *testing.T) {
	for in, says := range map[string]string{
		"duration\n1\n":                "line 1",
		"onset\tduration\n1\t2\n3\n":   "line 3",
		"onset\tduration\nAnna\t2\n":   "line 2",
		"onset\tduration\n1e999\t2\n":  "line 2",
		"onset\tduration\nNaN\t2\n":    "line 2",
		"onset\tonset\n1\t2\n":         "line 1",
		"onset\tduration\n\xff\xfe\t1": "line 2",
	} {
		_, faults := moveEvents("sub-01/func/e.tsv", []byte(in), 1)
		if len(faults) != 1 || faults[0].ID != "sidecar-syntax" || !strings.Contains(faults[0].Error(), says) {
			t.Errorf("%q: got %v, want one fault with %q", in, faults, says)
		}
		for _, f := range faults {
			if strings.Contains(f.Error(), "Anna") {
				t.Error("a cell's content was repeated; it can hold a name")
			}
		}
	}
}

func TestDecimal(t *testing.T) {
	for _, c := range []struct {
		v    float64
		d    int
		want string
	}{{0, 6, "0"}, {-1e-9, 6, "0"}, {1.5, 6, "1.5"}, {-0.25, 3, "-0.25"}, {100, 0, "100"}, {1e6, 6, "1000000"}, {2.0000004, 6, "2"}} {
		if got := decimal(c.v, c.d); got != c.want {
			t.Errorf("%g: %q, want %q", c.v, got, c.want)
		}
	}
}
