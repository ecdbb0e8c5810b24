//go:build !amd64

package kernel

func haveVector() bool { return false }

func addFIRAVX2(y *float32, n int, x, h *float32, taps int) { panic("kernel: no vector set here") }

func addProductAVX2(sr, si, ar, ai, br, bi *float32, n int) { panic("kernel: no vector set here") }
