// Command evenkeel turns raw EPI BOLD runs of a BIDS dataset into series in which
// every voxel refers to one instant and one head position.
package main

import "os"

func main() { os.Exit(Run(os.Args, os.Stdin, os.Stdout, os.Stderr)) }
