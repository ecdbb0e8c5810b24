package kernel

import "golang.org/x/sys/cpu"

func haveVector() bool { return cpu.X86.HasAVX2 && cpu.X86.HasFMA }
