package nifti_test

import (
	"fmt"
	"io"
	"os"
	"path/filepath"

	"evenkeel/nifti"
)

// Two volumes, written and read back.
func Example() {
	dir, err := os.MkdirTemp("", "example")
	if err != nil {
		panic(err)
	}
	defer os.RemoveAll(dir)
	path := filepath.Join(dir, "sub-helm_task-watch_bold.nii.gz")

	h := &nifti.Header{
		Version: 1, Datatype: nifti.Float32, XYZTUnits: 2 | 8, // mm, s
		Dim: [8]int64{4, 2, 2, 1, 2}, Pixdim: [8]float64{1, 3, 3, 4, 1.5},
		SformCode: 1, Srow: [3][4]float64{{-3, 0, 0, 3}, {0, 3, 0, -6}, {0, 0, 4, 9}},
	}
	f, err := os.Create(path)
	if err != nil {
		panic(err)
	}
	w, err := nifti.NewWriter(f, h, true)
	if err != nil {
		panic(err)
	}
	for t := range 2 {
		if err := w.WriteVolume([]float32{1, 2, 3, float32(4 + t)}); err != nil {
			panic(err)
		}
	}
	if err := w.Close(); err != nil {
		panic(err)
	}
	if err := f.Close(); err != nil {
		panic(err)
	}

	r, err := nifti.Open(path, nil)
	if err != nil {
		panic(err)
	}
	defer r.Close()
	nx, ny, nz, nt := r.Header().Size()
	sec, _ := r.Header().SecondsPerVolume()
	affine := r.Header().Affine()
	fmt.Println(nx, ny, nz, nt, sec, affine[:4])
	volume := make([]float32, nx*ny*nz)
	for {
		if err = r.ReadVolume(volume); err != nil {
			break
		}
		fmt.Println(volume)
	}
	fmt.Println(err == io.EOF)
	// Output:
	// 2 2 1 2 1.5 [-3 0 0 3]
	// [1 2 3 4]
	// [1 2 3 5]
	// true
}
