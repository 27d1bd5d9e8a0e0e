// Command evenkeel turns raw EPI BOLD runs of a BIDS dataset into series in which
// every voxel refers to one instant and one head position.
package main

import (
	"os"
	"os/signal"
	"syscall"
)

func main() {
	// A reader that has gone away (of the log, say) is an error of that writing and
	// must not end the work.
	signal.Ignore(syscall.SIGPIPE)
	os.Exit(Run(os.Args, os.Stdin, os.Stdout, os.Stderr))
}
