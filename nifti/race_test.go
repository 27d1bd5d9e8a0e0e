//go:build race

package nifti

const raceEnabled = true
