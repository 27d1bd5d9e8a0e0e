package pipeline

import "golang.org/x/sys/cpu"

// CPUFeatures names the processor's features that could matter to numeric code,
// as far as it has them. They change no result; the log part of a record
// holds them so that a difference could be traced.
func CPUFeatures() []string {
	var out []string
	for _, f := range []struct {
		name string
		has  bool
	}{
		{"avx", cpu.X86.HasAVX}, {"avx2", cpu.X86.HasAVX2}, {"avx512f", cpu.X86.HasAVX512F}, {"fma", cpu.X86.HasFMA},
		{"sse4.1", cpu.X86.HasSSE41}, {"sse4.2", cpu.X86.HasSSE42},
		{"asimd", cpu.ARM64.HasASIMD}, {"asimddp", cpu.ARM64.HasASIMDDP}, {"sve", cpu.ARM64.HasSVE},
	} {
		if f.has {
			out = append(out, f.name)
		}
	}
	return out
}
