package sparse

import "golang.org/x/sys/cpu"

// accelerated says that the AVX2 kernels run. Tests switch it off.
var accelerated = cpu.X86.HasAVX2 && cpu.X86.HasFMA
