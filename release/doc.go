// Package release holds build.sh, which builds the binaries that are given to others, and the
// tests that hold it to its promise: the same bytes for anyone who builds the same revision.
package release
