//go:build !unix

package main

import (
	"os"
	"time"
)

func peakBytes(*os.ProcessState) int64 { return 0 }

var began = time.Now()

// processSeconds is the time by the clock, for want of another.
func processSeconds() float64 { return time.Since(began).Seconds() }
