package kernel

import "golang.org/x/sys/cpu"

var haveAVX2 = cpu.X86.HasAVX2
