//go:build !amd64

package kernel

const haveAVX2 = false
