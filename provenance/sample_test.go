package provenance

import (
	"encoding/json"
	"strings"
	"time"
)

// sample is a record of an invented run with something in every field.
func sample() *Record {
	digest := func(c string) string { return strings.Repeat(c, 64) }
	return &Record{
		Run:         "sub-01_task-harbour",
		DatasetName: "Lantern & Keel <trial>",
		Inputs: []File{
			{"series", "sub-01/func/sub-01_task-harbour_bold.nii.gz", digest("a"), 41943392},
			{"sidecar", "task-harbour_bold.json", digest("b"), 311},
			{"sidecar", "sub-01/func/sub-01_task-harbour_bold.json", digest("b"), 311}, // same content
		},
		Outputs: []File{
			{"steady-series", "sub-01/func/sub-01_task-harbour_desc-steady_bold.nii.gz", digest("c"), 73400320},
			{"pose-table", "sub-01/func/sub-01_task-harbour_desc-steady_pose.tsv", digest("0"), 0},
		},
		Settings: json.RawMessage(`{"time":"fourier","origin":"middle","reach":8}`),
		Accepted: []string{"tr-mismatch"},
		Faults: []json.RawMessage{
			json.RawMessage(`{"id":"tr-mismatch","level":"error"}`),
			json.RawMessage(`{"id":"multiband-mismatch","level":"warning"}`),
		},
		Values: []Value{
			{"RepetitionTime", "2.0", "task-harbour_bold.json"},
			{"SliceTiming", "[0,1,0.5,1.5]", "sub-01/func/sub-01_task-harbour_bold.json"},
			{"SliceEncodingDirection", `"k-"`, "sub-01/func/sub-01_task-harbour_bold.json"},
		},
		Stages: []Stage{
			{"estimate", json.RawMessage(`{"degree":3}`), json.RawMessage(`{"iterations":[4,5,4],"states":{"aligned":3}}`)},
			{"resample", json.RawMessage(`{"degree":5}`), nil},
		},
		Software: Software{
			Name: "evenkeel", Version: "0.1.0", Revision: "0123abc", Modified: true, GoVersion: "go1.26.0",
			Modules: []Module{{"example.org/hull", "v1.2.3"}, {"example.org/mast/v2", "v2.0.0"}},
		},
		Log: Log{
			Started: time.Date(2026, 3, 2, 9, 15, 0, 0, time.UTC), Ended: time.Date(2026, 3, 2, 9, 17, 41, 5e8, time.UTC),
			Architecture: "amd64", CPUFeatures: []string{"avx2", "fma"},
			StageSeconds: map[string]float64{"resample": 61.25, "estimate": 40.5},
		},
	}
}
